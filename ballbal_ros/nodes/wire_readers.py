"""Joint states and IMU data straight from their serialised form.

The loop and the simulated robot exchange six messages a tick, and this takes a fraction of the time of whole messages.
A layout is worked out once for each publisher (its names and frame stay the same) and held against what rclpy makes of
the same bytes; where the two differ, rclpy's way is used for good.
"""

from __future__ import annotations

import struct
from typing import Any

import attrs
import numpy as np
from rclpy.serialization import deserialize_message
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.wire_layout import BILLION, LITTLE_ENDIAN, STAMP_END, START, aligned
from ballbal_ros.robot.arrays import Array

_stamp = struct.Struct("<iI").unpack_from
_count = struct.Struct("<I").unpack_from
_imu = struct.Struct("<37d").unpack_from


@attrs.define(eq=False)
class JointValues:
    """One joint state: ``stamp`` in ns; positions and efforts [names], empty where there are none. (Not frozen, which
    costs time in the loop; nobody changes it.)
    """

    stamp: int
    names: tuple[str, ...]
    position: Array
    effort: Array


@attrs.define
class ImuValues:
    """One IMU reading: ``stamp`` in ns; ``quat_xyzw`` None where the message marks it as not reported; rad/s, m/s², IMU
    axes. (Not frozen either.)
    """

    stamp: int
    frame: str
    quat_xyzw: tuple[float, float, float, float] | None
    rate: tuple[float, float, float]
    acceleration: tuple[float, float, float]


@attrs.frozen
class _Layout:
    """Where the numbers of one publisher's joint states are; ``prefix`` is all that stays the same from byte 12 on.

    ``ats``, ``counts``: where positions, velocities and efforts are, and how many.
    """

    prefix: bytes
    names: tuple[str, ...]
    ats: tuple[int, int, int]
    counts: tuple[int, int, int]
    size: int


class JointStateReader:
    """Reads serialised ``sensor_msgs/JointState``."""

    def __init__(self) -> None:
        self._layouts: list[_Layout] = []

    def read(self, raw: bytes) -> JointValues:
        """The values in a serialised message; raises :class:`BallbalError` where it is none."""
        for layout in self._layouts:
            if len(raw) == layout.size and raw.startswith(layout.prefix, STAMP_END):
                return _fast(raw, layout)
        values = _slow(raw)
        layout_found = _layout(raw) if raw.startswith(LITTLE_ENDIAN) else None
        if layout_found is not None and len(self._layouts) < 16 and _same(values, _fast(raw, layout_found)):
            self._layouts.append(layout_found)
        return values


def _stamped(raw: bytes) -> int:
    sec, nanosec = _stamp(raw, START)
    if sec < 0:
        raise BallbalError("header.stamp", f"is {sec} s", "give the time of the measurement")
    return int(sec * BILLION + nanosec)


def _fast(raw: bytes, layout: _Layout) -> JointValues:
    stamp = _stamped(raw)
    position = np.frombuffer(raw, float, layout.counts[0], layout.ats[0])
    effort = np.frombuffer(raw, float, layout.counts[2], layout.ats[2])
    return JointValues(stamp, layout.names, position, effort)


def _decoded(raw: bytes, kind: type) -> Any:
    """rclpy's message; raises :class:`BallbalError` for bytes that are none, or a stamp before time began."""
    try:
        message: Any = deserialize_message(raw, kind)
    except Exception as error:
        what = f"{len(raw)} bytes that are no {kind.__name__} came"
        raise BallbalError("message", what, "see who publishes them") from error
    if message.header.stamp.sec < 0:
        raise BallbalError("header.stamp", f"is {message.header.stamp.sec} s", "give the time of the measurement")
    return message


def _slow(raw: bytes) -> JointValues:
    message = _decoded(raw, JointState)
    stamp = message.header.stamp
    return JointValues(
        stamp.sec * BILLION + stamp.nanosec,
        tuple(message.name),
        np.array(message.position, float),
        np.array(message.effort, float),
    )


def _same(a: JointValues, b: JointValues) -> bool:
    return (
        (a.stamp, a.names) == (b.stamp, b.names)
        and a.position.tobytes() == b.position.tobytes()
        and a.effort.tobytes() == b.effort.tobytes()
    )


def _layout(raw: bytes) -> _Layout | None:
    """The layout of a little-endian joint state; None where it is not what it should be."""
    try:
        at = aligned(STAMP_END + 4 + _count(raw, STAMP_END)[0], 4)
        (count,), at = _count(raw, at), at + 4
        names = []
        for _ in range(count):
            at = aligned(at, 4)
            length = _count(raw, at)[0]
            names.append(raw[at + 4 : at + 3 + length].decode())
            at += 4 + length
        at = aligned(at, 4)
        prefix, places = raw[STAMP_END : at + 4], []
        for _ in range(3):
            (count,), at = _count(raw, at), at + 4
            at = aligned(at, 8) if count else at
            places.append((at, count))
            at += 8 * count
        (position_at, positions), (velocity_at, velocities), (effort_at, efforts) = places
        ats, counts = (position_at, velocity_at, effort_at), (positions, velocities, efforts)
        return _Layout(prefix, tuple(names), ats, counts, len(raw)) if at <= len(raw) else None
    except (struct.error, UnicodeDecodeError):
        return None


class ImuReader:
    """Reads serialised ``sensor_msgs/Imu``."""

    def __init__(self) -> None:
        self._prefix, self._frame, self._at, self._size = b"", "", 0, 0

    def read(self, raw: bytes) -> ImuValues:
        """The values in a serialised message; raises :class:`BallbalError` where it is none."""
        if self._size == len(raw) and raw.startswith(self._prefix, STAMP_END):
            return self._fast(raw)
        values = _slow_imu(raw)
        if raw.startswith(LITTLE_ENDIAN):
            end = STAMP_END + 4 + _count(raw, STAMP_END)[0]
            self._prefix, self._frame, self._at, self._size = (
                raw[STAMP_END:end],
                values.frame,
                aligned(end, 8),
                len(raw),
            )
            if self._at + 37 * 8 > len(raw) or repr(self._fast(raw)) != repr(values):
                self._size = 0
        return values

    def _fast(self, raw: bytes) -> ImuValues:
        stamp, v = _stamped(raw), _imu(raw, self._at)
        return ImuValues(stamp, self._frame, None if v[4] < 0.0 else v[0:4], v[13:16], v[25:28])


def _slow_imu(raw: bytes) -> ImuValues:
    message = _decoded(raw, Imu)
    stamp, turn, rate, force = (
        message.header.stamp,
        message.orientation,
        message.angular_velocity,
        message.linear_acceleration,
    )
    return ImuValues(
        stamp.sec * BILLION + stamp.nanosec,
        message.header.frame_id,
        None if message.orientation_covariance[0] < 0.0 else (turn.x, turn.y, turn.z, turn.w),
        (rate.x, rate.y, rate.z),
        (force.x, force.y, force.z),
    )
