"""Which nodes make the stack, and how they are started."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.stack import RobotFolder, checked_namespace, headless_stack, robot_stack
from helpers.robots import CONFIG

SHELVER = CONFIG / "shelver"


def test_every_node_gets_the_files_it_reads() -> None:
    """robot.yaml goes to all; each node's own file to it alone; no file is missing."""
    nodes = headless_stack(RobotFolder.checked(SHELVER, simulated=True))
    files = {node.executable: [path.name for path in node.files] for node in nodes}
    assert files == {
        "whole_body_kinematics": ["robot.yaml"],
        "arm_compensation": ["robot.yaml", "compensation.yaml"],
        "balance": ["robot.yaml", "balance.yaml"],
        "simulated_robot": ["robot.yaml", "simulation.yaml"],
    }
    assert all(path.is_file() for node in nodes for path in node.files)


def test_a_robots_stack_has_no_simulation() -> None:
    """On a robot nothing of the simulation starts, and time is the wall clock's."""
    nodes = robot_stack(RobotFolder.checked(SHELVER, simulated=False))
    assert [node.executable for node in nodes] == ["whole_body_kinematics", "arm_compensation", "balance"]
    assert not any(node.parameters["use_sim_time"] for node in nodes)


def test_command_lines_carry_values_that_ros_reads_back() -> None:
    """Values are written as YAML: text in quotes, lists in brackets, true and false in small letters."""
    node = headless_stack(RobotFolder.checked(SHELVER, simulated=True), simulated={"truth": ["a=1"], "duration": 2.0})[
        -1
    ]
    words = node.command("/left")
    assert 'truth:=["a=1"]' in words and "duration:=2.0" in words and "use_sim_time:=false" in words
    assert words[-2:] == ["-r", "__ns:=/left"]


def test_an_enclave_stands_on_the_command_line() -> None:
    """Each process is told its own place in the keystore, as ROS takes it; none without a base."""
    folder = RobotFolder.checked(SHELVER, simulated=True)
    for node in headless_stack(folder, enclave="/shelver", watch=True):
        words = node.command()
        assert words[words.index("--enclave") + 1] == f"/shelver/{node.executable}"
        assert words.index("--ros-args") < words.index("--enclave")
    assert not any("--enclave" in node.command() for node in headless_stack(folder))


def test_in_a_namespace_all_have_a_clock_of_their_own() -> None:
    """Two simulated robots of one domain must not share /clock."""
    nodes = headless_stack(RobotFolder.checked(SHELVER, simulated=True), namespace="/left")
    assert all(("/clock", "/left/clock") in node.remappings for node in nodes)


@pytest.mark.parametrize(("given", "made"), [("", ""), ("left", "/left"), ("/a/b/", "/a/b")])
def test_namespaces_are_brought_into_one_form(given: str, made: str) -> None:
    """With or without slashes at the ends."""
    assert checked_namespace(given) == made


@pytest.mark.parametrize("given", ["a-b", "1a", "a//b", "ä"])
def test_what_is_no_namespace_is_refused(given: str) -> None:
    """One line, before anything starts."""
    with pytest.raises(BallbalError, match="--namespace"):
        checked_namespace(given)


def test_loop_and_simulation_must_agree_on_the_rate(tmp_path: Path) -> None:
    """A simulated robot that ticks at another rate than the loop is refused in one line."""
    folder = tmp_path / "robot"
    shutil.copytree(SHELVER, folder)
    file = folder / "simulation.yaml"
    file.write_text(file.read_text().replace("loop_rate: 500.0", "loop_rate: 250.0"))
    with pytest.raises(BallbalError, match="loop_rate is 250 Hz"):
        RobotFolder.checked(folder, simulated=True)
