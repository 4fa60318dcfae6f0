"""A plan that is sent before the robot knows what its hands hold is made anew once it does, over the bus."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

pytest.importorskip("rclpy")

from helpers.robots import CONFIG
from helpers.ros_stack import SHELVER, ballbal


def test_a_plan_in_waiting_is_made_anew_with_the_loads_that_were_found(ros_domain_id: int, tmp_path: Path) -> None:
    """`reach` with 10 % more in the hands than said, the plan sent at once: 5 mm at most, as in-process (11 mm with
    what was said).
    """
    file = tmp_path / "found.json"
    heavier = [word for hand in ("left", "right") for word in ("--truth", f"{hand}_hand.load=2.2")]
    plan = str(CONFIG / "plans" / "reach.yaml")
    words = ("headless", plan, "--robot", str(SHELVER), "--compensation", "planned", *heavier, "--json", str(file))
    process = ballbal(*words, domain=ros_domain_id)
    try:
        _, err = process.communicate(timeout=90.0)
    finally:
        process.kill()
    assert process.returncode == 0, err
    (run,) = json.loads(file.read_text())["runs"]
    assert not run["fell"] and run["ball_travel_peak_mm"] <= 5.0 and run["ball_travel_end_mm"] <= 1.0
