"""What runs of a plan have taught is found again by the plan's own content, and used where it fits alone."""

from __future__ import annotations

from pathlib import Path

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.learned_file import write_learned
from ballbal_ros.motion.plan_mark import PlanMark, plan_mark
from ballbal_ros.motion.repetition import Learned
from ballbal_ros.motion.story import Story
from ballbal_ros.nodes.arm_proposals import ArmProposals
from ballbal_ros.nodes.learned_plans import LearnedPlans
from ballbal_ros.nodes.messages import load_message, load_of, to_time
from ballbal_ros.nodes.trajectories import ball_plan_message, hand_wrench_message, path_message
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.rehearsal import plan_story, request_of
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, story

ARMS_START = 8.123456789


def timeline(told: Story) -> Timeline:
    return Timeline.of(told, files().compensation)


def mark_of(told: Story) -> PlanMark:
    """The mark as a rehearsal makes it."""
    request = request_of(files(), told, timeline(told))
    return plan_mark(files().description, told.start_loads, request, files().compensation)


def by_messages(told: Story, schedule: ArmSchedule, extra: float = 0.0) -> Proposal:
    """The proposal for a story that comes as messages, with ``extra`` kg more said to be in the left hand."""
    description = files().description
    for load in told.start_loads:
        more = extra if load.hand == "left_hand" else 0.0
        heavier = Load(load.hand, load.mass + more, load.center, load.inertia)
        schedule.set_load(*load_of(load_message(heavier, 0.0), description))
    for when, load in told.announced:
        schedule.set_load(*load_of(load_message(load, ARMS_START + when), description))
    proposals = ArmProposals(description, schedule)
    if told.ball is not None:
        proposals.put_beside("ball_plan", ball_plan_message(told.ball, to_time(ARMS_START)), False)
    if told.wrenches:
        proposals.put_beside("hand_wrench_plan", hand_wrench_message(told.wrenches, to_time(0.0)), False)
    message = path_message(told.arms, description.joint_names, to_time(ARMS_START))
    return proposals.moved(message, 2.0, told.posture + 2e-5)


@pytest.mark.parametrize("name", ["reach", "shelve", "door", "cart"])
def test_a_plan_has_one_mark_whether_from_a_file_or_by_messages(name: str):
    """Loads, ball motion and pulls included; its times on the bus are whole nanoseconds, and begin somewhere."""
    asked: list[PlanMark] = []

    def ask(mark: PlanMark) -> tuple[None, str]:
        asked.append(mark)
        return None, "nothing"

    by_messages(story(name), ArmSchedule(files().description, files().compensation, ask))
    assert asked == [mark_of(story(name))]


def learned_for(mark: PlanMark) -> Learned:
    """A lesson of 1.5 N m in each axis that comes with the arms."""
    ramp = np.clip((0.01 * np.arange(500) - 1.6)[:, None], 0.0, 1.0) * np.array([1.0, 1.5])
    return Learned(mark, 3, 0.01, ramp, 0.1 * ramp)


def test_the_node_plans_what_a_rehearsal_plans(tmp_path: Path):
    """With the same learned file: lean within 1e-7 rad, torque within 1e-5 N m; and otherwise than without it."""
    told = story("reach")
    learned = learned_for(mark_of(told))
    write_learned(tmp_path / "reach.learned.yaml", learned)
    schedule = ArmSchedule(files().description, files().compensation, LearnedPlans(tmp_path))
    proposal = by_messages(told, schedule)
    expected = plan_story(files(), told, timeline(told), learned=learned)
    assert proposal.plan is not None and proposal.learned == "reach.learned.yaml, 3 runs"
    assert np.abs(proposal.plan.lean - expected.lean).max() < 1e-7
    assert np.abs(proposal.plan.torque - expected.torque).max() < 1e-5
    assert np.abs(proposal.plan.lean - plan_story(files(), told, timeline(told)).lean).max() > 1e-3


def test_with_another_load_the_plan_goes_without_it_and_says_so(tmp_path: Path):
    """10 g more are said to be in a hand: the plan is that of a node which knows nothing, and its report has why."""
    told = story("reach")
    write_learned(tmp_path / "reach.learned.yaml", learned_for(mark_of(told)))
    knowing = ArmSchedule(files().description, files().compensation, LearnedPlans(tmp_path))
    proposal = by_messages(told, knowing, 0.01)
    plain = by_messages(told, ArmSchedule(files().description, files().compensation), 0.01)
    assert proposal.plan is not None and plain.plan is not None
    assert np.array_equal(proposal.plan.lean, plain.plan.lean)
    assert proposal.learned.startswith("nothing: reach.learned.yaml was learnt with another model, load")
    assert plain.learned == ""


def test_a_lesson_beyond_the_limits_is_left_out(tmp_path: Path):
    """However much a file says, ``repetition.moment`` bounds it; and where even that is beyond a limit of the robot the
    plan goes without.
    """
    told = story("reach")
    wild = attrs.evolve(learned_for(mark_of(told)), moment=np.full((500, 2), 1e6), torque=np.full((500, 2), 1e6))
    given = files().compensation
    most = wild.outside_moment(given.repetition.moment)
    assert np.abs(most.moment).max() == given.repetition.moment == np.abs(most.torque).max()
    limit = next(use for use in plan_story(files(), told, timeline(told)).uses if use.name == "drive torque")
    share = 1.01 * limit.value / files().description.parameters.limits.drive_torque
    strict = attrs.evolve(given, acceptance=attrs.evolve(given.acceptance, torque_use=share))
    steps = attrs.evolve(wild, torque=np.where(np.arange(500)[:, None] > 200, 1e6, 0.0) * np.ones(2))
    proposal = by_messages(told, ArmSchedule(files().description, strict, lambda mark: (steps, "it")))
    plain = by_messages(told, ArmSchedule(files().description, strict))
    assert proposal.plan is not None and plain.plan is not None
    assert np.array_equal(proposal.plan.lean, plain.plan.lean)
    assert "planned without it: what was learnt: would need" in proposal.learned


def test_a_folder_is_read_anew_where_it_changes(tmp_path: Path):
    """What comes, changes, breaks or goes counts with the next plan; a place that is not there is refused at once, and
    a broken file costs the others nothing.
    """
    mark, other = PlanMark("m", "f"), PlanMark("m", "g")
    plans = LearnedPlans(tmp_path)
    assert plans(mark) == (None, "nothing of this motion")
    path = tmp_path / "a.learned.yaml"
    write_learned(path, learned_for(mark))
    found, words = plans(mark)
    assert found is not None and words == "a.learned.yaml, 3 runs"
    assert plans(other)[0] is None and "another model, load" in plans(other)[1]
    (tmp_path / "b.learned.yaml").write_text("fits: [")
    (tmp_path / "c.yaml").write_text("fits: [")
    assert plans(mark)[0] is not None
    path.write_text(path.read_text().replace("runs: 3", "runs: none at all"))
    assert plans(mark)[0] is None and "a.learned.yaml" in plans(mark)[1]
    path.unlink()
    assert "b.learned.yaml" in plans(mark)[1]
    with pytest.raises(BallbalError, match="not there"):
        LearnedPlans(tmp_path / "nowhere")
