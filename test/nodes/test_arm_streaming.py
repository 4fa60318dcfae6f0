"""The delay line in the node: what is wrong is refused, and arms are commanded only once balance has agreed."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from sensor_msgs.msg import JointState

from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.nodes.arm_streaming import ArmStreaming
from ballbal_ros.nodes.messages import JointReader, seconds, stamp_text, to_time
from helpers.robots import compensation, shelver

JOINT = "left_shoulder_pitch"
FIELDS = ("positions", "velocities", "accelerations")
INTERVAL, LATENCY = compensation().stream.interval, compensation().stream.latency


class Line:
    """A delay line between a test and lists of what comes out of it."""

    def __init__(self, **settings: Any) -> None:
        self.lean: list[Any] = []
        self.arms: list[Any] = []
        self.refused: list[str] = []
        self.here = np.zeros(shelver().joint_count)
        stream = attrs.evolve(compensation().stream, **settings)
        schedule = ArmSchedule(shelver(), attrs.evolve(compensation(), stream=stream))
        send = type("Publisher", (), {"__init__": lambda self, to: setattr(self, "publish", to.append)})
        self.streaming = ArmStreaming(
            shelver(), schedule, send(self.lean), send(self.arms), lambda: self.here.copy(),
            lambda _, why: self.refused.append(why),
        )  # fmt: skip
        self.reader = JointReader(shelver().joint_names, "joint_states")
        self.reader.position[:] = self.here

    def go_on(self, now: float) -> None:
        self.streaming.go_on(now, self.reader)

    def send(self, stamp: float, *position: float, names: tuple[str, ...] = (JOINT,), velocity: Any = ()) -> None:
        message = JointState(name=list(names), position=list(position), velocity=list(velocity))
        message.header.stamp = to_time(stamp)
        self.streaming.take(message)

    def answer(self, agrees: bool = True) -> None:
        stamp = stamp_text(self.lean[-1].header.stamp)
        self.streaming.heard({"plan": stamp} if agrees else {"refused plan": stamp, "refusal": "no"})

    def run(self, begin: float, end: float, agrees: bool = True) -> None:
        """Stream a slow motion at 100 Hz from 1 s on, at rest before."""
        self.go_on(begin)
        for now in np.arange(begin, end, 0.01).tolist():
            plans = len(self.lean)
            self.send(now, -0.2 * max(now - 1.0, 0.0) ** 2)
            self.go_on(now)
            if len(self.lean) > plans:
                self.answer(agrees)


def test_plans_come_at_their_interval_and_arms_with_them() -> None:
    """25 lean plans a second while the arms move, each with the arms' command of the same stamp once agreed."""
    line = Line()
    line.run(0.5, 2.0)
    assert not line.refused
    starts = [seconds(message.header.stamp) for message in line.lean]
    assert np.diff(starts)[5:] == pytest.approx(INTERVAL, abs=0.011)
    assert len([start for start in starts if start > 1.0]) >= 20
    commands = [seconds(message.header.stamp) for message in line.arms]
    assert commands and set(commands) <= set(starts) and commands[0] > starts[0]


def test_the_arms_follow_a_delay_later() -> None:
    """The command for a time has what the stream had a delay before."""
    line = Line(delay=0.3)
    line.run(0.5, 2.0)
    last, index = line.arms[-1], list(shelver().joint_names).index(JOINT)
    start = seconds(last.header.stamp)
    assert last.points[0].positions[index] == pytest.approx(-0.2 * (start - 0.3 - 1.0) ** 2, abs=1e-3)
    assert np.abs(np.array(last.points[-1].velocities)).max() == 0.0


def test_nothing_moves_before_balance_has_agreed() -> None:
    """Without an acknowledgement no arm command goes out; with three refusals the stream ends, and says why."""
    line = Line()
    line.run(0.5, 0.9, agrees=False)
    assert line.lean and not line.arms
    assert line.streaming.values()["stream"] == "ended: no"
    assert "begin anew" in line.refused[-1]


@pytest.mark.parametrize(
    ("sent", "says"),
    [
        ({"position": (0.0,), "names": ("left_knee",)}, "left_knee"),
        ({"position": (float("nan"),)}, "is nan"),
        ({"position": (5.0,)}, "its limits are"),
        ({"position": (0.0, 1.0)}, "2 positions"),
        ({"position": (0.0,), "velocity": (99.0,)}, "velocity of 99"),
        ({"position": (0.4,)}, "begins elsewhere"),
        ({"position": (0.0,), "stamp": 99.0}, "stamp"),
    ],
)
def test_a_sample_that_can_not_be_is_refused(sent: dict[str, Any], says: str) -> None:
    """Unknown joints, numbers that are none or beyond limits, another place, another time: one line each, no plan."""
    line = Line()
    line.go_on(1.0)
    position = sent.pop("position")
    line.send(sent.pop("stamp", 1.0), *position, **sent)
    assert len(line.refused) == 1 and says in line.refused[0] and line.refused[0].startswith("arm_stream: ")
    line.go_on(1.1)
    assert not line.lean


def test_a_stream_that_jumps_is_refused() -> None:
    """Further than the joint can go in the time: the sample is passed over, the stream goes on without it."""
    line = Line()
    line.run(0.5, 1.2)
    line.send(1.2, -1.0)
    assert len(line.refused) == 1 and "jumps" in line.refused[0]


@pytest.mark.parametrize("apart", [1e-6, 5e-4, 2e-3, 6e-3])
def test_many_small_steps_are_no_way_past_the_velocity_limit(apart: float) -> None:
    """Steps that each are small, however near to each other: the arms are commanded to go faster than the joint can by
    no more than a step of 5 mrad at once makes, and why samples are passed over is told.
    """
    line = Line()
    line.run(0.5, 1.05)
    commands = len(line.arms)
    fastest = float(shelver().velocity_limit[list(shelver().joint_names).index(JOINT)])
    for k in range(1, 101):
        line.go_on(1.05 + apart * k)
        line.send(1.05 + apart * k, -0.0045 * k - fastest * apart * k)
        if len(line.arms) > commands:
            line.answer()
    for now in np.arange(1.06 + 100.0 * apart, 2.0, 0.01).tolist():
        line.go_on(now)
    assert len(line.arms) > commands and "jumps" in line.refused[0]
    for message in line.arms[commands:]:
        times = np.array([seconds(point.time_from_start) for point in message.points])
        table = [np.array([getattr(p, name) for p in message.points]) for name in FIELDS]
        rate = ArmPath.through(times, *table).sample(np.arange(0.0, times[-1], 1e-3))[1]
        assert np.abs(rate).max() <= 1.6 * fastest


def test_arms_moved_by_hand_are_planned_for() -> None:
    """With `measured`, arms that rest get no plan, and arms that somebody moves get one after the other."""
    line = Line(measured=True)
    for now in np.arange(0.0, 2.0, 0.002).tolist():
        line.reader.position[0] = -0.2 * max(now - 1.0, 0.0) ** 2
        line.go_on(now)
    starts = np.array([seconds(message.header.stamp) for message in line.lean])
    assert starts[0] > 1.0 and len(starts) >= 15 and not line.arms
