"""An emergency stop is not given up while the arms move: it is asked for again, further ahead, and told each time."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.arm_motion import ArmState, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.spline import ArmPath, path_through_waypoints
from ballbal_ros.nodes import arm_stop
from ballbal_ros.nodes.arm_stop import ArmStop
from ballbal_ros.nodes.balance_dialogue import BalanceDialogue
from ballbal_ros.nodes.messages import seconds, stamp_text
from ballbal_ros.nodes.predecessor import Predecessor
from helpers.robots import compensation, shelver

STILL = np.zeros(shelver().joint_count)
ALLOWANCE = compensation().planner.allowance


def nod(state: ArmState) -> ArmPath:
    points = np.stack((state.position, state.position))
    points[1, shelver().joint_index("left_shoulder_pitch", "test")] -= 0.6
    return path_through_waypoints([0.0, 4.0], points, [STILL, STILL], [STILL, STILL])


class Bench:
    """An emergency stop with a motion of 4 s under way, a balance node played by the test, and a clock set by hand."""

    def __init__(self, now: float, schedule: ArmSchedule) -> None:
        self.now, self.schedule, self.count = now, schedule, 0
        self.said: list[str] = []
        self.leans: list[Any] = []
        self.dialogue = BalanceDialogue(schedule, shelver().joint_names, self, self, self, lambda _: None)  # type: ignore[arg-type]
        self.before = Predecessor(0.0)
        self.stop = ArmStop(schedule, self.dialogue, self, self.before, lambda: self.now, lambda: True)  # type: ignore[arg-type]
        self.hear()

    def publish(self, message: Any) -> None:
        if "lean_roll" in message.joint_names:
            self.leans.append(message)
        else:
            self.said.append(f"arms stop from {seconds(message.header.stamp):.2f} s")

    def refuse(self, what: str, stamp: str, reason: str) -> None:
        self.said.append(f"{what} refused: {reason}")

    def accept(self, what: str, stamp: str, message: str) -> None:
        self.said.append(f"{what}: {message}")

    def accept_proposal(self, what: str, *_: Any) -> None:
        self.said.append(f"{what} accepted")

    def hear(self, **values: str) -> None:
        """A balance state, as the node handles it."""
        told = {key.replace("_", " "): value for key, value in values.items()}
        self.dialogue.hear("stopping", {"plans answered": str(self.count), **told})
        self.stop.go_on()

    def answer(self, refusal: str = "") -> None:
        """The balance node's answer to the last lean plan."""
        self.count += 1
        stamp = stamp_text(self.leans[-1].header.stamp)
        self.hear(**({"refused_plan": stamp, "refusal": refusal} if refusal else {"plan": stamp}))

    def later(self, span: float) -> None:
        """Time goes by, stamps and wall clock."""
        self.now += span
        CLOCK[0] += span
        self.stop.go_on()


CLOCK = [100.0]


@pytest.fixture
def bench(monkeypatch: pytest.MonkeyPatch) -> Iterator[Bench]:
    """Arms in the midst of their motion, one second after their start."""
    monkeypatch.setattr(arm_stop.time, "monotonic", lambda: CLOCK[0])
    schedule = ArmSchedule(shelver(), attrs.evolve(compensation(), answer_timeout=60.0))
    motion = schedule.plan(Wanted(0.0, 4.0, nod), 1.0, STILL)
    schedule.accept(motion)
    yield Bench(motion.arms_start + 1.0, schedule)


def test_a_stop_that_is_refused_is_tried_again_until_one_is_taken(bench: Bench) -> None:
    """Each refusal is told; each next one begins twice as far ahead; once one is taken up nothing more is asked."""
    bench.stop.take(True)
    ahead = []
    for refusal in ("starts at 5 s, and it is 6 s", "still too late", ""):
        ahead.append(seconds(bench.leans[-1].header.stamp) - bench.now)
        bench.answer(refusal)
        bench.later(0.25)
    assert ahead == pytest.approx([ALLOWANCE, 2.0 * ALLOWANCE, 4.0 * ALLOWANCE], abs=1e-6)
    refused, taken = bench.said[:2], bench.said[2:]
    assert [line.split(": ", 1)[1] for line in refused] == ["starts at 5 s, and it is 6 s", "still too late"]
    assert taken[0].startswith("arms stop from") and taken[1:] == ["emergency_stop accepted"]
    assert not bench.stop.under_way and bench.stop.on and len(bench.leans) == 3
    bench.later(1.0)
    bench.stop.take(True)
    assert len(bench.leans) == 3


def test_it_goes_on_until_the_arms_rest(bench: Bench) -> None:
    """Refused every time, it ends with the motion itself; to release it changes nothing about that."""
    bench.stop.take(True)
    bench.stop.take(False)
    while bench.stop.under_way:
        if bench.dialogue.waits:
            bench.answer("no")
        bench.later(0.25)
        assert bench.now < 20.0
    end = bench.schedule.busy_until(0.0)
    assert end is not None and f"the arms come to rest at {end:.3f} s" in bench.said[-1]
    assert sum("refused" in line for line in bench.said) >= 3


def test_a_stop_that_can_not_be_planned_is_tried_again(bench: Bench, monkeypatch: pytest.MonkeyPatch) -> None:
    """The same reason is told once; the next try that can be planned is asked for."""
    plan = bench.schedule.stop

    def refuse(*_: Any) -> None:
        raise PlanRefused("stop", "can't be cut short within the limits", "it ends by itself")

    monkeypatch.setattr(bench.schedule, "stop", refuse)
    bench.stop.take(True)
    for _ in range(4):
        bench.later(0.25)
    assert len(bench.said) == 1 and "tried again" in bench.said[0] and not bench.leans
    monkeypatch.setattr(bench.schedule, "stop", plan)
    bench.later(0.25)
    assert len(bench.leans) == 1
    bench.answer()
    assert bench.said[-1] == "emergency_stop accepted"


def test_what_waits_for_an_answer_is_taken_back(bench: Bench) -> None:
    """The balance node may take it up yet: it is told to forget it, before it is asked for the stop."""
    other = bench.schedule.plan(Wanted(20.0, 4.0, nod), bench.now, STILL)
    bench.dialogue.ask(other, "arm_plan", "0")
    bench.stop.take(True)
    asked, withdrawn, stop = bench.leans
    assert asked.points and not withdrawn.points and stop.points
    assert withdrawn.header.stamp == asked.header.stamp
    assert "overtaken by an emergency stop" in bench.said[0]


def test_arms_at_rest_have_nothing_to_stop(bench: Bench) -> None:
    """It is said at once, and nothing is asked."""
    bench.now += 100.0
    bench.stop.take(True)
    assert bench.said == ["emergency_stop: the arms rest"] and not bench.leans and not bench.stop.under_way
