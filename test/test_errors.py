"""What is wrong is said in one line that one reads."""

from __future__ import annotations

from pathlib import Path

import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import read_story
from helpers.robots import shelver


def test_an_error_is_one_line_however_long_its_reasons_are() -> None:
    """Line breaks go, and of a hundred reasons the first ones stay; where and remedy are still told."""
    line = str(BallbalError("file.yaml", "\n".join(f"key{k} is wrong" for k in range(100)), "known: " + "key " * 300))
    assert line.startswith("file.yaml: key0 is wrong key1") and "; known: key" in line
    assert "\n" not in line and len(line) < 1000


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ("steps: '- wait: 1.3'", "it takes a list of steps"),
        ("steps: [{move: {left_elbow_pitch: -0.1}, during: 1e-12}]", "moves the arms in no time"),
        ("start: {loads: [book]}\nsteps: [{wait: 1.0}]", "no mapping"),
    ],
)
def test_plan_files_that_ten_thousand_spoilt_ones_were_like(steps: str, words: str, tmp_path: Path) -> None:
    """Each was a traceback, or a line that nobody could use."""
    file = tmp_path / "plan.yaml"
    file.write_text(f"name: odd\n{steps}\n")
    with pytest.raises(BallbalError, match=words):
        read_story(file, shelver())
