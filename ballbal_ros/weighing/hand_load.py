"""What is in the hands, from how the robot stands: weighted least squares on postures at rest.

A robot at rest on its ball has the mass moment of all that stands on it straight above the contact, but for what pulls
at it. With φ the lean, R(φ) from ``base_link`` to ``base_footprint``, μ(q) the mass moment of body and empty hands,
p_h and R_h a hand's place and turn in ``base_link``, and the load's mass centre at a + e in the hand's frame (a: where
it is taken to be, e: how far it is from there), each posture gives two equations (roll, pitch; N m)

    g S R μ(q) + b + g S R Σ_h [ (p_h + R_h a_h) m_h + R_h (m e)_h ] = noise,    S = [[0, -1, 0], [1, 0, 0]]

for the masses m_h, the moments (m e)_h and b, what else is wrong or pulls, which is the same in all postures. Where
the ball is not quite at rest, the moment that its mean acceleration takes is counted too. The unknown have priors: a
load that was told is as told, but for a share of its mass; an unknown one is anything that the hand can hold.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import attrs
import numpy as np

from ballbal_ros.balance.hand_load_parameters import HandLoadParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody

_LEVEL = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0]])
_OF_HAND = 4
_LEAST_SCALE = 0.1
# Speed at which rolling resistance is felt whole, m/s: a ball that rests sits in its dent (our own figure).
_CREEP = 1e-3
# Of a posture to the next: nearer ones have the lean's slow error in common, and count as one. That error's share of
# the variance of a reading (our own figure, from readings of the simulated robot).
_SAME_POSTURE = 0.05
_SLOW_SHARE = 0.5


@attrs.frozen(eq=False)
class Reading:
    """The robot at rest in one posture: arm position [n]; mean lean [2], rad; mean acceleration of the ball [2], m/s²,
    ``base_footprint`` axes, and its mean speed, m/s, which are small.
    """

    arm_position: Array
    lean: Array
    ball_acceleration: Array
    speed: float = 0.0


@attrs.frozen(eq=False)
class HandLoadEstimate:
    """What is found in a hand: ``mass`` and ``mass_error`` (one standard error), kg; ``center`` [3], m, in the hand
    link's frame, with ``center_error`` [3]; ``prior_error``, kg: how much was unknown before; from so many
    ``postures``. ``limit``: what the hand can hold, kg.
    """

    hand: str
    mass: float
    mass_error: float
    center: Array
    center_error: Array
    prior_error: float
    postures: int
    limit: float

    @property
    def load(self) -> Load:
        """The load as the mass model takes it: a point mass, and none where it can't be told from nothing."""
        held = self.mass > 2.0 * self.mass_error
        return Load(self.hand, min(self.mass, self.limit), self.center) if held else Load(self.hand, 0.0)


def good_enough(estimate: HandLoadEstimate, parameters: HandLoadParameters) -> bool:
    """The rule by which an estimate takes the place of what was believed: its standard error is at most
    ``use_error`` kg or ``use_share`` of the mass, whichever is more, and at most 0.7 of what it was before.
    """
    most = max(parameters.use_error, parameters.use_share * estimate.mass)
    return estimate.mass_error <= most and estimate.mass_error <= 0.7 * estimate.prior_error


@attrs.define(eq=False)
class _Unknown:
    """Prior of one hand: mass and its standard deviation, kg; where the mass centre is taken to be, and how far it may
    be from there in each axis, m.
    """

    mass: float
    mass_deviation: float
    at: Array
    center_deviation: float


