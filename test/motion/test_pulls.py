"""What the world exerts on a hand, from plan file to lean: ramps, what stays, what the floor must bear."""

from __future__ import annotations

from pathlib import Path

import attrs
import numpy as np
import pytest

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.arm_motion import Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import HandWrench, PlanRequest
from ballbal_ros.motion.pulls import Pull, at_time, hand_wrenches, joined
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.whole_body import WholeBody
from helpers.rehearsing import story, story_of
from helpers.robots import compensation, shelver

HAND = "right_hand"


def pulled(force: tuple[float, float, float], during: float = 1.0) -> HandWrench:
    (wrench,) = hand_wrenches([Pull(0.0, during, HAND, force, (0.0, 0.0, 0.0), True)])
    return wrench


def test_a_pull_ramps_evenly_and_stays() -> None:
    """Half-way through its ramp it is half of what it comes to, and it stays until the next."""
    pulls = [
        Pull(1.0, 1.0, HAND, (40.0, 0.0, 0.0), (0.0, 0.0, 2.0), True),
        Pull(5.0, 2.0, HAND, (0.0, 0.0, 0.0), (0.0, 0.0, 0.0), True),
    ]
    (wrench,) = hand_wrenches(pulls)
    forces = [at_time(wrench, time)[0][0] for time in (0.0, 1.0, 1.5, 2.0, 5.0, 6.0, 7.0, 9.0)]
    assert forces == pytest.approx([0.0, 0.0, 20.0, 40.0, 40.0, 20.0, 0.0, 0.0])
    assert at_time(wrench, 3.0)[1][2] == 2.0


def test_a_steady_pull_is_leant_against_and_borne_by_the_floor() -> None:
    """At rest under a pull f at height h: m g times the mass centre's offset is f h, the drive holds the ball with r f,
    and the floor gives f by friction. (By hand: moments about the contact, and about the ball's centre.)
    """
    force, posture = 40.0, story("cart").posture
    body = WholeBody(shelver())
    plan = plan_lean(body, PlanRequest(ArmPath.still(posture), 1.6, wrenches=[pulled((force, 0, 0))]), compensation())
    pitch = plan.lean[-1, 1]
    at = np.array([[np.cos(pitch), 0, np.sin(pitch)], [0, 1, 0], [-np.sin(pitch), 0, np.cos(pitch)]])
    hand, center = (at @ where for where in (body.hand_position(HAND, posture), body.posture(posture).center))
    radius = shelver().parameters.ball.radius
    assert -body.mass * GRAVITY * center[0] == pytest.approx(force * (hand[2] + radius), rel=2e-3)
    assert plan.torque[-1, 1] == pytest.approx(radius * force, rel=1e-3)
    (friction,) = (use.value for use in plan.uses if use.name == "friction use")
    assert friction >= force / (shelver().parameters.floor.friction * (body.mass + 4.0) * GRAVITY)


def test_a_pull_from_the_side_is_refused() -> None:
    """A pull beside the robot turns it: beyond the floor's spin moment nothing holds it, and the plan says so."""
    posture = story("reach").posture
    request = PlanRequest(ArmPath.still(posture), 1.6, wrenches=[pulled((40.0, 0.0, 0.0))])
    with pytest.raises(PlanError, match="torsion use"):
        plan_lean(WholeBody(shelver()), request, compensation()).refuse_beyond_limits("test")


def test_what_pulls_at_a_motions_end_is_reckoned_with_in_the_next() -> None:
    """A second motion begins with the lean that the first one ended with, as the pull goes on; a new one ends it."""
    schedule, posture = ArmSchedule(shelver(), compensation()), story("cart").posture
    still = Wanted(3.0, 0.0, lambda state: ArmPath.still(state.position), None, [pulled((40.0, 0.0, 0.0))])
    first = schedule.plan(still, 0.0, posture)
    schedule.accept(first)
    second = schedule.plan(attrs.evolve(still, stamp=15.0, wrenches=()), 12.0, posture)
    assert first.plan is not None and second.plan is not None
    assert np.abs(second.plan.lean - first.plan.lean[-1]).max() < 1e-6
    schedule.accept(second)
    let_go = HandWrench(HAND, np.array([0.0, 1.0]), np.array([[40.0, 0, 0], [0.0, 0, 0]]), np.zeros((2, 3)))
    third = schedule.plan(attrs.evolve(still, stamp=20.0, wrenches=[let_go]), 17.0, posture)
    assert third.plan is not None
    assert np.abs(third.plan.lean[0] - first.plan.lean[-1]).max() < 1e-4
    assert np.abs(third.plan.lean[-1] - first.plan.lean[0]).max() < 1e-4
    schedule.forget_wrenches()
    assert np.abs(schedule.plan(attrs.evolve(still, stamp=30.0, wrenches=()), 27.0, posture).plan.torque).max() < 1e-3


def test_joining_keeps_what_nothing_new_is_said_of() -> None:
    """Of two hands, the one that is told of anew changes from then on, and was as it was before."""
    other = attrs.evolve(pulled((0.0, 5.0, 0.0)), hand="left_hand")
    new = attrs.evolve(pulled((-10.0, 0.0, 0.0)), times=np.array([4.0, 5.0]))
    found = {wrench.hand: wrench for wrench in joined([pulled((40.0, 0.0, 0.0)), other], [new], 4.0)}
    assert at_time(found["left_hand"], 9.0)[0][1] == 5.0
    assert [at_time(found[HAND], time)[0][0] for time in (0.5, 3.9, 9.0)] == pytest.approx([20.0, 40.0, -10.0])


@pytest.mark.parametrize(
    ("step", "says"),
    [
        ("{pull: {hand: third_hand, force: [1, 0, 0], during: 1.0}}", "unknown hand third_hand"),
        ("{pull: {hand: right_hand, force: [1, 0], during: 1.0}}", "force"),
        ("{pull: {hand: right_hand, force: [1, 0, 0]}}", "during"),
        ("{pull: {hand: right_hand, force: [.nan, 0, 0], during: 1.0}}", "finite"),
    ],
)
def test_a_pull_that_can_not_be_read_is_refused(tmp_path: Path, step: str, says: str) -> None:
    """An unknown hand, a missing number, time or not a number: one line each."""
    with pytest.raises(PlanError, match=says):
        story_of(f"steps: [{step}]", tmp_path)
