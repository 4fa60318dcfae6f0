"""A pull of 40 N at the hand, 1.1 m above the floor, ramped within 1 s: planned, planned wrongly."""

from __future__ import annotations

import numpy as np
import pytest

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.hand_force import HandForce, PullWatch
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import Rehearsal
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, rehearsed, story
from helpers.robots import shelver

FACTOR, LATE = "right_hand.pull_factor", "right_hand.pull_late"
WRONG = [(1.2, 0.2), (1.2, -0.2), (0.8, 0.2), (0.8, -0.2)]


def estimated(what: Story, after: float, seed: int = 0) -> tuple[RunResult, HandForce]:
    """Run a story; the force that is estimated `after` s from its first pull's beginning."""
    timeline = Timeline.of(what, files().compensation)
    run = Rehearsal(files(), what, "planned", timeline, None, seed)
    watch, found, tick = PullWatch(run.loop.body), [], run.loop.tick

    def looking(measured):
        answer, loop = tick(measured), run.loop
        if loop.guard.state == BALANCING and round(measured.stamp * 500) % 10 == 0:
            ball, at = loop.ball, measured.stamp
            watch.see(at, loop.lean, loop.attitude.rates[:2], (ball.vx, ball.vy), loop.senses.arm_position)
            if abs(at - timeline.story - what.pulls[0].time - after) < 1e-6:
                found.append(watch.force("right_hand"))
        return answer

    run.loop.tick = looking  # type: ignore[method-assign]
    result, _ = run.run()
    return result, found[0]


def test_the_hand_is_where_the_figure_says():
    """`cart` is pulled 1.1 m above the floor, before the middle of the body."""
    hand = WholeBody(shelver()).hand_position("right_hand", story("cart").posture)
    assert hand[2] + shelver().parameters.ball.radius == pytest.approx(1.1, abs=0.005)
    assert abs(hand[1]) < 0.005
    assert story("cart").pulls[0].force == (40.0, 0.0, 0.0) and story("cart").pulls[0].during == 1.0


def test_a_planned_pull_hardly_moves_the_ball():
    """Planned and true: at most 3 mm, with the pull's end and its standing for seconds."""
    run = rehearsed(story("cart"), "planned")[0]
    assert not run.fell and run.ball_travel_peak_mm <= 3.0 and run.ball_travel_end_mm <= 1.0


def test_a_door_is_pushed_and_rolled_with():
    """The closer's force, the roll and the letting go, planned together, keep the ball on its way."""
    run = rehearsed(story("door"), "planned")[0]
    assert not run.fell and run.ball_travel_peak_mm <= 5.0


@pytest.mark.parametrize(("factor", "late"), [(1.2, -0.2)])
def test_a_pull_planned_wrongly_is_survived(factor: float, late: float):
    """20 % stronger and 0.2 s earlier than planned: no fall, at most 120 mm."""
    check_wrong(factor, late, range(1))


@pytest.mark.prove
@pytest.mark.parametrize(("factor", "late"), WRONG)
def test_a_pull_planned_wrongly_is_survived_over_seeds(factor: float, late: float):
    """20 % and 0.2 s off, either way: no fall, at most 120 mm, ten seeds."""
    check_wrong(factor, late, range(10))


def check_wrong(factor: float, late: float, seeds: range) -> None:
    runs = rehearsed(story("cart"), "planned", seeds, truth=[f"{FACTOR}={factor}", f"{LATE}={late}"])
    assert not any(run.fell for run in runs)
    assert max(run.ball_travel_peak_mm for run in runs) <= 120.0


def test_nothing_pulls_at_a_robot_that_stands():
    """With nothing moving the estimate is nothing, to a newton."""
    _, found = estimated(story("cart"), -0.2)
    assert np.abs(found.force).max() < 1.0
