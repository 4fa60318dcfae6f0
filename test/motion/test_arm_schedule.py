"""One arm motion after the other: timing, handover, cancelling; nothing jumps."""

from __future__ import annotations

import attrs
import numpy as np
import pytest

from ballbal_ros.errors import PlanError, PlanRefused
from ballbal_ros.motion.arm_motion import ArmState, Proposal, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.plan_request import BallMotion
from ballbal_ros.motion.spline import ArmPath, path_through_waypoints
from ballbal_ros.motion.stopping import Spliced, stop_path
from ballbal_ros.robot.loads import Load
from helpers.robots import compensation, shelver

LEAD_IN, ALLOWANCE = compensation().planner.lead_in, compensation().planner.allowance
STILL = np.zeros(shelver().joint_count)


def swing(stamp: float, angle: float = -1.0, during: float = 0.8, ball: BallMotion | None = None) -> Wanted:
    """Both shoulders to an angle, rad, from wherever they are, the rest as it is."""

    def path(state: ArmState) -> ArmPath:
        end = state.position.copy()
        for name in ("left_shoulder_pitch", "right_shoulder_pitch"):
            end[shelver().joint_index(name, "test")] = angle
        points = np.stack((state.position, end))
        return path_through_waypoints([0.0, during], points, [state.rate, STILL], [state.acceleration, STILL])

    return Wanted(stamp, during, path, ball)


def schedule() -> ArmSchedule:
    made = ArmSchedule(shelver(), compensation())
    for hand in ("left_hand", "right_hand"):
        made.set_load(0.0, Load(hand, 2.0, [0.0, 0.0, -0.05]))
    return made


def lean_at(proposal: Proposal, time: float) -> tuple[np.ndarray, np.ndarray]:
    """Lean and lean rate [4], ball and ball rate [4] (ball counted from where it will rest) of a proposal's plan at a
    time, s.
    """
    assert proposal.plan is not None
    row = proposal.plan.table(0.001)[round((time - proposal.lean_start) / 0.001)]
    ball = row[4:8] - np.append(proposal.plan.ball[-1], (0.0, 0.0))
    return row[0:4], ball


def test_a_motion_asked_for_ahead_gets_its_full_lead_in() -> None:
    """With time enough the arms start when asked, and the lean its lead-in before."""
    proposal = schedule().plan(swing(5.0), 1.0, STILL)
    assert proposal.arms_start == 5.0
    assert proposal.lean_start == pytest.approx(5.0 - LEAD_IN)


def test_a_motion_asked_for_late_gets_what_lead_in_is_left() -> None:
    """Where the request leaves less, the lean starts after the allowance; the arms keep their time, or start with the
    lean.
    """
    proposal = schedule().plan(swing(2.0), 1.0, STILL)
    assert (proposal.lean_start, proposal.arms_start) == (pytest.approx(1.0 + ALLOWANCE), 2.0)
    proposal = schedule().plan(swing(1.1), 1.0, STILL)
    assert proposal.lean_start == proposal.arms_start == pytest.approx(1.0 + ALLOWANCE)


def test_as_soon_as_possible_means_a_full_lead_in_from_now() -> None:
    """Stamp 0 starts the lean after the allowance and the arms a lead-in later."""
    proposal = schedule().plan(swing(0.0), 1.0, STILL)
    assert proposal.arms_start - proposal.lean_start == pytest.approx(LEAD_IN)
    assert 1.0 + ALLOWANCE <= proposal.lean_start <= 1.0 + ALLOWANCE + 0.1


def test_nothing_is_in_force_before_it_is_accepted() -> None:
    """A proposal alone changes nothing."""
    made = schedule()
    proposal = made.plan(swing(5.0), 1.0, STILL)
    assert made.busy_until(1.0) is None
    made.accept(proposal)
    assert made.busy_until(1.0) == pytest.approx(5.8)


@pytest.mark.parametrize("now", [2.9, 3.3, 4.0, 4.6, 4.9])
def test_cancelling_brings_arms_to_rest_without_a_jump(now: float) -> None:
    """Whenever a motion is cancelled, position, rate and lean go on from where they were, and the arms rest in
    stop_time.
    """
    made = schedule()
    motion = made.plan(swing(5.0), 1.0, STILL)
    made.accept(motion)
    stop = made.stop(now + 0.5)
    assert stop is not None and stop.plan is not None
    at = np.array([stop.arms_start])
    before, after = motion.path.sample(at - motion.arms_start), stop.path.sample(at - stop.arms_start)
    for a, b in zip(before[:2], after[:2], strict=True):
        assert np.abs(a - b).max() < 1e-6
    assert stop.path.duration == compensation().planner.stop_time
    assert not stop.path.sample(np.array([99.0]))[1].any()
    lean, ball = lean_at(motion, stop.lean_start)
    new_lean, new_ball = lean_at(stop, stop.lean_start)
    assert np.abs(lean - new_lean).max() < 2e-4
    assert np.abs(ball - new_ball).max() < 2e-4
    # The robot ends in balance with the ball where the first plan would have left it.
    assert np.abs(stop.plan.lean_rate[-1]).max() < 1e-3 and np.abs(stop.plan.ball[-1] + ball[:2]).max() < 1e-3


