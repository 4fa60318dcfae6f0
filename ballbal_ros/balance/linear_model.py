"""The linear model of the balancing robot at one posture, arms locked, about its equilibrium lean.

With the balance rows and the drive torque N of :mod:`ballbal_ros.robot.balance_rows` linearised at rest,

    D φ + M φ'' + C p'' = d                          (moment about the contact)
    N_φ φ + N_φ'' φ'' + N_a p'' = τ + d + J (ω_ball' - ω_body')      (moment about the ball's centre)

with ω_ball' = (-y''/r, x''/r) and J the drive's reflected inertia in ``base_footprint``. d is a couple on the body,
which is what a mass centre in error or an unknown load amounts to. Solved for φ'' and p'' this is x' = A x + B τ + E
d with x = [roll, pitch, roll_rate, pitch_rate, x, y, vx, vy] (rad, m, s), τ = [τ_x, τ_y] and d in N m, in
``base_footprint`` axes. Lean is counted from the equilibrium. The heading has its own model: a pure inertia against
the floor, which holds the ball's spin.
"""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import BalanceRows, OutsideMotion, UpperBodyTerms, balance_rows
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture

STATES = ("roll", "pitch", "roll_rate", "pitch_rate", "x", "y", "vx", "vy")
AXES = ("x", "y")
LEAN, LEAN_RATE, BALL, BALL_RATE = slice(0, 2), slice(2, 4), slice(4, 6), slice(6, 8)


@attrs.frozen(eq=False)
class LinearModel:
    """x' = ``state_matrix`` [8, 8] x + ``torque_matrix`` [8, 2] τ + ``moment_matrix`` [8, 2] d, as the module says.

    ``equilibrium_lean`` [2], rad. ``ball_held_rate`` and ``open_loop_pole`` are (roll, pitch), rad/s: how fast a fall
    grows with the ball held still, and with the ball free to roll and no torque. ``heading_inertia`` in kg m², rotors
    included.
    """

    equilibrium_lean: Array
    state_matrix: Array
    torque_matrix: Array
    moment_matrix: Array
    heading_inertia: float
    ball_held_rate: tuple[float, float]
    open_loop_pole: tuple[float, float]
    ball_radius: float

    @property
    def measurement_matrix(self) -> Array:
        """[6, 8]: what is measured, [roll, pitch, roll_rate, pitch_rate, x, y]."""
        return np.eye(6, 8)

    @property
    def heading_matrices(self) -> tuple[Array, Array, Array]:
        """(A, B, E) of [heading, heading_rate] (rad, rad/s) with drive torque and outside moment about z (N m)."""
        turn = np.array([[0.0], [1.0 / self.heading_inertia]])
        return np.array([[0.0, 1.0], [0.0, 0.0]]), turn, turn.copy()


def posture_terms(posture: Posture) -> UpperBodyTerms:
    """One sample of the upper body at rest in a posture."""
    terms = UpperBodyTerms.empty(1, posture.mass)
    terms.moment[0] = posture.mass * posture.center
    terms.inertia[0] = posture.inertia_about_ball
    return terms


def rows_at_rest(posture: Posture, description: RobotDescription, lean: Array) -> BalanceRows:
    """The balance rows and their derivatives at rest, arms locked, at a lean [2] in rad."""
    zero = np.zeros((1, 2))
    radius = description.parameters.ball.radius
    return balance_rows(
        posture_terms(posture),
        OutsideMotion.at_rest(1),
        lean.reshape(1, 2),
        zero,
        zero,
        radius,
        description.ball_apparent_mass,
    )


def linear_model(posture: Posture, description: RobotDescription) -> LinearModel:
    """Linearise at a posture. Raises :class:`ModelError` where the mass centre is not above the ball's centre."""
    if posture.center[2] <= 0.0:
        raise ModelError(
            description.name,
            f"the mass centre is at z = {posture.center[2]:.3f} m in base_link",
            "it must be above the ball's centre",
        )
    lean = np.array(posture.equilibrium_lean)
    rows = rows_at_rest(posture, description, lean)
    rotation = rotation_lean(lean)
    reflected = rotation @ description.drive.reflected_inertia @ rotation.T
    radius = description.parameters.ball.radius
    stiffness, inertia, by_ball = rows.by_lean[0][:, :2], rows.by_lean[0][:, 4:], rows.by_ball_acceleration[0]
    torque_by = rows.wrench_by_lean[0][3:5]
    lever = float((rotation @ (posture.mass * posture.center))[2])
    turn = np.array([[0.0, -1.0], [1.0, 0.0]])
    body_turn = np.array([[np.cos(lean[1]), 0.0], [0.0, 1.0], [-np.sin(lean[1]), 0.0]])
    accelerations = np.block(
        [
            [inertia, by_ball],
            [torque_by[:, 4:] + reflected[:2] @ body_turn, lever * turn - reflected[:2, :2] @ turn / radius],
        ]
    )
    driven = np.linalg.solve(
        accelerations,
        np.block([[-stiffness, np.zeros((2, 2)), np.eye(2)], [-torque_by[:, :2], np.eye(2), np.eye(2)]]),
    )
    state_matrix = np.zeros((8, 8))
    state_matrix[LEAN, LEAN_RATE] = state_matrix[BALL, BALL_RATE] = np.eye(2)
    torque_matrix, moment_matrix = np.zeros((8, 2)), np.zeros((8, 2))
    for rate, block in ((LEAN_RATE, driven[:2]), (BALL_RATE, driven[2:])):
        state_matrix[rate, LEAN], torque_matrix[rate], moment_matrix[rate] = block[:, :2], block[:, 2:4], block[:, 4:]
    about_ball = rotation @ posture.inertia_about_ball @ rotation.T
    return LinearModel(
        equilibrium_lean=read_only(lean),
        state_matrix=read_only(state_matrix),
        torque_matrix=read_only(torque_matrix),
        moment_matrix=read_only(moment_matrix),
        heading_inertia=float(about_ball[2, 2] + reflected[2, 2]),
        ball_held_rate=_growth_rates(-np.linalg.solve(inertia, stiffness)),
        open_loop_pole=_growth_rates(driven[:2, :2]),
        ball_radius=radius,
    )


def ball_held_rate(posture: Posture, description: RobotDescription) -> tuple[float, float]:
    """λ of physics.md for (roll, pitch), rad/s: how fast a fall grows while the ball is held still."""
    return linear_model(posture, description).ball_held_rate


def open_loop_pole(posture: Posture, description: RobotDescription) -> tuple[float, float]:
    """The unstable poles of (roll, pitch), rad/s, with the ball free to roll and no drive torque."""
    return linear_model(posture, description).open_loop_pole


def _growth_rates(lean_acceleration_by_lean: Array) -> tuple[float, float]:
    """Square roots of the two eigenvalues of φ'' = G φ, that of the mode which is more roll first."""
    values, vectors = np.linalg.eig(lean_acceleration_by_lean)
    weight = np.abs(vectors)
    rates = np.sqrt(np.real(values))
    if weight[0, 0] * weight[1, 1] < weight[0, 1] * weight[1, 0]:
        rates = rates[::-1]
    return float(rates[0]), float(rates[1])