class HandWeighing:
    """Weighs what the hands hold; see the module. ``parameters`` as in balance.yaml's ``hand_load``."""

    def __init__(
        self, description: RobotDescription, parameters: HandLoadParameters, loads: Iterable[Load] = ()
    ) -> None:
        self.parameters = parameters
        self._body = WholeBody(description)
        self._radius, self._apparent = description.parameters.ball.radius, description.ball_apparent_mass
        self._most = description.parameters.hands.load_limit
        self.hands = self._body.hands
        self._moment, self._moment_covariance = np.zeros(2), parameters.body_moment**2 * np.eye(2)
        self._readings: list[tuple[Array, Array, Array, float, float]] = []
        self._hands: dict[str, _Unknown] = {}
        for hand in self.hands:
            self._hands[hand] = self._told(Load(hand, 0.0))
        for load in loads:
            self._hands[load.hand] = self._told(load)

    def _told(self, load: Load) -> _Unknown:
        given = self.parameters
        return _Unknown(load.mass, given.said_share * load.mass, load.center.copy(), given.said_center)

    @property
    def postures(self) -> int:
        """How many postures count."""
        return len(self._readings)

    def tell(self, load: Load) -> None:
        """A load was announced: it is taken for what it is said to be."""
        self._forget_postures()
        self._hands[load.hand] = self._told(load)

    def open(self, hand: str) -> None:
        """Something in this hand was taken or put down, and nobody said what."""
        self._forget_postures()
        given = self.parameters
        self._hands[hand] = _Unknown(0.0, self._most, np.zeros(3), given.unknown_center)

    def disturb(self) -> None:
        """Something else pulls at the robot from now on: what was known of it is known no longer."""
        self._forget_postures()
        self._moment_covariance = self._moment_covariance + self._most**2 * np.eye(2)

    def _forget_postures(self) -> None:
        """Keep of the postures up to now what they say of the moment that pulls."""
        if self._readings:
            mean, covariance = self._solve()
            self._moment, self._moment_covariance = mean[:2], covariance[:2, :2]
            self._readings.clear()

    def add(self, reading: Reading) -> None:
        """Take a reading in. Those of one posture count as their weighted mean, its variance no less than half of what
        the best single reading has: part of the error is slow, and the same in all.
        """
        made = (reading.arm_position.copy(), *self._equations(reading))
        if self._readings and float(np.abs(made[0] - self._readings[-1][0]).max()) < _SAME_POSTURE:
            arms, design, moment, _, weight = self._readings.pop()
            share = 1.0 / (1.0 + weight * made[3])
            design, moment = design + share * (made[1] - design), moment + share * (made[2] - moment)
            weight += 1.0 / made[3]
            least = _SLOW_SHARE * self.parameters.reading_noise**2
            self._readings.append((arms, design, moment, max(1.0 / weight, least), weight))
            return
        self._readings.append((*made, 1.0 / made[3]))

    def missing_moment(self, reading: Reading) -> Array:
        """What pulls or is in the hands, as a moment about the contact [2] (roll, pitch), N m."""
        turn = rotation_lean(reading.lean)
        posture = self._body.posture(reading.arm_position)
        mu = turn @ (posture.mass * posture.center)
        lever = float(mu[2]) + self._radius * (posture.mass + self._apparent)
        x, y = reading.ball_acceleration.tolist()
        return -GRAVITY * (_LEVEL @ mu) + lever * np.array([-y, x])

    def lever(self, reading: Reading, hand: str) -> Array:
        """Moment about the contact [2, 4], N m, by a load's mass, kg, where its centre is taken to be, and by its mass
        moment about there, kg m, in the hand's axes.
        """
        turn = rotation_lean(reading.lean)
        place, hand_turn = self._body.hand_placement(hand, reading.arm_position)
        at = self._hands[hand].at
        return GRAVITY * _LEVEL @ turn @ np.column_stack((place + hand_turn @ at, hand_turn))

    def _equations(self, reading: Reading) -> tuple[Array, Array, float]:
        """Design [2, n], moment [2] and its variance. A ball that creeps is held back by the floor."""
        columns = [np.eye(2), *(self.lever(reading, hand) for hand in self.hands)]
        given = self.parameters
        held_back = given.rolling_moment * min(1.0, reading.speed / _CREEP)
        return np.hstack(columns), self.missing_moment(reading), given.reading_noise**2 + held_back**2

    def _solve(self) -> tuple[Array, Array]:
        """Mean and covariance of [b; (m, m e) of each hand]; twice, as the prior of m e scales with m."""
        size = 2 + _OF_HAND * len(self.hands)
        mean, covariance = np.zeros(size), np.zeros((size, size))
        masses = [unknown.mass for unknown in self._hands.values()]
        for _ in range(3):
            prior, spread = self._prior(masses)
            design = np.vstack([reading[1] for reading in self._readings]) if self._readings else np.zeros((0, size))
            seen = np.concatenate([reading[2] for reading in self._readings]) if self._readings else np.zeros(0)
            noise = np.diag(np.repeat([reading[3] for reading in self._readings], 2))
            gain = np.linalg.solve(design @ spread @ design.T + noise, design @ spread).T
            mean, covariance = prior + gain @ (seen - design @ prior), spread - gain @ design @ spread
            masses = mean[2::_OF_HAND].tolist()
        return mean, covariance

    def _prior(self, masses: list[float]) -> tuple[Array, Array]:
        size = 2 + _OF_HAND * len(self.hands)
        prior, spread = np.zeros(size), np.zeros((size, size))
        prior[:2], spread[:2, :2] = self._moment, self._moment_covariance
        for index, unknown in enumerate(self._hands.values()):
            k = 2 + _OF_HAND * index
            scale = max(abs(masses[index]), _LEAST_SCALE) * unknown.center_deviation
            known = unknown.mass_deviation <= 0.0
            prior[k] = unknown.mass
            spread[k, k] = unknown.mass_deviation**2
            spread[k + 1 : k + 4, k + 1 : k + 4] = 0.0 if known else scale**2 * np.eye(3)
        return prior, spread

    def surprise(self, believed: Mapping[str, Load]) -> float:
        """How far what is found is from what is ``believed`` to be in the hands: the squared distance of the moments
        that both make in the last posture, in units of its covariance (chi-square with two degrees of freedom).
        """
        if not self._readings:
            return 0.0
        mean, covariance = self._solve()
        off = mean[2:].copy()
        for index, hand in enumerate(self.hands):
            held = believed.get(hand)
            if held is not None:
                k = _OF_HAND * index
                off[k] -= held.mass
                off[k + 1 : k + _OF_HAND] -= held.mass * (held.center - self._hands[hand].at)
        design = self._readings[-1][1][:, 2:]
        moment = design @ off
        spread = design @ covariance[2:, 2:] @ design.T + 1e-6 * np.eye(2)
        return float(moment @ np.linalg.solve(spread, moment))

    def outside_moment(self) -> tuple[Array, Array]:
        """The moment b [2] (roll, pitch), N m, that is in no hand, and its standard error [2]."""
        mean, covariance = self._solve()
        return mean[:2], np.sqrt(np.diag(covariance)[:2])

    def estimate(self, hand: str) -> HandLoadEstimate:
        """What is found in a hand so far."""
        mean, covariance = self._solve()
        unknown = self._hands[hand]
        k = 2 + _OF_HAND * self.hands.index(hand)
        mass, error = float(mean[k]), np.sqrt(np.maximum(np.diag(covariance)[k : k + _OF_HAND], 0.0))
        # As in the prior: next to nothing has no centre that could be told.
        scale = max(abs(mass), _LEAST_SCALE)
        return HandLoadEstimate(
            hand,
            max(mass, 0.0),
            float(error[0]),
            unknown.at + mean[k + 1 : k + _OF_HAND] / scale if math.isfinite(mass) else unknown.at,
            error[1:] / scale,
            unknown.mass_deviation,
            self.postures,
            self._most,
        )
