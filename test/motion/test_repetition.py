"""A motion done again gets better, within bounds, and what was learnt holds for one model, load and plan alone."""

from __future__ import annotations

from pathlib import Path

import attrs
import numpy as np
import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.learned_file import read_learned, write_learned
from ballbal_ros.motion.plan_mark import PlanMark, plan_mark
from ballbal_ros.motion.repetition import Learned, Record, lacking_in_run, learn
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import plan_story, request_of
from ballbal_ros.simulation.repeating import Repetitions
from ballbal_ros.simulation.run_result import median
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from helpers.rehearsing import changed, files, rehearsed, story

X = PlanMark("x", "abc")
HEAVIER = ("left_hand.load=2.2", "right_hand.load=2.2")


def timeline(differs: bool = False) -> Timeline:
    return Timeline.of(story("reach"), files().compensation, None, differs)


def still_record(plan) -> Record:
    none = np.zeros((int(plan.duration / 0.002) + 1, 2))
    return Record(0.002, none, none, none)


def test_a_run_on_its_plan_lacks_nothing():
    """A run that is where its plan is shows no moment: the planner's own rows are met (to 0.01 N m)."""
    plan, request = plan_story(files(), story("reach"), timeline()), request_of(files(), story("reach"), timeline())
    body = WholeBody(files().description, story("reach").start_loads)
    moment, torque = lacking_in_run(body, request, plan, still_record(plan))
    assert np.abs(moment).max() < 0.01 and np.abs(torque).max() < 0.01


def test_a_load_too_heavy_shows_as_the_moment_that_it_makes():
    """A run on the plan that is right for 0.4 kg more shows, to who doesn't know of them, g x more at its end."""
    request = request_of(files(), story("reach"), timeline())
    heavier = [Load(load.hand, 1.1 * load.mass, load.center) for load in story("reach").start_loads]
    plan = plan_story(files(), story("reach"), timeline(), heavier)
    body = WholeBody(files().description, story("reach").start_loads)
    learned = learn(None, X, lacking_in_run(body, request, plan, still_record(plan)), request, files().compensation)
    arms = request.arms.sample(np.array([0.0, 10.0]))[0]
    ahead = []
    for arm, lean in zip(arms, plan.lean[[0, -1]]):
        place, turn = body.hand_placement("left_hand", arm)
        ahead.append((rotation_lean(lean) @ (place + turn @ heavier[0].center))[0])
    assert learned.moment[-1, 1] == pytest.approx(0.4 * 9.80665 * (ahead[1] - ahead[0]), rel=0.01)
    assert np.all(learned.moment[: int(0.4 * request.lead_in / learned.step)] == 0.0)


def test_what_is_learnt_is_bounded_and_a_mean_over_the_runs():
    """A wild run teaches no more than ``repetition.moment``, and a second one counts half."""
    request, parameters = request_of(files(), story("reach"), timeline()), files().compensation
    wild = np.zeros((400, 2))
    wild[200:] = 1e3
    first = learn(None, X, (wild, wild), request, parameters)
    assert np.abs(first.moment).max() == parameters.repetition.moment == np.abs(first.torque).max()
    second = learn(first, X, (0.0 * wild, 0.0 * wild), request, parameters)
    assert second.runs == 2 and np.allclose(second.moment, 0.5 * first.moment, atol=1e-3)
    assert learn(first, PlanMark("x", "y"), (wild, wild), request, parameters).runs == 1


def test_another_load_plan_or_model_makes_another_mark():
    """The mark changes with a gram in a hand, the plan's grid, and the robot's parameters; else it is the same."""
    request, given = request_of(files(), story("reach"), timeline()), files().compensation
    loads = story("reach").start_loads
    mark = plan_mark(files().description, loads, request, given)
    assert mark == plan_mark(files().description, loads, request, given)
    heavier = [attrs.evolve(loads[0], mass=2.001), loads[1]]
    assert plan_mark(files().description, heavier, request, given) != mark
    finer = changed(compensation={"planner.step": 0.005}).compensation
    assert plan_mark(files().description, loads, request, finer) != mark
    other = attrs.evolve(files().description, urdf_text=files().description.urdf_text + " ")
    assert plan_mark(other, loads, request, given) != mark


def test_what_was_learnt_is_read_back_and_anything_else_is_refused(tmp_path: Path):
    """The file gives back what was written; a file that holds something else is refused in one line that names it."""
    values = np.round(np.random.default_rng(0).standard_normal((50, 2)), 4)
    path = tmp_path / "reach.learned.yaml"
    write_learned(path, Learned(X, 3, 0.01, values, 2.0 * values))
    back = read_learned(path)
    assert (back.mark, back.runs, back.step) == (X, 3, 0.01)
    assert np.array_equal(back.moment, values) and np.array_equal(back.torque, 2.0 * values)
    for text in ("name: x", path.read_text(encoding="utf-8").replace("[", "[.nan, ", 1), "fits: [", "- 1"):
        path.write_text(text, encoding="utf-8")
        with pytest.raises(BallbalError, match="reach.learned.yaml"):
            read_learned(path)


def test_the_second_time_the_ball_hardly_moves():
    """``reach`` with 10 % more in the hands than said, not weighed: 10 mm at most the first time, 4 mm the second."""
    truth = parse_truth(HEAVIER, files().description)
    repetitions = Repetitions(files(), story("reach"), timeline(True), truth)
    first, second = (repetitions.run(seed)[0] for seed in range(2))
    assert not first.fell and first.ball_travel_peak_mm <= 10.0 and first.ball_travel_end_mm <= 1.0
    assert not second.fell and second.ball_travel_peak_mm <= 4.0


@pytest.mark.prove
def test_the_fifth_time_is_near_the_noise_floor():
    """The same over 20 series of five runs: the worst of the first and of the second repetition, and the median of the
    fifth within twice the noise floor.
    """
    truth = parse_truth(HEAVIER, files().description)
    peaks: list[list[float]] = []
    still = []
    for series in range(20):
        repetitions = Repetitions(files(), story("reach"), timeline(True), truth)
        runs = [repetitions.run(5 * series + k)[0] for k in range(5)]
        assert not any(run.fell for run in runs) and runs[0].ball_travel_end_mm <= 1.0
        peaks.append([run.ball_travel_peak_mm for run in runs])
        still.append(rehearsed(story("reach"), "still", (series,))[0].ball_travel_peak_mm)
    assert max(run[0] for run in peaks) <= 10.0 and max(run[1] for run in peaks) <= 4.0
    assert median([run[4] for run in peaks]) <= 2.0 * median(still)
