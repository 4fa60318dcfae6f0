"""From what IMU, drive and arms say, each at its own times, to the rows of a record.

All are brought to one even grid of times by linear interpolation, so that a message that was lost on the way, or senses
that don't keep step, cost nothing but noise. The lean is the gyro integrated, drawn slowly to the accelerometer; the
ball is where the drive's angles and the gyro's turn alone have taken it: what the accelerometer adds would look like
a motion of the ball.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.weighing.record import Record

GAP, LONGEST_GAP = 0.1, 1.0
"""Silence of a sense that is bridged without loss, and that is bridged at all, s."""

_SLOWLY = 3.0
_FIRST_LOOK = 0.1


class _Series:
    """What one sense has said [N, n] and when [N], s; only what is still needed is kept."""

    def __init__(self, topic: str) -> None:
        self.topic = topic
        self._times: list[float] = []
        self._values: list[Array] = []
        self.gaps: list[tuple[float, float]] = []

    def add(self, time: float, value: Sequence[float] | Array) -> bool:
        """Take a value in; False where it is no newer than the last."""
        last = self.last
        if last - GAP < time <= last:
            return False
        if self._times and not last < time <= last + LONGEST_GAP:
            what = f"was silent for {time - last:.2f} s" if time > last else f"went back in time by {last - time:.2f} s"
            remedy = "weigh on a computer and a network that keep up"
            raise BallbalError(self.topic, f"{what} at {last:.2f} s", remedy)
        if self._times and time > last + GAP:
            self.gaps.append((last, time))
        self._times.append(time)
        self._values.append(np.array(value, float))
        return True

    @property
    def first(self) -> float:
        """Time of the first value that is kept."""
        return self._times[0] if self._times else math.inf

    @property
    def last(self) -> float:
        """Time of the newest value; minus infinity before the first."""
        return self._times[-1] if self._times else -math.inf

    def take(self, times: Array) -> Array:
        """The values at times [M] that it spans, [M, n]; what lies before the last of them is forgotten."""
        known, values = np.array(self._times), np.array(self._values)
        before = np.clip(np.searchsorted(known, times, side="right") - 1, 0, len(known) - 2)
        share = ((times - known[before]) / (known[before + 1] - known[before]))[:, None]
        found = (1.0 - share) * values[before] + share * values[before + 1]
        del self._times[: before[-1]], self._values[: before[-1]]
        return np.asarray(found)


class Gathering:
    """Fills a record with a row for each period, as far as all senses have told. Times are stamps, in s. Where one was
    silent for more than :data:`GAP` the record has a gap.

    Raises :class:`BallbalError` where a sense leaves a gap that can't be bridged, or its time goes back.
    """

    def __init__(self, description: RobotDescription, record: Record) -> None:
        self.record, self.heard = record, 0
        self._mounting = description.rotation_imu_in_base.T
        self._spin_map = description.drive.spin_map
        self._radius = description.parameters.ball.radius
        self._imu, self._drive, self._arms = _Series("imu/data"), _Series("drive_states"), _Series("joint_states")
        self._start, self._next, self._begun = -math.inf, -math.inf, False
        self._lean, self._heading, self._ball = [0.0, 0.0], 0.0, [0.0, 0.0]
        self._rate, self._angle = np.zeros(3), np.zeros(len(description.drive.names))

    def imu(self, time: float, rate: Sequence[float], force: Sequence[float]) -> None:
        """Rate [3], rad/s, and specific force [3], m/s², in IMU axes."""
        self.heard += self._imu.add(time, (*rate, *force))

    def drive(self, time: float, angle: Array) -> None:
        """Angles of the actuators [contacts], rad."""
        self._drive.add(time, angle)

    def arms(self, time: float, position: Array) -> None:
        """Arm positions [n]."""
        self._arms.add(time, position)

    @property
    def share(self) -> float:
        """How many IMU readings came for each row."""
        return self.heard / max(1, len(self.record))

    def gather(self) -> None:
        """Make rows of what has come."""
        series, period = (self._imu, self._drive, self._arms), self.record.period
        last = min(each.last for each in series)
        if not self._begun:
            self._start = self._next = max(each.first for each in series)
            if not last >= self._next + _FIRST_LOOK:
                return
        count = math.floor((last - self._next) / period + 1e-6)
        if count < 1:
            return
        for each in series:
            for gap in each.gaps:
                first, end = ((time - self._start) / period for time in gap)
                self.record.gaps.append((math.floor(first), math.ceil(end)))
            each.gaps.clear()
        times: Array = self._next + period * np.arange(count, dtype=float)
        self._next += count * period
        imu, drive, arms = (each.take(times) for each in series)
        rates, forces = imu[:, :3] @ self._mounting, imu[:, 3:] @ self._mounting
        if not self._begun:
            self._begun = True
            x, y, z = forces.mean(axis=0).tolist()
            self._lean = [math.atan2(y, z), math.atan2(-x, math.hypot(y, z))]
            self._rate, self._angle = rates[0], drive[0]
        for k, time in enumerate(times.tolist()):
            self._go(rates[k], drive[k], forces[k].tolist())
            self.record.add(time, tuple(self._lean), self._heading, tuple(self._ball), imu[k], arms[k])

    def _go(self, rate: Array, angle: Array, force: list[float]) -> None:
        """On by a period: lean, heading and ball."""
        period, (roll, pitch) = self.record.period, self._lean
        wx, wy, wz = (0.5 * (rate + self._rate)).tolist()
        turned = (self._spin_map @ (angle - self._angle)).tolist()
        self._rate, self._angle = rate, angle
        sr, cr, sp, cp = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)
        about = sr * wy + cr * wz
        rolled, pitched = period * (wx + sp / cp * about), period * (cr * wy - sr * wz)
        x = cp * turned[0] + sp * sr * turned[1] + sp * cr * turned[2]
        y = cr * turned[1] - sr * turned[2]
        ahead, aside = self._radius * (y + pitched), -self._radius * (x + rolled * cp)
        sin, cos = math.sin(self._heading), math.cos(self._heading)
        self._ball[0] += cos * ahead - sin * aside
        self._ball[1] += sin * ahead + cos * aside
        self._heading += period * about / cp
        down = math.atan2(force[1], force[2]), math.atan2(-force[0], math.hypot(force[1], force[2]))
        slowly = period / _SLOWLY
        self._lean[0] += rolled + slowly * (down[0] - roll - rolled)
        self._lean[1] += pitched + slowly * (down[1] - pitch - pitched)
