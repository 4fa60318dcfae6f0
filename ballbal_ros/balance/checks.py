"""Checks of one tick's IMU and arm data, cheap enough for every tick: each returns what is wrong, or ""."""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

_SOON = 1e-9
_AT_THE_END = 0.99
_UNIT = 1e-3
_FASTER = 1.5
_ARM_NOISE = 1e-3


class ImuCheck:
    """Looks at IMU data. After a look without complaint ``rate`` and ``acceleration`` (None where not reported) hold
    the numbers.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters) -> None:
        imu = description.parameters.imu
        self._late = parameters.imu_timeout
        self._rate_end, self._acceleration_end = _AT_THE_END * imu.rate_range, _AT_THE_END * imu.acceleration_range
        self._least_end = min(self._rate_end, self._acceleration_end)
        self._stamp = -math.inf
        self._last: list[float] = []
        self.rate: list[float] = [0.0, 0.0, 0.0]
        self.acceleration: list[float] | None = None

    def restart(self) -> None:
        """The clock jumped: stamps count anew."""
        self._stamp = -math.inf

    def look(self, measured: Measurement, now: float) -> str:
        """What is wrong with this tick's IMU data; "" for nothing. ``now``: the tick's time, s."""
        stamp = measured.stamp if measured.imu_stamp is None else measured.imu_stamp
        if not stamp > self._stamp + _SOON:
            return "silent"
        if not now - stamp <= self._late:
            return "late"
        rate: list[float] = measured.imu_rate.tolist()
        acceleration = None if measured.imu_acceleration is None else measured.imu_acceleration.tolist()
        numbers = rate if acceleration is None else rate + acceleration
        if not math.isfinite(sum(numbers)):
            return "not finite"
        if numbers == self._last:
            return "frozen"
        self._last, self._stamp = numbers, stamp
        end = self._least_end
        if not -end < min(numbers) <= max(numbers) < end:
            if not max(map(abs, rate)) < self._rate_end:
                return "saturated"
            if acceleration is not None and not max(map(abs, acceleration)) < self._acceleration_end:
                return "saturated"
        self.rate, self.acceleration = rate, acceleration
        return ""


def unit_quaternion(quat: tuple[float, float, float, float]) -> bool:
    """Whether four numbers are a rotation: finite, and their norm 1 to 0.0005."""
    x, y, z, w = quat
    return abs(x * x + y * y + z * z + w * w - 1.0) < _UNIT


class ArmCheck:
    """Looks at arm positions; ``position`` [n] is what can be believed.

    A joint that jumps is believed to be where it was, and to move from there as its encoder goes on to say, until the
    encoder jumps back or :meth:`restart` is called. ``believed`` is the stamp, s, of the last sample that was taken
    in.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters, position: Array) -> None:
        self._late = parameters.arms_timeout
        self._fastest = _FASTER * description.velocity_limit
        self._period = parameters.loop.period
        self._tick_share = 1.0 / (self._fastest * self._period + _ARM_NOISE)
        self.position = np.array(position, float)
        self.believed = -math.inf
        self._offset = np.zeros(len(self.position))
        self._jumped = False

    def restart(self) -> None:
        """The clock jumped, or nothing moves by these numbers: believe what comes next."""
        self.believed = -math.inf
        self._offset[:], self._jumped = 0.0, False

    def look(self, measured: Measurement, now: float) -> str:
        """What is wrong with this tick's arm data; "" for nothing. ``now``: the tick's time, s."""
        stamp = measured.stamp if measured.arm_stamp is None else measured.arm_stamp
        if not stamp > self.believed + _SOON:
            # Arms may well report less often than the loop ticks.
            return "silent" if now - stamp > self._late else ""
        if not now - stamp <= self._late:
            return "late"
        raw = measured.arm_position
        passed = stamp - self.believed
        if passed == math.inf:
            if not math.isfinite(float(raw.sum())):
                return "not finite"
            self.position, self.believed = raw.copy(), stamp
            return ""
        if not self._jumped and passed <= 1.001 * self._period:
            share = (raw - self.position) * self._tick_share
            if float(share @ share) < 1.0:
                # All joints together moved less than any one may: the common case, and cheap.
                self.position, self.believed = raw, stamp
                return ""
        position = raw + self._offset if self._jumped else raw
        most = self._fastest * min(passed, self._late) + _ARM_NOISE
        if not (np.abs(position - self.position) <= most).all():
            if not math.isfinite(float(raw.sum())):
                return "not finite"
            far = np.abs(position - self.position) > most
            self._offset[far] = self.position[far] - raw[far]
            back = np.abs(raw - self.position) <= most
            self._offset[back] = 0.0
            self._jumped = bool(self._offset.any())
            position = raw + self._offset
        self.position, self.believed = position.copy(), stamp
        return "jump" if self._jumped else ""
