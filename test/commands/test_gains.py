"""`ballbal gains` tells what the weights amount to, to people and programs, and refuses wrong input in one line."""

from __future__ import annotations

import json
import shutil
from io import StringIO
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

from ballbal_ros.commands.gains import run_gains
from ballbal_ros.commands.posture import asked_posture
from ballbal_ros.errors import BallbalError
from helpers.balancing import reach_gains
from helpers.robots import CONFIG, reach, shelver

SHELVER = CONFIG / "shelver"
REACH = CONFIG / "plans" / "reach.yaml"


@pytest.fixture
def console() -> Console:
    """A console that keeps what is printed."""
    return Console(record=True, width=160, file=StringIO())


def edited(folder: Path, old: str, new: str) -> Path:
    """A copy of the demo robot's folder with one line of balance.yaml changed."""
    shutil.copytree(SHELVER, folder)
    text = (folder / "balance.yaml").read_text(encoding="utf-8")
    assert old in text
    (folder / "balance.yaml").write_text(text.replace(old, new), encoding="utf-8")
    return folder


def test_demo_robot_is_within_its_margins(tmp_path: Path, console: Console) -> None:
    """Exit status 0, tables for a person, and the same numbers in JSON that the design gives."""
    file = tmp_path / "gains.json"
    assert run_gains(SHELVER, REACH, json_file=file, console=console) == 0
    printed = console.export_text()
    for word in ("ball held", "open-loop pole", "phase margin, x", "delay it can bear", "ball_position"):
        assert word in printed
    found = json.loads(file.read_text(encoding="utf-8"))
    gains = reach_gains()
    np.testing.assert_allclose(found["feedback"]["lean_and_ball"], gains.station.feedback[:, :8], rtol=1e-6, atol=1e-6)
    assert found["ok"] is True
    assert found["loads"] == {"left_hand": 2.0, "right_hand": 2.0}
    assert found["ball_held_rate"]["pitch"] == pytest.approx(gains.model.ball_held_rate[1])
    assert all({"name", "value", "limit", "unit", "ok"} <= set(limit) for limit in found["limits"])


def test_too_little_margin_is_exit_status_one(tmp_path: Path, console: Console) -> None:
    """A loop outside its margins is told as such: status 1, and the table says which."""
    folder = edited(tmp_path / "slow", "delay: 0.002", "delay: 0.04")
    file = tmp_path / "gains.json"
    assert run_gains(folder, json_file=file, console=console) == 1
    assert "too little" in console.export_text()
    assert json.loads(file.read_text(encoding="utf-8"))["ok"] is False


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("torque: 20.0", "torque: -1.0", r"balance\.yaml: weights\.torque is -1"),
        ("torque: 20.0", "torqe: 20.0", r"unknown parameter weights\.torqe; did you mean weights\.torque"),
        ("torque: 20.0", "torque: 20", "write 20.0"),
        ("rate: 500.0", "rate: .nan", r"loop\.rate is nan"),
    ],
)
def test_wrong_parameters_are_one_line(tmp_path: Path, console: Console, old: str, new: str, said: str) -> None:
    """A wrong value, key or type in balance.yaml is refused in one line with file and key."""
    with pytest.raises(BallbalError, match=said) as refused:
        run_gains(edited(tmp_path / "robot", old, new), console=console)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize(
    ("joints", "loads", "said"),
    [
        (("left_elbw_pitch=1.0",), (), "did you mean left_elbow_pitch"),
        (("left_elbow_pitch",), (), "NAME=VALUE"),
        (("left_elbow_pitch=nan",), (), "NAME=VALUE"),
        (("left_elbow_pitch=99",), (), "its range is"),
        ((), ("left_hand=-1",), "-1"),
        ((), ("foot=1",), "known: left_hand, right_hand"),
        ((), ("left_hand=99",), "99"),
    ],
)
def test_wrong_options_are_one_line(joints: tuple[str, ...], loads: tuple[str, ...], said: str) -> None:
    """An unknown joint or hand, or a value outside its range, is refused in one line that says what would do."""
    with pytest.raises(BallbalError, match=said) as refused:
        asked_posture(shelver(), None, joints, loads)
    assert "\n" not in str(refused.value)


def test_posture_comes_from_plan_and_options() -> None:
    """A plan's start gives posture and loads; options change single ones."""
    asked = asked_posture(shelver(), REACH, ("left_elbow_pitch=-0.7",), ("left_hand=1.0",))
    expected = reach().first.copy()
    expected[shelver().joint_index("left_elbow_pitch", "test")] = -0.7
    np.testing.assert_allclose(asked.arm_position, expected)
    assert asked.loads == {"left_hand": 1.0, "right_hand": 2.0}
    assert asked.posture.mass == pytest.approx(reach().body().mass - 1.0)
