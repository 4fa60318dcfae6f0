"""ROS messages and core types, each made of the other: stamps, joint states, loads.

What comes from outside is checked here: finite, complete, known by name, in the right frame. What is wrong raises a
:class:`~ballbal_ros.errors.BallbalError` that names the topic.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from builtin_interfaces.msg import Duration, Time
from geometry_msgs.msg import InertiaStamped

from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.nodes.wire_layout import BILLION as BILLION
from ballbal_ros.nodes.wire_readers import JointStateReader
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load


def nanoseconds(stamp: Time | Duration) -> int:
    """A stamp or duration in whole nanoseconds."""
    return int(stamp.sec) * BILLION + int(stamp.nanosec)


def seconds(stamp: Time | Duration) -> float:
    """A stamp or duration in s."""
    return nanoseconds(stamp) / BILLION


def to_time(value: float) -> Time:
    """A time in s (at least 0) as a stamp."""
    sec, nanosec = divmod(round(max(0.0, value) * BILLION), BILLION)
    return Time(sec=sec, nanosec=nanosec)


def to_duration(value: float) -> Duration:
    """A time in s as a duration."""
    sec, nanosec = divmod(round(value * BILLION), BILLION)
    return Duration(sec=sec, nanosec=nanosec)


def stamp_text(stamp: Time) -> str:
    """A stamp as ``sec.nanosec`` with nine digits, as ``balance_state`` names a plan."""
    return f"{stamp.sec}.{stamp.nanosec:09d}"


class JointReader:
    """Takes serialised joint states in, matched by ``names``, whatever their order; others' joints are passed over.

    ``position`` [n] holds the newest of each joint, NaN before its first; rad or m. ``stamp`` is the newest message's,
    in ns.
    """

    def __init__(self, names: Sequence[str], topic: str) -> None:
        self.names, self._topic = tuple(names), topic
        self._order: dict[tuple[str, ...], tuple[Array, Array]] = {}
        self._last: tuple[str, ...] | None = None
        self._reader = JointStateReader()
        self.position: Array = np.full(len(self.names), np.nan)
        self.stamp = -1

    @property
    def complete(self) -> bool:
        """Whether every joint has been heard of."""
        return bool(np.isfinite(self.position).all())

    def missing(self) -> list[str]:
        """Joints that have not been heard of yet."""
        return [
            name for name, value in zip(self.names, self.position.tolist(), strict=True) if not math.isfinite(value)
        ]

    def read(self, raw: bytes) -> bool:
        """Take a message in; True where it names any of the joints. Raises :class:`BallbalError` for lengths or numbers
        that can't be.
        """
        try:
            values = self._reader.read(raw)
        except BallbalError as error:
            raise BallbalError(self._topic, f"{error.where} {error.what}", error.remedy) from error
        names = values.names
        if names is self._last and len(values.position) == len(names) and math.isfinite(values.position.sum()):
            # All of them, in order, as the message before: the common case.
            self.position[:] = values.position
            self.stamp = values.stamp
            return True
        order = self._order.get(names)
        if order is None:
            here = [(i, self.names.index(name)) for i, name in enumerate(names) if name in self.names]
            if len({k for _, k in here}) < len(here):
                raise BallbalError(self._topic, "names a joint twice", "give each joint once")
            order = np.array([i for i, _ in here], int), np.array([k for _, k in here], int)
            if len(self._order) < 64:
                self._order[names] = order
        if names == self.names:
            self._last = names
        if not len(order[0]):
            return False
        if len(values.position) != len(names):
            raise BallbalError(
                self._topic,
                f"has {len(names)} names and {len(values.position)} positions",
                "give one position for each name",
            )
        mine = values.position[order[0]]
        if not math.isfinite(mine.sum()):
            bad = names[int(order[0][int(np.argmin(np.isfinite(mine)))])]
            raise BallbalError(
                self._topic, f"the position of {bad} is not finite", "it was passed over: mend the sensor"
            )
        self.position[order[1]] = mine
        self.stamp = values.stamp
        return True


def load_of(message: InertiaStamped, description: RobotDescription, topic: str = "hand_load") -> tuple[float, Load]:
    """(stamp in s, load) of a ``hand_load`` or ``simulated_load``; raises :class:`BallbalError` for an unknown hand or
    an impossible load.
    """
    inertia, hands = message.inertia, description.parameters.hands
    hand = message.header.frame_id
    if hand not in hands.links:
        raise BallbalError(topic, f"frame_id is {hand!r}, which is no hand", nearest(hand, hands.links))
    matrix = [
        [inertia.ixx, inertia.ixy, inertia.ixz],
        [inertia.ixy, inertia.iyy, inertia.iyz],
        [inertia.ixz, inertia.iyz, inertia.izz],
    ]
    load = Load(hand, float(inertia.m), [inertia.com.x, inertia.com.y, inertia.com.z], matrix)
    load.check(topic, hands.load_limit)
    return seconds(message.header.stamp), load


def load_message(load: Load, stamp: float) -> InertiaStamped:
    """A load as a ``hand_load`` that takes effect at ``stamp``, s."""
    message = InertiaStamped()
    message.header.frame_id, message.header.stamp = load.hand, to_time(stamp)
    inertia = message.inertia
    inertia.m = float(load.mass)
    inertia.com.x, inertia.com.y, inertia.com.z = load.center.tolist()
    (inertia.ixx, inertia.ixy, inertia.ixz), (_, inertia.iyy, inertia.iyz), (_, _, inertia.izz) = load.inertia.tolist()
    return message
