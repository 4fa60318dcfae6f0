"""``ballbal checkup --gantry`` against the simulated robot hung up: it asks, moves a little, and ends with zero."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

pytest.importorskip("rclpy")

import numpy as np
import rclpy
from sensor_msgs.msg import JointState

from ballbal_ros.commands.gantry_bus import DriveLine
from ballbal_ros.commands.processes import Processes
from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.messages import to_time
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.stack import RobotFolder, headless_stack
from helpers.ros_stack import SHELVER, Listener, ballbal, environment_of, listening

WORDS = ("checkup", "--gantry", "--robot", str(SHELVER))


DOMAIN = 1 + (os.getpid() + 37) % 101


@pytest.fixture(scope="module")
def hung() -> Iterator[Listener]:
    """The simulated robot alone, its ball 5 cm clear of the floor; in a domain of its own, as it lasts for the file."""
    with Processes() as processes, listening(DOMAIN) as listener:
        simulated = {"hung": 0.05, "answer_timeout": 300.0}
        node = headless_stack(RobotFolder.checked(SHELVER, simulated=True), simulated=simulated)[-1]
        processes.start(node.executable, node.command(), environment_of(DOMAIN))
        listener.watched = processes
        listener.hear("drive_states", "ground_truth")
        listener.wait(lambda: listener.newest("drive_states") is not None, 30.0, "a simulated robot")
        yield listener


def say(process: subprocess.Popen[str], line: str) -> None:
    assert process.stdin is not None
    process.stdin.write(f"{line}\n")
    process.stdin.flush()


def test_a_drive_that_is_right_is_found_so_and_left_at_zero(hung: Listener, tmp_path: Path) -> None:
    """Nothing is sent before it is confirmed twice; then at most 5 % of the rated torque; zero at the end."""
    commands, file = hung.record("drive_command"), tmp_path / "found.json"
    process = ballbal(*WORDS, "--json", str(file), domain=DOMAIN, stdin=subprocess.PIPE)
    try:
        say(process, "it hangs free")
        say(process, "skip")
        hung.turn(4.0)
        assert process.poll() is None and not commands
        say(process, "go")
        hung.wait(lambda: process.poll() is not None, 60.0, "its end")
        printed, err = process.communicate()
    finally:
        process.kill()
    assert process.returncode == 1, err
    found = json.loads(file.read_text())
    amiss = [check["what"] for check in found["checks"] if check["verdict"] != "ok"]
    # What only a hand could tell.
    assert amiss == ["all"], printed
    assert {"front_left", "back", "front_right", "delay"} <= {check["what"] for check in found["checks"]}
    hung.turn(0.3)
    assert len(commands) > 200
    assert 0.2 < max(max(map(abs, command.effort)) for command in commands) <= 1.0
    assert list(commands[-1].effort) == [0.0, 0.0, 0.0]
    at = hung.newest("ground_truth").pose.pose.position
    assert abs(at.x) + abs(at.y) < 0.01 and at.z > 0.15


def test_ctrl_c_in_the_middle_of_a_push_leaves_zero_torque(hung: Listener) -> None:
    """Whatever ends it, the last command is zero; exit status 130."""
    commands = hung.record("drive_command")
    process = ballbal(*WORDS, domain=DOMAIN, stdin=subprocess.PIPE)
    try:
        for line in ("it hangs free", "skip", "go"):
            say(process, line)
        hung.wait(lambda: any(any(command.effort) for command in commands), 40.0, "a push")
        process.send_signal(signal.SIGINT)
        hung.wait(lambda: process.poll() is not None, 20.0, "its end")
        _, err = process.communicate()
    finally:
        process.kill()
    assert process.returncode == 130, err
    hung.turn(0.3)
    assert list(commands[-1].effort) == [0.0, 0.0, 0.0]


def test_beside_another_commander_or_unconfirmed_nothing_is_sent(hung: Listener) -> None:
    """Without the typed words it leaves; it leaves as well when it finds somebody on drive_command. Status 2."""
    commands = hung.record("drive_command")
    process = ballbal(*WORDS, domain=DOMAIN, stdin=subprocess.PIPE)
    say(process, "yes")
    hung.wait(lambda: process.poll() is not None, 40.0, "its end")
    _, err = process.communicate()
    assert process.returncode == 2 and "was not confirmed, and has sent nothing" in err
    other = publisher(hung.node, "drive_command")
    process = ballbal(*WORDS, domain=DOMAIN, stdin=subprocess.PIPE)
    hung.wait(lambda: process.poll() is not None, 40.0, "its end")
    _, err = process.communicate()
    assert process.returncode == 2 and "drive_command: comes from" in err, err
    assert not commands
    hung.node.destroy_publisher(other)


@pytest.mark.parametrize("what", ["silent drive", "balance comes up"])
def test_what_comes_between_ends_it_with_zero(what: str, ros_domain_id: int) -> None:
    """The drive falls silent in a push, or a balance node appears: one line, and the last command is 0."""
    with listening(ros_domain_id) as drive, DriveLine(ros_domain_id, "", ("a", "b")) as line:
        commands, sender = drive.record("drive_command"), drive.sender("drive_states")
        began, other = time.monotonic(), None

        def done() -> bool:
            nonlocal other
            lasted = time.monotonic() - began
            if what == "silent drive" and lasted > 1.5:
                return False
            if lasted > 1.5 and other is None:
                other = rclpy.create_node("balance", context=drive.context)
            message = JointState(name=["b", "a"], position=[1.0, 2.0])
            message.header.stamp = to_time(1.0 + lasted)
            sender.publish(message)
            drive.turn(0.005)
            return lasted > 15.0

        seen: list[float] = []

        def tick(now: float, angle: np.ndarray) -> np.ndarray:
            seen.extend(angle.tolist())
            return np.array([0.1, 0.0])

        says = "silent for 0.2 s" if what == "silent drive" else "balance: is up"
        with pytest.raises(BallbalError, match=says):
            line.run(tick, done)
        drive.turn(0.3)
        assert seen[:2] == [2.0, 1.0]
        assert any(command.effort[0] == 0.1 for command in commands)
        assert list(commands[-1].effort) == [0.0, 0.0]
        if other is not None:
            other.destroy_node()
