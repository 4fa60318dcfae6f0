"""A node that is started anew knows by a file what the one before it let go of, and can stop that."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_motion import ArmState, Proposal, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.plan_request import HandWrench
from ballbal_ros.motion.spline import ArmPath, path_through_waypoints
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.motion_memory import MotionMemory
from helpers.robots import compensation, shelver

STILL = np.zeros(shelver().joint_count)
SHOULDER = shelver().joint_index("left_shoulder_pitch", "test")


def to(angle: float, during: float) -> Wanted:
    def path(state: ArmState) -> ArmPath:
        points = np.stack((state.position, state.position))
        points[1, SHOULDER] = angle
        rates, accelerations = [state.rate, STILL], [state.acceleration, STILL]
        return path_through_waypoints([0.0, during], points, rates, accelerations)

    return Wanted(0.0, during, path)


def stamp(proposal: Proposal) -> str:
    return stamp_text(to_time(proposal.lean_start))


@attrs.frozen
class Before:
    """The node before: its schedule, the last motion it let go of, when that moves, and the file."""

    schedule: ArmSchedule
    last: Proposal
    moving: float
    file: Path


@pytest.fixture(params=[1, 2])
def before(request: pytest.FixtureRequest, tmp_path: Path) -> Before:
    """One motion under way, or a second one that has taken it over; something pulls at a hand."""
    schedule, file = ArmSchedule(shelver(), compensation()), tmp_path / "some" / "motion.json"
    memory = MotionMemory(shelver(), file, lambda: "balance 1")
    times = np.array([0.0, 1.0])
    pull = HandWrench("left_hand", times, np.array([[0.0, 0.0, 0.0], [2.0, 0.0, 0.0]]), np.zeros((2, 3)))
    now = 1.0
    for k in range(request.param):
        motion = schedule.plan(attrs.evolve(to(-0.6 + 0.3 * k, 4.0), wrenches=() if k else (pull,)), now, STILL)
        schedule.accept(motion)
        memory.keep(motion)
        memory.write_down()
        now = motion.arms_start + 1.0
    assert memory.warning == ""
    return Before(schedule, motion, now, file)


def recalled(had: Before, balance: str = "balance 1", plan: str | None = None) -> list[Any]:
    return MotionMemory(shelver(), had.file, lambda: balance).recall(stamp(had.last) if plan is None else plan)


def test_the_stop_of_a_node_started_anew_is_that_of_the_one_before(before: Before) -> None:
    """To the rounding of stamps: the same way to rest, and the same lean."""
    anew = ArmSchedule(shelver(), compensation())
    arms = before.schedule.arms_at(before.moving, STILL).position
    assert anew.take_over(recalled(before), before.moving, arms)
    assert anew.busy_until(before.moving) == pytest.approx(before.last.end)
    wanted, found = (schedule.stop(before.moving) for schedule in (before.schedule, anew))
    assert wanted is not None and found is not None and wanted.plan is not None and found.plan is not None
    grid = np.linspace(0.0, wanted.path.duration, 50)
    np.testing.assert_allclose(found.path.sample(grid)[0], wanted.path.sample(grid)[0], atol=1e-6)
    np.testing.assert_allclose(found.plan.lean, wanted.plan.lean, atol=1e-5)
    np.testing.assert_allclose(found.plan.torque, wanted.plan.torque, atol=1e-2)
    assert [w.hand for w in found.wrenches] == [w.hand for w in wanted.wrenches] == ["left_hand"]


def test_what_is_not_in_force_is_not_taken_for_it(before: Before) -> None:
    """Another balance node, another plan, none, arms that are elsewhere, a motion that is over."""
    assert recalled(before, balance="balance 2") == [] and recalled(before, balance="") == []
    assert recalled(before, plan="7.000000000") == [] and recalled(before, plan="") == []
    anew = ArmSchedule(shelver(), compensation())
    arms = before.schedule.arms_at(before.moving, STILL).position
    assert not anew.take_over(recalled(before), before.moving, arms + 0.4)
    assert not anew.take_over(recalled(before), before.last.end + 1.0, arms)
    assert anew.idle and anew.stop(before.moving) is None
    assert MotionMemory(shelver(), before.file.with_name("none.json"), lambda: "balance 1").recall("1.0") == []


def test_a_broken_file_is_refused_in_one_line(before: Before) -> None:
    """Whatever part is missing, of the wrong kind or not a number; a file far too long is not read at all."""
    whole = json.loads(before.file.read_text())
    broken: list[Any] = [[], {}, {**whole, "motions": 3}, {**whole, "motions": [{}]}]
    for part, key, value in (
        ("lean_plan", "points", [[0.0, [1.0]]]),
        ("lean_plan", "joints", ["lean_roll"]),
        ("lean_plan", "start", float("nan")),
        ("arm_command", "joints", ["no_such_joint"]),
        ("arm_command", "points", [[0.0, [float("nan")], [], [], []]]),
        ("arm_command", "start", "soon"),
        ("arm_command", "start", 1e30),
    ):
        motion = whole["motions"][-1]
        broken.append({**whole, "motions": [{**motion, part: {**motion[part], key: value}}]})
    for data in broken:
        before.file.write_text(json.dumps(data))
        with pytest.raises(BallbalError) as caught:
            recalled(before)
        assert "\n" not in str(caught.value)
    before.file.write_text(json.dumps(whole)[:-100])
    with pytest.raises(BallbalError, match="can't be read"):
        recalled(before)


def test_where_nothing_can_be_kept_it_is_told(before: Before, tmp_path: Path) -> None:
    """The motion goes on all the same."""
    (tmp_path / "file").write_text("")
    memory = MotionMemory(shelver(), tmp_path / "file" / "motion.json", lambda: "balance 1")
    memory.keep(before.last)
    memory.write_down()
    assert "can't be cut short" in memory.warning


def test_a_motion_without_a_lean_plan_is_not_kept(before: Before) -> None:
    """Nobody could say after a restart whether it is the one in force."""
    memory = MotionMemory(shelver(), before.file, lambda: "balance 1")
    memory.keep(attrs.evolve(before.last, plan=None))
    memory.write_down()
    assert recalled(before) == []
