"""The command line of inspect and rehearse: what they write for a program, and one line for wrong input."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from helpers.robots import CONFIG

ROOT = CONFIG.parent


def ballbal(*words: str | Path) -> subprocess.CompletedProcess:
    """Run the command in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "ballbal_ros.commands.main", *map(str, words)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=200,
        check=False,
    )


@pytest.fixture
def robot(tmp_path: Path) -> Path:
    """A copy of the demo robot's folder, to be spoiled."""
    return Path(shutil.copytree(CONFIG / "shelver", tmp_path / "robot"))


def spoil(file: Path, old: str, new: str) -> None:
    text = file.read_text()
    assert old in text
    file.write_text(text.replace(old, new, 1))


def refused(*words: str | Path) -> str:
    """The one line of a run that must end with status 2."""
    run = ballbal(*words)
    assert run.returncode == 2, (run.stdout, run.stderr)
    lines = [line for line in run.stderr.splitlines() if line.strip()]
    assert len(lines) == 1, run.stderr
    return lines[0]


def test_rehearse_writes_what_other_programs_read(tmp_path: Path):
    """--json has the shape that stack.md gives."""
    out = tmp_path / "runs.json"
    run = ballbal(
        "rehearse", "config/plans/still.yaml", "--compensation", "still", "--seed", "3", "--repeat", "2", "--json", out
    )
    assert run.returncode == 0, run.stderr
    found = json.loads(out.read_text())
    assert set(found) == {"robot", "plan", "clock", "runs", "limits", "ok"}
    assert found["robot"] == "shelver" and found["clock"] == "in-process" and found["ok"] is True
    assert [r["seed"] for r in found["runs"]] == [3, 4]
    assert set(found["runs"][0]) == {
        "compensation",
        "seed",
        "fell",
        "ball_travel_peak_mm",
        "ball_travel_end_mm",
        "lean_peak_deg",
        "drive_torque_peak_nm",
        "friction_use_peak",
        "duration_s",
        "real_time_factor",
    }
    assert set(found["limits"][0]) == {"name", "value", "limit", "unit", "ok"}


def test_outside_limits_ends_with_one(robot: Path):
    """A run that is done, but outside a limit, ends with status 1."""
    spoil(robot / "compensation.yaml", "ball_travel: 0.3", "ball_travel: 0.0001")
    run = ballbal("rehearse", "config/plans/still.yaml", "--compensation", "still", "--robot", robot)
    assert run.returncode == 1 and "beyond" in run.stdout


def test_inspect_tells_the_robot(tmp_path: Path):
    """Masses and rates are there, for a person and for a program."""
    out = tmp_path / "robot.json"
    run = ballbal("inspect", "--posture", "config/plans/reach.yaml", "--json", out)
    found = json.loads(out.read_text())
    assert run.returncode == 0
    assert found["mass_on_ball_kg"] == pytest.approx(61.66, abs=1e-6)
    for text in (
        "ball held",
        "open-loop pole",
        "lead-in",
        "floor torsion",
        "falls first" if "falls first" in run.stdout else "fall first",
    ):
        assert text in run.stdout


@pytest.mark.parametrize(
    ("file", "old", "new", "says"),
    [
        ("robot.yaml", "urdf: shelver.urdf", "urdf: nowhere.urdf", "nowhere.urdf"),
        ("robot.yaml", "mass: 4.0", "mass: -4.0", "ball.mass"),
        ("robot.yaml", "links: [left_hand, right_hand]", "links: [left_hand, third_hand]", "third_hand"),
        ("shelver.urdf", '<mass value="13.6"/>', '<mass value="-13.6"/>', "base_link"),
        (
            "shelver.urdf",
            '<joint name="left_shoulder_pitch"',
            '<joint name="left_shoulder_pitc"',
            "left_shoulder_pitch",
        ),
        ("balance.yaml", "lean_rate:", "lean_rat:", "weights.lean_rat"),
        ("simulation.yaml", "physics_step: 0.001", "physics_step: .nan", "physics_step"),
    ],
)
def test_a_wrong_robot_is_one_line(robot: Path, file: str, old: str, new: str, says: str):
    """Wrong URDF, missing joint or hand, negative mass, unknown key, NaN: one line that names it, status 2."""
    spoil(robot / file, old, new)
    assert says in refused("rehearse", "config/plans/reach.yaml", "--robot", robot)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("steps: [{move: {left_shoulder_pitch: .nan}, during: 1.0}]", "finite"),
        ("steps: [{move: {left_shoulder_pitch: -9.0}, during: 3.0}]", "left_shoulder_pitch"),
        ("steps: [{move: {left_shoulder_pitch: -1.4}, during: 0.1}]", "rad/s"),
        ("steps: [{move: {left_shoulder: -1.4}, during: 1.0}]", "left_shoulder"),
        ("steps: [{leap: {left_shoulder_pitch: -1.4}}]", "step 1"),
        ("steps: []", "steps"),
    ],
)
def test_a_wrong_plan_is_one_line(tmp_path: Path, text: str, says: str):
    """NaN, positions and speeds beyond the joints' limits, unknown joints and verbs: one line, status 2."""
    plan = tmp_path / "plan.yaml"
    plan.write_text(text)
    assert says in refused("rehearse", plan)


def test_wrong_options_are_one_line(tmp_path: Path):
    """An unknown kind, truth, folder or option: one line, status 2."""
    reach = "config/plans/reach.yaml"
    assert "quasi_static" in refused("rehearse", reach, "--compensation", "quasi-static")
    assert "floor.friction" in refused("rehearse", reach, "--truth", "floor.fricton=0.3")
    assert "robot.yaml" in refused("rehearse", reach, "--robot", tmp_path / "nobody")
    assert refused("rehearse", reach, "--sed", "3")
    assert "rehearse" in refused("rehears")
