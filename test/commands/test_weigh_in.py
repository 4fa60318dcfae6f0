"""Weighing in, from the command to the plan that is right again: the simulated robot in one process."""

from __future__ import annotations

import json
from pathlib import Path

import attrs
import pytest
from typer.testing import CliRunner

from ballbal_ros.commands.files import read_robot
from ballbal_ros.commands.main import app
from ballbal_ros.commands.weigh_in import weighed_text
from ballbal_ros.commands.weighing_run import LONGEST, Weighing, rehearsed, run_weighing
from ballbal_ros.declaration import build, flatten, parameters_of
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.run_result import median
from ballbal_ros.simulation.truth import Truth, drawn_truth, parse_truth
from ballbal_ros.simulation.world import World
from ballbal_ros.weighing.postures import DesignSettings
from ballbal_ros.weighing.procedure import ProcedureSettings
from ballbal_ros.yaml_files import parse_yaml
from helpers.rehearsing import files, story
from helpers.robots import CONFIG, reach


def scale(truth: Truth) -> float:
    """What a scale with steps of 0.1 kg shows for all that stands on the ball."""
    world = World.build(files().description, files().simulation, truth)
    return round(world.mass - files().description.parameters.ball.mass, 1)


QUICK = ProcedureSettings(settle=(0.5, 2.0), look=1.0, swing_periods=(1.6,))


def weighing(
    truth: Truth, seed: int, count: int = 8, procedure: ProcedureSettings | None = None, servo: bool = False
) -> Weighing:
    """Weigh a robot in, from the start of `reach`."""
    design = DesignSettings(count=count)
    return run_weighing(files(), reach().first, truth, seed, scale(truth), design, procedure, servo)


def test_after_a_short_weighing_a_robot_unlike_its_drawing_keeps_its_ball_again(tmp_path: Path):
    """Masses, mass centres and IMU tilt drawn at random, arm servos on position alone at 20 rad/s, and only three
    postures: `reach` costs centimetres before, and a few millimetres after. What is written reads back the same.
    """
    servo = {"arm_servo": "position", "arm_servo_bandwidth": 20.0}
    drawn = drawn_truth(files().description, 1)
    truth = attrs.evolve(drawn, parameters={**drawn.parameters, **servo})
    found = weighing(truth, 1, 3, QUICK, servo=True)
    assert found.seconds <= LONGEST
    assert found.servo is not None and found.servo.kind == "position"
    assert found.servo.bandwidth == pytest.approx(20.0, rel=0.1)
    before, after = (rehearsed(robot, story("reach"), truth, 1) for robot in (files(), found.files(files())))
    assert not before.fell and not after.fell
    assert after.ball_travel_peak_mm <= 5.0
    assert before.ball_travel_peak_mm >= 10.0 * after.ball_travel_peak_mm
    text = weighed_text((CONFIG / "shelver" / "robot.yaml").read_text(), found.files(files()), "robot.yaml")
    assert "# What the demo robot shelver is." in text
    read = flatten(build(RobotParameters, parameters_of(parse_yaml(text, "robot.yaml"), "robot.yaml"), "robot.yaml"))
    for name, value in flatten(found.files(files()).description.parameters).items():
        names = isinstance(value, str) or (isinstance(value, list) and value and isinstance(value[0], str))
        assert read[name] == (value if names else pytest.approx(value, rel=1e-6)), name


@pytest.mark.parametrize(
    "words, says",
    [
        (["--robot", "nowhere"], "--robot"),
        (["--truth", "drawn=x"], "drawn"),
        (["--posture", "nowhere.yaml"], "nowhere.yaml"),
        (["--truth", "colour=blue"], "colour"),
    ],
)
def test_wrong_input_ends_it_before_it_begins(words: list[str], says: str):
    """Wrong input is one line that names it; nothing moves."""
    run = CliRunner().invoke(app, ["weigh-in", *words])
    assert run.exit_code != 0 and says in str(run.exception)


@pytest.mark.prove
def test_the_command_writes_what_other_programs_read(tmp_path: Path):
    """--json, --output and --plan as a user gives them: the gain is told, and the file makes a robot that has it."""
    found, robot = tmp_path / "found.json", tmp_path / "robot"
    robot.mkdir()
    for file in (CONFIG / "shelver").iterdir():
        (robot / file.name).write_text(file.read_text())
    plan = str(CONFIG / "plans" / "reach.yaml")
    words = ["weigh-in", "--posture", plan, "--truth", "drawn=2", "--plan", plan, "--json", str(found)]
    run = CliRunner().invoke(app, [*words, "--output", str(robot / "robot.yaml")])
    assert run.exit_code == 0, run.output
    document = json.loads(found.read_text())
    peaks = {name: [r["ball_travel_peak_mm"] for r in document[name]] for name in ("before", "after", "likely")}
    assert median(peaks["after"]) < 0.5 * median(peaks["before"]) and len(peaks["likely"]) == 5
    truth = parse_truth(["drawn=2"], files().description)
    again = rehearsed(read_robot(robot), story("reach"), truth)
    assert again.ball_travel_peak_mm == pytest.approx(peaks["after"][0], rel=0.3)


@pytest.mark.prove
def test_weighing_in_brings_reach_back_to_millimetres_over_twenty_seeds():
    """20 robots unlike their drawing: after weighing in within three minutes, `reach` takes 3 mm or less in the
    middle, 8 mm at worst.
    """
    before, after = [], []
    for seed in range(20):
        truth = drawn_truth(files().description, seed)
        found = weighing(truth, seed)
        assert found.seconds <= LONGEST
        for robot, runs in ((files(), before), (found.files(files()), after)):
            runs.append(rehearsed(robot, story("reach"), truth, seed))
    assert not any(run.fell for run in before + after)
    peaks = [run.ball_travel_peak_mm for run in after]
    assert median(peaks) <= 3.0 and max(peaks) <= 8.0
    assert median([run.ball_travel_peak_mm for run in before]) >= 2.0 * median(peaks)


@pytest.mark.prove
def test_a_slow_servo_that_is_known_costs_hardly_more_than_an_ideal_one():
    """Arm servos at 20 rad/s on position alone: `reach` after weigh-in --servo costs at most three times the ideal."""
    truth = parse_truth(["arm_servo=position", "arm_servo_bandwidth=20"], files().description)
    known = attrs.evolve(files(), description=weighing(truth, 0, 3, servo=True).servo.into(files().description))
    slow = [rehearsed(known, story("reach"), truth, seed).ball_travel_peak_mm for seed in range(5)]
    ideal = [rehearsed(files(), story("reach"), Truth(), seed).ball_travel_peak_mm for seed in range(5)]
    assert median(slow) <= 3.0 * median(ideal)