def test_nothing_to_cancel_is_no_error() -> None:
    """Without a motion, or after its end, there is nothing to stop."""
    made = schedule()
    assert made.stop(1.0) is None
    made.accept(made.plan(swing(5.0), 1.0, STILL))
    assert made.stop(6.0) is None


def test_a_second_motion_takes_over_from_the_first_under_way() -> None:
    """A motion asked for while another goes on begins where that one is: no jump in arms or lean."""
    made = schedule()
    first = made.plan(swing(5.0), 1.0, STILL)
    made.accept(first)
    second = made.plan(swing(5.4, angle=-0.3), 4.0, STILL)
    made.accept(second)
    times = np.linspace(4.0, 7.0, 3001)
    position, rate, acceleration = second.command.sample(times - second.command_start)
    assert np.abs(np.diff(rate, axis=0) / 0.001 - acceleration[1:]).max() < 0.2
    assert np.abs(np.diff(position, axis=0) / 0.001 - rate[1:]).max() < 0.02
    lean, _ = lean_at(first, second.lean_start)
    assert np.abs(lean - lean_at(second, second.lean_start)[0]).max() < 2e-4


def test_arms_that_somebody_moved_are_taken_as_measured() -> None:
    """The next motion starts at the last one's end, unless the arms are measured to be elsewhere."""
    made = schedule()
    motion = made.plan(swing(5.0), 1.0, STILL)
    made.accept(motion)
    end = motion.path.sample(np.array([9.0]))[0][0]
    assert np.array_equal(made.arms_at(9.0, end + 1e-3).position, end)
    assert np.array_equal(made.arms_at(9.0, end + 0.2).position, end + 0.2)


def test_a_motion_beyond_the_limits_is_refused_and_changes_nothing() -> None:
    """What is too fast for a joint, or moves the ball too far, is refused in one line; what was in force stays so."""
    strict = attrs.evolve(compensation(), acceptance=attrs.evolve(compensation().acceptance, ball_travel=0.001))
    made = ArmSchedule(shelver(), strict)
    made.accept(made.plan(swing(5.0), 1.0, STILL))
    with pytest.raises(PlanError, match="rad/s"):
        made.plan(swing(9.0, angle=1.0, during=0.1), 6.0, STILL)
    with pytest.raises(PlanRefused, match="would need ball travel"):
        made.plan(swing(6.0, angle=0.0), 5.9, STILL)
    assert made.busy_until(5.1) == pytest.approx(5.8)


@pytest.mark.parametrize("way", ["quasi_static", "none"])
def test_without_compensation_there_is_no_lean_plan(way: str) -> None:
    """The other kinds of compensation move the arms at the same times, and leave the lean to the loop."""
    made = ArmSchedule(shelver(), attrs.evolve(compensation(), compensation=way))
    proposal = made.plan(swing(5.0), 1.0, STILL)
    assert proposal.plan is None and proposal.arms_start == 5.0


def test_a_stop_path_keeps_within_the_joints_limits() -> None:
    """Where the way to rest would lead out of a joint's limits, it ends at the limit."""
    path = stop_path(np.array([0.9]), np.array([2.0]), np.array([0.0]), 0.8, np.array([-1.0]), np.array([1.0]))
    assert path.sample(np.array([0.8]))[0][0, 0] == pytest.approx(1.0)
    free = stop_path(np.array([0.0]), np.array([2.0]), np.array([0.0]), 0.8, np.array([-9.0]), np.array([9.0]))
    assert free.sample(np.array([0.8]))[0][0, 0] == pytest.approx(0.8)


def test_spliced_paths_change_over_at_their_time() -> None:
    """Before the time it is the first path, from it on the second."""
    first, second = ArmPath.still(np.array([1.0]), 5.0), ArmPath.still(np.array([2.0]), 1.0)
    both = Spliced(first, second, 3.0)
    assert both.sample(np.array([2.999, 3.0, 9.0]))[0][:, 0] == pytest.approx([1.0, 2.0, 2.0])
    assert both.duration == 4.0


def test_a_lean_plan_in_waiting_is_made_anew_with_the_loads_that_were_found() -> None:
    """Until ``allowance`` before the lean begins, the motion in force gets the very plan that it would have had, had
    the loads been known; its times stay. Later, or without a motion, there is none.
    """
    wise, other = schedule(), schedule()
    for hand in ("left_hand", "right_hand"):
        wise.set_load(0.5, Load(hand, 2.2, [0.0, 0.0, -0.05]))
    meant = wise.plan(swing(8.0), 1.0, STILL)
    assert other.plan_anew(1.0) is None
    other.accept(other.plan(swing(8.0), 1.0, STILL))
    for hand in ("left_hand", "right_hand"):
        other.find_load(3.0, Load(hand, 2.2, [0.0, 0.0, -0.05]), 3.0)
    anew = other.plan_anew(3.0)
    assert anew is not None and anew.plan is not None and meant.plan is not None
    assert (anew.lean_start, anew.arms_start) == (meant.lean_start, meant.arms_start)
    assert np.array_equal(anew.plan.lean, meant.plan.lean) and np.array_equal(anew.plan.torque, meant.plan.torque)
    assert other.plan_anew(anew.lean_start - 0.5 * ALLOWANCE) is None
