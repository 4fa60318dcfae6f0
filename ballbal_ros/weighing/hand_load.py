"""What is in the hands, from how the robot stands: weighted least squares on postures at rest.

A robot at rest on its ball has the mass moment of all that stands on it straight above the contact, but for what pulls
at it. With φ the lean, R(φ) from ``base_link`` to ``base_footprint``, μ(q) the mass moment of body and empty hands,
p_h and R_h a hand's place and turn in ``base_link``, and the load's mass centre at a + e in the hand's frame (a: where
it is taken to be, e: how far it is from there), each posture gives two equations (roll, pitch; N m)

    g S R μ(q) + b + g S R Σ_h [ (p_h + R_h a_h) m_h + R_h (m e)_h ] = noise,    S = [[0, -1, 0], [1, 0, 0]]

for the masses m_h, the moments (m e)_h and b, what else is wrong or pulls, which is the same in all postures. Ball and
body are never quite at rest: the moment that their mean accelerations take is counted too, and that by which the floor
resists a ball that creeps. The unknown have priors: a load that was told is as told, but for a share of its mass; an
unknown one is anything that the hand can hold.

The error of a reading has two parts. The lean's is slow: the attitude forgets it within its time constant, so that
readings one after the other have it in common (a first-order Markov process), and is new in the next posture. That of
the rolling resistance comes and goes with the ball's creeping: how stiff a floor is, is known by half (common practice,
no source).
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
from ballbal_ros.weighing.reading import Reading

_LEVEL = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0]])
_OF_HAND = 4
_LEAST_SCALE = 0.1
# Of a posture to the next: nearer ones count as one.
_SAME_POSTURE = 0.05
# So many readings of one posture tell of its lean; what further ones add, an IMU's slow drift takes away (our own
# figure).
_MOST = 10
_ROLLING_SHARE = 0.5


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


@attrs.define(eq=False)
class _Rests:
    """The readings of one posture: weighted mean of their ``design`` [2, n] and ``moment`` [2]; by axis the sum of
    their weights [2], and what their rolling resistance adds to the variance, weighted [2].
    """

    arms: Array
    design: Array
    moment: Array
    weight: Array
    rolling: Array
    count: int = 1

    def take(self, other: _Rests) -> None:
        """Take one more reading in."""
        self.weight = self.weight + other.weight
        share = (other.weight / self.weight)[:, None]
        self.design = self.design + share * (other.design - self.design)
        self.moment = self.moment + share[:, 0] * (other.moment - self.moment)
        self.rolling = self.rolling + other.rolling
        self.count += 1

    def variance(self, lean: float, kept: float) -> Array:
        """Of the mean, by axis [2]: ``lean`` is one reading's variance by the lean, of whose error the next one has
        the share ``kept``, the one after that its square and so on.
        """
        n = min(self.count, _MOST)
        common = ((1.0 + kept) / (1.0 - kept) - 2.0 * kept * (1.0 - kept**n) / (n * (1.0 - kept) ** 2)) / n
        return np.asarray(lean * common + self.rolling / self.weight**2)


class HandWeighing:
    """Weighs what the hands hold; see the module. ``parameters`` as in balance.yaml's ``hand_load``; ``attitude_time``,
    s: that within which the attitude forgets an error of the lean, a reading taking one second.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: HandLoadParameters,
        loads: Iterable[Load] = (),
        attitude_time: float = 3.0,
    ) -> None:
        self.parameters = parameters
        self._kept = math.exp(-1.0 / attitude_time)
        self._body = WholeBody(description)
        self._radius, self._apparent = description.parameters.ball.radius, description.ball_apparent_mass
        self._most = description.parameters.hands.load_limit
        self.hands = self._body.hands
        self._moment, self._moment_covariance = np.zeros(2), parameters.body_moment**2 * np.eye(2)
        self._readings: list[_Rests] = []
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
        """Take a reading in. Those of one posture, one after the other, count as their weighted mean."""
        made = self._equations(reading)
        if self._readings and float(np.abs(made.arms - self._readings[-1].arms).max()) < _SAME_POSTURE:
            self._readings[-1].take(made)
        else:
            self._readings.append(made)

    def missing_moment(self, reading: Reading) -> Array:
        """What pulls or is in the hands, as a moment about the contact [2] (roll, pitch), N m."""
        turn = rotation_lean(reading.lean)
        posture = self._body.posture(reading.arm_position)
        mu = turn @ (posture.mass * posture.center)
        lever = float(mu[2]) + self._radius * (posture.mass + self._apparent)
        x, y = reading.ball_acceleration.tolist()
        inertia = posture.inertia_about_ball[:2, :2] + self._radius * float(mu[2]) * np.eye(2)
        moving = lever * np.array([-y, x]) + inertia @ reading.lean_acceleration
        return -GRAVITY * (_LEVEL @ mu) + moving - self._resistance(reading)

    def _resistance(self, reading: Reading) -> Array:
        """Moment [2], N m, by which the floor resists the ball's creeping."""
        x, y = reading.creep.tolist()
        return self.parameters.rolling_moment * np.array([y, -x])

    def lever(self, reading: Reading, hand: str) -> Array:
        """Moment about the contact [2, 4], N m, by a load's mass, kg, where its centre is taken to be, and by its mass
        moment about there, kg m, in the hand's axes.
        """
        turn = rotation_lean(reading.lean)
        place, hand_turn = self._body.hand_placement(hand, reading.arm_position)
        at = self._hands[hand].at
        return GRAVITY * _LEVEL @ turn @ np.column_stack((place + hand_turn @ at, hand_turn))

    def _equations(self, reading: Reading) -> _Rests:
        columns = [np.eye(2), *(self.lever(reading, hand) for hand in self.hands)]
        rolling = (_ROLLING_SHARE * self._resistance(reading)) ** 2
        weight = 1.0 / (self.parameters.reading_noise**2 + rolling)
        arms, moment = reading.arm_position.copy(), self.missing_moment(reading)
        return _Rests(arms, np.hstack(columns), moment, weight, weight**2 * rolling)

    def _solve(self) -> tuple[Array, Array]:
        """Mean and covariance of [b; (m, m e) of each hand]; twice, as the prior of m e scales with m."""
        size = 2 + _OF_HAND * len(self.hands)
        mean, covariance = np.zeros(size), np.zeros((size, size))
        masses = [unknown.mass for unknown in self._hands.values()]
        lean, kept = self.parameters.reading_noise**2, self._kept
        for _ in range(3):
            prior, spread = self._prior(masses)
            design = np.vstack([np.zeros((0, size)), *(rests.design for rests in self._readings)])
            seen = np.concatenate([np.zeros(0), *(rests.moment for rests in self._readings)])
            noise = np.diag(np.concatenate([np.zeros(0), *(rests.variance(lean, kept) for rests in self._readings)]))
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
        design = self._readings[-1].design[:, 2:]
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
