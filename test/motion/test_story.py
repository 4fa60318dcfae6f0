"""Plan files on a timeline."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from ballbal_ros.motion.story import read_story
from helpers.robots import shelver


def test_a_roll_without_a_time_keeps_to_the_limits(tmp_path: Path) -> None:
    """However far it rolls or turns, it takes so long that ball and heading stay below `limits` of robot.yaml."""
    file = tmp_path / "turn.yaml"
    file.write_text("steps: [{roll: {x: 2.0, heading: 0.1}}, {roll: {x: 2.0, heading: 6.2}}, {wait: 1.0}]")
    ball = read_story(file, shelver()).ball
    assert ball is not None
    limits = shelver().parameters.limits
    assert np.hypot(*ball.rate[:, :2].T).max() <= limits.ball_speed
    assert 0.8 * limits.heading_rate <= np.abs(ball.rate[:, 2]).max() < limits.heading_rate
