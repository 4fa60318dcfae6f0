"""`ballbal stream`: travel against delay, for a person and for a program."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from ballbal_ros.commands.stream import stream
from ballbal_ros.errors import BallbalError
from helpers.robots import CONFIG

NOD = "steps: [{move: {left_shoulder_pitch: -0.4}, during: 0.6}, {wait: 0.3}]"


def test_the_table_is_printed_and_written(tmp_path: Path) -> None:
    """One row for each delay, a document with one run each, a picture, exit status 0."""
    plan = tmp_path / "nod.yaml"
    plan.write_text(NOD, encoding="utf-8")
    files = ("--json", str(tmp_path / "a.json"), "--figure", str(tmp_path / "a.png"))
    words = ("--delay", "0.1", "--delay", "0.3", *files)
    done = subprocess.run(
        [sys.executable, "-m", "ballbal_ros.commands.main", "stream", str(plan), *words],
        cwd=CONFIG.parent, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "0.3" in done.stdout and "time of a plan" in done.stdout
    document = json.loads((tmp_path / "a.json").read_text(encoding="utf-8"))
    assert [run["delay_s"] for run in document["runs"]] == [0.1, 0.3]
    assert document["runs"][0]["compensation"] == "streamed" and document["ok"]
    assert (tmp_path / "a.png").stat().st_size > 1000


def test_what_can_not_be_streamed_is_refused(tmp_path: Path) -> None:
    """A delay out of range, and a plan that rolls, each in one line."""
    plan = CONFIG / "plans" / "reach.yaml"
    with pytest.raises(BallbalError, match="--delay: is 3 s"):
        stream(plan, CONFIG / "shelver", [3.0])
    with pytest.raises(BallbalError, match="rolls"):
        stream(CONFIG / "plans" / "door.yaml", CONFIG / "shelver", [0.2])
