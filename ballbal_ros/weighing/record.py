"""What is recorded while the robot weighs itself, and the motion that it shows.

The loop's own lean is drawn towards the vertical by the acceleration that its *model* expects, and as long as the
model is wrong it is off by milliradians for seconds after each move. Here the gyro is integrated, and the acceleration
of the IMU is measured, from encoders and gyro, so that what the accelerometer shows besides is the vertical, whatever
the masses are:

    R_integrated f - a_measured = (-g δ_pitch, g δ_roll, g)

δ, averaged over most of a second either way, is the gyro's drift.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np
from scipy.integrate import cumulative_trapezoid
from scipy.ndimage import gaussian_filter1d

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array, apply, cross
from ballbal_ros.robot.attitude import body_rates, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.weighing.regressor import Motion

_SMOOTHING = 0.08
_EDGE = 4.0
_DRIFT = 0.7
_NEAR = 1.0
# Below this speed, m/s, it is not told in which direction the ball rolls.
_CRAWL, _SHORT = 2e-3, 0.02


@attrs.define(eq=False)
class Record:
    """A row every ``period`` s: time, lean as the loop shows it (roll, pitch), heading, ball x, y in ``odom``, rate and
    specific force in IMU axes, arms as measured; SI units. ``rests``: the spans [first, last) of rows in which it stood
    still to be weighed; ``swings``: those in which it moved and may be looked at. ``moves``: when each arm motion was
    commanded to begin, s, and which. ``gaps``: spans of rows that were only interpolated, as nothing was heard.
    """

    period: float
    _rows: list[tuple[float, ...]] = attrs.field(factory=list)
    _arms: list[Array] = attrs.field(factory=list)
    rests: list[tuple[int, int]] = attrs.field(factory=list)
    swings: list[tuple[int, int]] = attrs.field(factory=list)
    moves: list[tuple[float, JointPath]] = attrs.field(factory=list)
    gaps: list[tuple[int, int]] = attrs.field(factory=list)

    def __len__(self) -> int:
        return len(self._rows)

    def add(
        self, time: float, lean: Sequence[float], heading: float, ball: Sequence[float], imu: Array, arms: Array
    ) -> None:
        """Take one tick; ``imu`` [6]: rate, rad/s, and specific force, m/s², in IMU axes; arms [n] as measured."""
        self._rows.append((time, lean[0], lean[1], heading, ball[0], ball[1], *imu.tolist()))
        self._arms.append(arms)

    @property
    def times(self) -> Array:
        """Time of each row, s."""
        return np.array([row[0] for row in self._rows])

    @property
    def arms(self) -> Array:
        """Measured arm positions [N, n]."""
        return np.array(self._arms)

    @property
    def farthest(self) -> float:
        """How far the ball went from where it began, m."""
        ball = np.array(self._rows)[:, 4:6]
        return float(np.hypot(*(ball - ball[0]).T).max())

    def recent(self, span: float) -> tuple[Array, Array]:
        """Lean [M, 2] and ball [M, 2] of the last ``span`` s."""
        rows = np.array(self._rows[-max(2, round(span / self.period)) :])
        return rows[:, 1:3], rows[:, 4:6]

    def motion(self, description: RobotDescription) -> Motion:
        """How it moved, all rows: smoothed by a Gaussian of 50 ms, all alike so that none lags another, and the lean
        from gyro and accelerometer (see the module). ``description`` says how the IMU is mounted.
        """
        rows, arms = np.array(self._rows), np.array(self._arms)
        rate = 1.0 / self.period

        def derivative(values: Array, order: int, smoothing: float = _SMOOTHING) -> Array:
            """The smoothed values or their derivative in time of that order; ``smoothing`` in s."""
            # Two first derivatives make the second: a truncated second derivative of a Gaussian does not add up to 0.
            width = smoothing * rate / math.sqrt(max(order, 1))
            for _ in range(max(order, 1)):
                values = gaussian_filter1d(values, width, axis=0, order=min(order, 1), mode="nearest", truncate=_EDGE)
            return np.asarray(values * rate**order)

        heading, ball = np.unwrap(rows[:, 3]), rows[:, 4:6]
        sin, cos = np.sin(heading), np.cos(heading)
        into = np.stack((np.stack((cos, sin), axis=-1), np.stack((-sin, cos), axis=-1)), axis=-2)
        velocity = derivative(ball, 1, _SHORT)
        rolling = derivative(velocity / np.sqrt((velocity**2).sum(axis=1, keepdims=True) + _CRAWL**2), 0)
        turned = [apply(into, each) for each in (rolling, derivative(ball, 2), derivative(ball, 3))]
        turning = [derivative(heading, order) for order in (1, 2)]
        mounting = description.rotation_imu_in_base.T
        integrated = self._integrated(rows[:, 1:3], rows[:, 6:9] @ mounting)
        lean = [derivative(integrated, order) for order in (0, 1, 2)]
        force = derivative(rows[:, 9:12], 0) @ mounting
        lean[0] = lean[0] + self._drift(description, lean, turning, turned[1], force)
        joints = [derivative(arms, order) for order in (0, 1, 2)]
        return Motion(*lean, *turning, *turned, *joints)

    def _integrated(self, shown: Array, rate: Array) -> Array:
        """The lean [N, 2] from the body's rate [N, 3], rad/s; it begins as shown, whose sines are near enough."""
        roll, pitch = shown.T
        turning = np.sin(roll) * rate[:, 1] + np.cos(roll) * rate[:, 2]
        rates = np.stack(
            (rate[:, 0] + np.tan(pitch) * turning, np.cos(roll) * rate[:, 1] - np.sin(roll) * rate[:, 2]), axis=-1
        )
        turned = cumulative_trapezoid(rates, dx=self.period, axis=0)
        return np.concatenate((shown[:1], shown[0] + turned))

    def _drift(
        self, description: RobotDescription, lean: list[Array], turning: list[Array], ball: Array, force: Array
    ) -> Array:
        """What the integrated lean is wrong by [N, 2], rad, from the specific force [N, 3] in the body's axes."""
        rates = body_rates(lean[0], lean[1], lean[2], turning[0], turning[1])
        place = np.array(description.parameters.imu.position)
        swing = cross(rates.acceleration, np.broadcast_to(place, rates.rate.shape))
        swing += cross(rates.rate, cross(rates.rate, np.broadcast_to(place, rates.rate.shape)))
        level = apply(rotation_lean(lean[0]), force - swing)
        off = np.stack((level[:, 1] - ball[:, 1], ball[:, 0] - level[:, 0]), axis=-1) / GRAVITY
        return np.asarray(gaussian_filter1d(off, _DRIFT / self.period, axis=0, mode="nearest", truncate=_EDGE))

    def at_rest(self, motion: Motion) -> Motion:
        """One sample for each rest: means over it."""
        return _together(
            [
                Motion(**{f.name: getattr(motion, f.name)[first:last].mean(axis=0)[None] for f in attrs.fields(Motion)})
                for first, last in self.rests
            ]
        )

    def moving(self, motion: Motion, rate: float) -> Motion:
        """Samples of the swings at ``rate`` Hz, but those near a gap, whose lean is wrong by what the gyro didn't tell.

        Raises :class:`BallbalError` where hardly any are left.
        """
        step, near = max(1, round(1.0 / (rate * self.period))), round(_NEAR / self.period)
        heard, count = np.ones(len(self), bool), 0
        for first, last in self.gaps:
            heard[max(0, first - near) : last + near] = False
        samples = []
        for first, last in self.swings:
            wanted = np.arange(first, last, step)
            samples.append(wanted[heard[wanted]])
            count += len(wanted)
        if sum(map(len, samples)) < 0.5 * count:
            what = f"{len(self.gaps)} gaps in what was heard leave less than half of the swing"
            raise BallbalError("weigh-in", what, "weigh on a computer and a network that keep up")
        return _together([motion.at(each) for each in samples])


def _together(motions: Sequence[Motion]) -> Motion:
    return Motion(**{f.name: np.concatenate([getattr(m, f.name) for m in motions]) for f in attrs.fields(Motion)})
