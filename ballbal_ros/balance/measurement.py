"""What one tick of the loop measures."""

from __future__ import annotations

import math

import attrs

from ballbal_ros.robot.arrays import Array


@attrs.define(eq=False)
class Measurement:
    """One tick's input; made once and filled anew each tick, as the loop is fast. ``arm_position`` is kept by the
    loop: a new array each tick.

    ``stamp`` in s is the tick's; ``imu_quat_xyzw`` the IMU's orientation in ``odom`` or None; ``imu_rate`` [3] rad/s
    and ``imu_acceleration`` [3] m/s² in IMU axes (REP-145: at rest with z up it reads +g) or None; ``drive_angle`` [n]
    rad, relative to the body; ``arm_position`` [joints].

    ``imu_stamp``, ``drive_stamp`` and ``arm_stamp``, s: when each was measured, None for the tick's own stamp. What
    has the stamp that it had before is nothing new. Nothing here need be finite or sensible: the loop's checks see to
    that.
    """

    stamp: float
    imu_quat_xyzw: tuple[float, float, float, float] | None
    imu_rate: Array
    imu_acceleration: Array | None
    drive_angle: Array
    arm_position: Array
    imu_stamp: float | None = None
    drive_stamp: float | None = None
    arm_stamp: float | None = None

    @property
    def finite(self) -> bool:
        """Whether every number in it is finite (and none so large that its square is not)."""
        rate, angle, arm, acceleration = self.imu_rate, self.drive_angle, self.arm_position, self.imu_acceleration
        total = self.stamp + float(rate @ rate) + float(angle @ angle) + float(arm @ arm)
        if self.imu_quat_xyzw is not None:
            total += sum(self.imu_quat_xyzw)
        if acceleration is not None:
            total += float(acceleration @ acceleration)
        return math.isfinite(total)
