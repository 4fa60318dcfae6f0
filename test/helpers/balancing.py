"""What the tests of the loop's design need: the nonlinear robot at rest or moving, and one tick of a regulator."""

from __future__ import annotations

from functools import cache

import attrs
import numpy as np

from ballbal_ros.balance.gains import Gains, design
from ballbal_ros.balance.linear_model import posture_terms
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.declaration import load
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import body_rates, rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture
from helpers.robots import CONFIG, reach, shelver


@cache
def balance() -> BalanceParameters:
    """How the demo robot balances."""
    return load(BalanceParameters, CONFIG / "shelver" / "balance.yaml")


@cache
def reach_gains() -> Gains:
    """The demo robot's gains at the start of the plan `reach`."""
    return design(reach().body().posture(reach().first), shelver(), balance())


def accelerations(
    posture: Posture, description: RobotDescription, state: Array, torque: Array, couple: Array
) -> tuple[Array, Array]:
    """Lean acceleration [2] and ball acceleration [2] of the nonlinear robot, arms locked, heading held.

    `state` [8] with absolute lean; `torque` [2] by the drive on the body and `couple` [2] by the world on it, N m. The
    rows and the torque that they return are affine in the accelerations: five samples at once give them.
    """
    inertia, radius = description.drive.reflected_inertia, description.parameters.ball.radius
    trials = np.vstack((np.zeros(4), np.eye(4)))
    count = len(trials)
    single = posture_terms(posture)
    terms = attrs.evolve(
        single,
        **{
            field.name: np.repeat(getattr(single, field.name), count, axis=0)
            for field in attrs.fields(type(single))
            if isinstance(getattr(single, field.name), np.ndarray)
        },
    )
    outside = attrs.evolve(OutsideMotion.at_rest(count), ball_acceleration=trials[:, 2:])
    lean, rate = np.tile(state[:2], (count, 1)), np.tile(state[2:4], (count, 1))
    rows = balance_rows(terms, outside, lean, rate, trials[:, :2], radius, description.ball_apparent_mass)
    zero, rotation = np.zeros(count), rotation_lean(state[:2])
    body = body_rates(lean, rate, trials[:, :2], zero, zero).acceleration @ rotation.T
    ball = np.stack((-trials[:, 3], trials[:, 2], zero), axis=1) / radius
    rotors = (ball - body) @ (rotation @ inertia @ rotation.T)
    missing = np.hstack((rows.residual - couple, rows.torque[:, :2] - torque - couple - rotors[:, :2]))
    solution = np.linalg.solve((missing[1:] - missing[0]).T, -missing[0])
    return solution[:2], solution[2:]


class Tick:
    """One regulator, tick by tick, straight from the equations in `ballbal_ros.balance.regulator`."""

    def __init__(self, regulator: Regulator, limit: float = np.inf) -> None:
        self.regulator, self.limit = regulator, limit
        n, m, k = regulator.sizes
        self.state, self.disturbance = np.zeros(n), np.zeros(k)
        self.past = [np.zeros(m) for _ in range(regulator.plant.history)]

    def __call__(self, measured: Array) -> Array:
        """The input [m] that answers a measurement [p]."""
        r = self.regulator
        n, m, _ = r.sizes
        correction = r.filter_gain @ (measured - r.plant.output @ self.state)
        state, disturbance = self.state + correction[:n], self.disturbance + correction[n:]
        held = r.trim_input @ disturbance
        u = held - r.feedback[:, :n] @ (state - r.trim_state @ disturbance)
        for j, past in enumerate(self.past):
            u = u - r.feedback[:, n + j * m : n + (j + 1) * m] @ (past - held)
        u = np.clip(u, -self.limit, self.limit)
        acting = [u, *self.past]
        self.state = r.plant.transition @ state + r.plant.disturbance @ disturbance
        self.state = self.state + sum(gain @ at for gain, at in zip(r.plant.inputs, acting, strict=True))
        self.disturbance, self.past = disturbance, acting[: len(self.past)]
        return u
