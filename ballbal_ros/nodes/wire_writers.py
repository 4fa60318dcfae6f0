"""Joint states, IMU data, odometry and clock straight to their serialised form.

Like their readers (:mod:`ballbal_ros.nodes.wire_readers`) they take a fraction of the time of whole messages. What is
built is held against rclpy's own serialisation once, and then only its numbers change.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from typing import Any

import numpy as np
from nav_msgs.msg import Odometry
from rclpy.serialization import deserialize_message
from rosgraph_msgs.msg import Clock
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.nodes.wire_layout import BILLION, LITTLE_ENDIAN, START, aligned
from ballbal_ros.robot.arrays import Array

_put_stamp = struct.Struct("<iI").pack_into


class _Writer:
    """A serialised message of which only the stamp and a block of numbers change. Built by hand, so that padding is
    zero.

    (rclpy leaves in it what was there before, and two runs would not be the same to the bit.) Little-endian CDR.
    """

    def __init__(self) -> None:
        self._buffer = bytearray(LITTLE_ENDIAN + bytes(2 + 8))

    def _align(self, to: int) -> None:
        self._buffer += bytes(aligned(len(self._buffer), to) - len(self._buffer))

    def _put_count(self, value: int) -> None:
        self._align(4)
        self._buffer += struct.pack("<I", value)

    def _put_text(self, text: str) -> None:
        raw = text.encode() + b"\0"
        self._put_count(len(raw))
        self._buffer += raw

    def _put_doubles(self, count: int) -> int:
        """Make room for so many doubles, and return where they are."""
        if count:
            self._align(8)
        at = len(self._buffer)
        self._buffer += bytes(8 * count)
        return at

    def _check(self, message: Any) -> None:
        """Hold what was built against the message that it should be."""
        if deserialize_message(bytes(self._buffer), type(message)) != message:
            raise RuntimeError(f"this middleware does not serialise {type(message).__name__} as expected")

    def numbers(self, at: int, count: int) -> Array:
        """The ``count`` doubles at byte ``at``, to be written to; the message can't grow any more."""
        return np.frombuffer(self._buffer, float, count, at)

    def serialised(self, ns: int) -> bytes:
        """The message with the stamp ``ns``, in ns."""
        _put_stamp(self._buffer, START, *divmod(ns, BILLION))
        return bytes(self._buffer)


class ClockWriter(_Writer):
    """Writes ``rosgraph_msgs/Clock``."""

    def __init__(self) -> None:
        super().__init__()
        self._check(Clock())


class JointStateWriter(_Writer):
    """Writes ``sensor_msgs/JointState`` of fixed names: fill ``position``, ``velocity``, ``effort`` [names], as far as
    asked for.
    """

    def __init__(
        self, names: Sequence[str], *, position: bool = False, velocity: bool = False, effort: bool = False
    ) -> None:
        super().__init__()
        self._put_text("")
        self._put_count(len(names))
        for name in names:
            self._put_text(name)
        ats, counts = [], [len(names) * wanted for wanted in (position, velocity, effort)]
        for count in counts:
            self._put_count(count)
            ats.append(self._put_doubles(count))
        message = JointState(name=list(names))
        message.position, message.velocity, message.effort = ([0.0] * count for count in counts)
        self._check(message)
        self.position, self.velocity, self.effort = map(self.numbers, ats, counts)


class ImuWriter(_Writer):
    """Writes ``sensor_msgs/Imu``: fill ``values`` with orientation x y z w at 0, rate at 13, acceleration at 25."""

    def __init__(self, frame: str, oriented: bool) -> None:
        super().__init__()
        self._put_text(frame)
        at = self._put_doubles(37)
        # rclpy's quaternion begins as one that turns nothing.
        struct.pack_into("<2d", self._buffer, at + 24, 1.0, 0.0 if oriented else -1.0)
        message = Imu()
        message.header.frame_id = frame
        message.orientation_covariance[0] = 0.0 if oriented else -1.0
        self._check(message)
        self.values = self.numbers(at, 37)


class OdometryWriter(_Writer):
    """Writes ``nav_msgs/Odometry``: fill ``pose`` [7] (x y z, quaternion x y z w) and ``twist`` [6] (linear,
    angular).
    """

    def __init__(self, frame: str, child_frame: str) -> None:
        super().__init__()
        self._put_text(frame)
        self._put_text(child_frame)
        at = self._put_doubles(85)
        struct.pack_into("<d", self._buffer, at + 48, 1.0)
        message = Odometry(child_frame_id=child_frame)
        message.header.frame_id = frame
        self._check(message)
        values = self.numbers(at, 85)
        self.pose, self.twist = values[:7], values[43:49]
