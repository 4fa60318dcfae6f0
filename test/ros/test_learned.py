"""What rehearsals of a plan have taught is planned with over the bus as it is in the next rehearsal."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.motion.learned_file import write_learned
from ballbal_ros.simulation.repeating import Repetitions
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from helpers.rehearsing import files, story
from helpers.robots import CONFIG
from helpers.ros_stack import SHELVER, ballbal

HEAVIER = ("left_hand.load=2.2", "right_hand.load=2.2")


def test_reach_with_what_was_learnt_is_what_the_rehearsal_says(ros_domain_id: int, tmp_path: Path) -> None:
    """`reach` with 10 % more in the hands than said, in lock-step, planned with what one rehearsal has taught: the same
    peak as the second rehearsal's to a micrometre, half of the first one's and less; and the run says
    which file it was planned with.
    """
    told = story("reach")
    timeline = Timeline.of(told, files().compensation, None, True)
    repetitions = Repetitions(files(), told, timeline, parse_truth(HEAVIER, files().description))
    first, _ = repetitions.run(0)
    learned = tmp_path / "reach.learned.yaml"
    assert repetitions.learned is not None
    write_learned(learned, repetitions.learned)
    second, _ = repetitions.run(1, learning=False)
    file = tmp_path / "found.json"
    truth = [word for item in HEAVIER for word in ("--truth", item)]
    words = ("headless", str(CONFIG / "plans" / "reach.yaml"), "--robot", str(SHELVER), "--compensation", "planned")
    more = (*truth, "--seed", "1", "--learned", str(learned), "--json", str(file))
    process = ballbal(*words, *more, domain=ros_domain_id)
    try:
        _, err = process.communicate(timeout=150.0)
    finally:
        process.kill()
    assert process.returncode == 0, err
    found = json.loads(file.read_text())
    assert found["notes"] == ["planned, seed 1: learnt before: reach.learned.yaml, 1 run"]
    (run,) = found["runs"]
    assert not run["fell"]
    assert run["ball_travel_peak_mm"] == pytest.approx(second.ball_travel_peak_mm, abs=1e-3)
    assert run["ball_travel_peak_mm"] < 0.5 * first.ball_travel_peak_mm
