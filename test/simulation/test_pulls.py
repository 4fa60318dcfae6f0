"""A pull of 40 N at the hand, 1.1 m above the floor, ramped within 1 s: planned, planned wrongly, unplanned."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.hand_force import HandForce, PullWatch
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import Rehearsal
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, rehearsed, story, story_of
from helpers.robots import CONFIG, shelver

FACTOR, LATE = "right_hand.pull_factor", "right_hand.pull_late"
WRONG = [(1.2, 0.2), (1.2, -0.2), (0.8, 0.2), (0.8, -0.2)]


def unplanned(folder: Path, force: float) -> Story:
    """`cart` with nobody told of the pull, of this force, N."""
    text = (CONFIG / "plans" / "cart.yaml").read_text(encoding="utf-8")
    return story_of(text.replace("announced: true", "announced: false").replace("40.0, 0.0", f"{force}, 0.0"), folder)


def estimated(what: Story, after: tuple[float, ...], seed: int = 0) -> tuple[RunResult, list[HandForce]]:
    """Run a story; the forces that are estimated so many s after its first pull's beginning."""
    timeline = Timeline.of(what, files().compensation)
    run = Rehearsal(files(), what, "planned", timeline, None, seed)
    watch, found, tick = PullWatch(run.loop.body), [], run.loop.tick

    def looking(measured):
        answer, loop = tick(measured), run.loop
        if loop.guard.state == BALANCING and round(measured.stamp * 500) % 10 == 0:
            ball, at = loop.ball, measured.stamp
            watch.see(at, loop.lean, loop.attitude.rates[:2], (ball.vx, ball.vy), loop.senses.arm_position)
            if min(abs(at - timeline.story - what.pulls[0].time - each) for each in after) < 1e-6:
                found.append(watch.force("right_hand"))
        return answer

    run.loop.tick = looking  # type: ignore[method-assign]
    result, _ = run.run()
    return result, found


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


def test_an_unplanned_pull_is_survived_and_estimated(tmp_path: Path):
    """Nobody told of it: no fall; a second after it is all there the force is known within 10 %, and before it there
    was none, to a newton.
    """
    check_unplanned(unplanned(tmp_path, 40.0), 40.0, 0)


@pytest.mark.prove
@pytest.mark.parametrize("force", [40.0, -40.0])
@pytest.mark.parametrize("seed", range(5))
def test_an_unplanned_pull_is_survived_and_estimated_over_seeds(tmp_path: Path, force: float, seed: int):
    """Pulled and pushed, five seeds each."""
    check_unplanned(unplanned(tmp_path, force), force, seed)


def check_unplanned(what: Story, force: float, seed: int) -> None:
    result, (before, found) = estimated(what, (-0.2, 2.0), seed)
    assert not result.fell
    assert np.abs(before.force).max() < 1.0
    assert found.force[0] == pytest.approx(force, rel=0.1)
    assert abs(found.force[1]) < 0.1 * abs(force)
    assert 0.0 < found.error[0] < 0.05 * abs(force)

