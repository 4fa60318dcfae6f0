"""Wrong input: one line that says where and why, exit status 2, and nothing has started."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.commands import headless_run
from ballbal_ros.commands.headless import headless
from ballbal_ros.errors import BallbalError
from helpers.ros_stack import NOD, SHELVER, ballbal, children_of, node_process


def _edit(file: str, old: str, new: str) -> Callable[[Path], None]:
    def change(folder: Path) -> None:
        path = folder / file
        text = path.read_text()
        assert old in text, f"{file} has no {old!r}"
        path.write_text(text.replace(old, new, 1))

    return change


WRONG: dict[str, tuple[Callable[[Path], None], str]] = {
    "no such URDF": (_edit("robot.yaml", "urdf: shelver.urdf", "urdf: other.urdf"), "other.urdf"),
    "a URDF that is none": (_edit("shelver.urdf", "<robot", "<rabbit"), "shelver.urdf"),
    "a hand that is no link": (_edit("robot.yaml", "right_hand]", "third_hand]"), "third_hand"),
    "a negative mass": (_edit("shelver.urdf", '<mass value="', '<mass value="-'), "mass is -"),
    "an unknown key": (_edit("balance.yaml", "rate: 500.0", "rat: 500.0"), "loop.rat"),
    "a value out of its range": (_edit("compensation.yaml", "tail: 1.6", "tail: 60.0"), "planner.tail"),
    "an integer for a number": (_edit("simulation.yaml", "physics_step: 0.001", "physics_step: 1"), "physics_step"),
    "a missing joint": (_edit("nod.yaml", "{left_shoulder_pitch", "{left_shoulder_pich"), "left_shoulder_pich"),
    "a NaN in the plan": (_edit("nod.yaml", "-0.4, right", ".nan, right"), "nan"),
    "a plan beyond a joint's limits": (_edit("nod.yaml", "-0.4, right", "-9.0, right"), "its limits are"),
    "a plan without end": (_edit("nod.yaml", "during: 0.8", "during: 1e9"), "at most 300 s"),
    "a negative load": (_edit("nod.yaml", "mass: 1.0", "mass: -1.0"), "mass"),
    "too heavy a load": (_edit("nod.yaml", "mass: 1.0", "mass: 100.0"), "100"),
}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A copy of the demo robot's folder, with a plan in it."""
    made = tmp_path / "robot"
    shutil.copytree(SHELVER, made)
    (made / "nod.yaml").write_text(NOD)
    return made


@pytest.mark.parametrize("name", WRONG)
def test_wrong_input_starts_nothing(name: str, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever is wrong in a file, the runner says it in one line before it starts a process."""

    def must_not_start(*_: Any) -> None:
        raise AssertionError("a process was started")

    monkeypatch.setattr(headless_run.Processes, "start", must_not_start)
    change, words = WRONG[name]
    change(folder)
    with pytest.raises(BallbalError) as error:
        headless(folder / "nod.yaml", folder, ("planned",))
    assert words in str(error.value) and "\n" not in str(error.value)


@pytest.mark.parametrize(
    "words", [("--clock", "fast"), ("--namespace", "a-b"), ("--truth", "x=1"), ("--compensation", "no")]
)
def test_wrong_options_exit_2_with_one_line(words: tuple[str, str], folder: Path, ros_domain_id: int) -> None:
    """An option that can't be is one line on standard error, exit status 2."""
    process = ballbal("headless", str(folder / "nod.yaml"), "--robot", str(folder), *words, domain=ros_domain_id)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 2
    assert len(err.strip().splitlines()) == 1 and words[0] in err
    assert not children_of(process.pid)


@pytest.mark.parametrize(
    ("executable", "words", "said"),
    [
        ("balance", ("-p", "loop.rat:=500.0"), "loop.rat"),
        ("balance", ("-p", "loop.rate:=500"), "write 500.0"),
        ("arm_compensation", ("-p", "planner.tail:=.nan"), "planner.tail"),
        ("simulated_robot", ("-p", "truth:=['floor.frictoin=0.3']"), "floor.friction"),
        ("whole_body_kinematics", ("-p", "urdf:=/no/such.urdf"), "/no/such.urdf"),
    ],
)
def test_a_node_with_wrong_parameters_leaves_with_one_line(
    executable: str, words: tuple[str, ...], said: str, ros_domain_id: int
) -> None:
    """A node checks what it is given as well: one line on standard error, exit status 2."""
    process = node_process(executable, "--ros-args", *words, domain=ros_domain_id)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 2, err
    assert len(err.strip().splitlines()) == 1 and said in err
