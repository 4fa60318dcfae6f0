"""From sensor messages to the measurement of one tick."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.diagnostics import Diagnostics
from ballbal_ros.nodes.messages import BILLION, JointReader
from ballbal_ros.nodes.wire_readers import ImuReader
from ballbal_ros.robot.description import RobotDescription


class Senses:
    """Gathers IMU, drive and arm data, and calls ``tick(stamp in ns)`` when :attr:`measurement` is complete.

    In lock-step that is when all three carry one stamp, in whatever order they come. Otherwise it is when IMU data
    come, with the newest of the others. Arm data keep their own stamp, as they may well come less often; drive data
    count as of the tick until they are older than ``drive_timeout``, and then keep theirs too, so that the loop knows
    that it hears nothing new and coasts.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: BalanceParameters,
        lock_step: bool,
        tick: Callable[[int], None],
        diagnostics: Diagnostics,
    ) -> None:
        self._tick, self._diagnostics = tick, diagnostics
        self._lock_step = lock_step
        self._imu = ImuReader()
        self._frame = description.parameters.imu.frame
        self._stale = round(parameters.drive_timeout * BILLION)
        self.arms = JointReader(description.joint_names, "joint_states")
        self._drive = JointReader(description.drive.names, "drive_states")
        self._imu_stamp = -1
        drives = len(description.drive.names)
        self.measurement = Measurement(
            0.0, None, np.zeros(3), np.zeros(3), np.zeros(drives), np.zeros(description.joint_count)
        )

    def on_arms(self, raw: bytes) -> None:
        """Take serialised ``joint_states``."""
        if self._read(self.arms, raw, "joint_states") and self._lock_step:
            self._complete()

    def on_drive(self, raw: bytes) -> None:
        """Take serialised ``drive_states``."""
        if self._read(self._drive, raw, "drive_states") and self._lock_step:
            self._complete()

    def _read(self, reader: JointReader, raw: bytes, topic: str) -> bool:
        try:
            return reader.read(raw)
        except BallbalError as error:
            self._diagnostics.refuse(topic, str(error))
            return False

    def on_imu(self, raw: bytes) -> None:
        """Take serialised ``imu/data``; a field that the message marks as not reported (covariance -1) is left out."""
        measured = self.measurement
        try:
            values = self._imu.read(raw)
        except BallbalError as error:
            self._refuse(str(error))
            return
        quat = values.quat_xyzw
        if not math.isfinite(sum(values.rate) + sum(values.acceleration)):
            self._refuse("a rate or acceleration is not finite; it was passed over: mend the sensor")
        elif values.frame != self._frame:
            self._refuse(f"frame_id is {values.frame!r}; robot.yaml says {self._frame!r}")
        elif quat is not None and not abs(math.hypot(*quat) - 1.0) < 5e-4:
            self._refuse(f"orientation {quat} is no unit quaternion; it was passed over: mend the sensor")
        else:
            measured.imu_quat_xyzw = quat
            measured.imu_rate[:] = values.rate
            measured.imu_acceleration = np.array(values.acceleration)
            self._imu_stamp = values.stamp
            self._complete()

    def _refuse(self, reason: str) -> None:
        self._diagnostics.refuse("imu/data", f"imu/data: {reason}")

    def _complete(self) -> None:
        ns, arms, drive, measured = self._imu_stamp, self.arms, self._drive, self.measurement
        if self._lock_step:
            if not ns == drive.stamp == arms.stamp:
                return
        elif drive.stamp < 0 or arms.stamp < 0:
            return
        measured.stamp = ns / BILLION
        measured.drive_angle, measured.arm_position = drive.position.copy(), arms.position.copy()
        if not self._lock_step:
            measured.drive_stamp = drive.stamp / BILLION if ns - drive.stamp > self._stale else None
            # One from a clock that is ahead must not make all that follow look old.
            measured.arm_stamp = min(arms.stamp, ns) / BILLION
        self._tick(ns)
