"""Whatever comes over a topic: no traceback, an answer for each input, no change that nobody asked for."""

from __future__ import annotations

import contextlib
import json
import random
import signal
import subprocess
import sys

import pytest

pytest.importorskip("rclpy")

from rclpy._rclpy_pybind11 import RCLError
from rclpy.serialization import serialize_message

from ballbal_ros.nodes.topics import TOPICS
from ballbal_ros.stack import RobotFolder, headless_stack
from helpers.fuzz import spoilt, spoilt_bytes
from helpers.robots import shelver
from helpers.ros_stack import ROOT, SHELVER, environment_of, listening, node_process

NODES = ("balance", "arm_compensation", "simulated_robot", "whole_body_kinematics")
FUZZ = ROOT / "test" / "helpers" / "fuzz_node.py"
# A plan that was accepted is kept, with its tables; beyond that nothing may stay.
GROWS = {"arm_compensation": 45.0, "simulated_robot": 15.0}


def fuzzed(executable: str, count: int, seed: int, domain: int) -> dict:
    """What a node in a process of its own said to so many hostile messages."""
    stack = headless_stack(RobotFolder.checked(SHELVER, simulated=True))
    words = next(node for node in stack if node.executable == executable).command()
    words = [sys.executable, str(FUZZ), executable, str(count), str(seed), *words[words.index("--ros-args") :]]
    done = subprocess.run(words, env=environment_of(domain), capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-2000:]
    assert "Traceback" not in done.stderr
    told = json.loads(done.stdout.splitlines()[-1])
    print(f"{executable}: {sum(told['sent'].values())} messages, grew by {told['grown']:.1f} MB, {told['ends']}")
    return told


@pytest.mark.parametrize("executable", NODES)
def test_hostile_messages_are_answered(executable: str, ros_domain_id: int) -> None:
    """A few hundred, valid ones gone wrong in values, lengths, names or bytes, into the callbacks of each node."""
    told = fuzzed(executable, 250, 3, ros_domain_id)
    assert told["found"] == {}


@pytest.mark.prove
@pytest.mark.parametrize("executable", NODES)
def test_a_hundred_thousand_hostile_messages(executable: str, ros_domain_id: int) -> None:
    """25 000 into each node: resident memory stays as well."""
    told = fuzzed(executable, 25_000, 4, ros_domain_id)
    assert told["found"] == {} and told["grown"] <= GROWS.get(executable, 5.0)


def over_the_bus(domain: int, count: int) -> None:
    """Bytes that are no message, and messages gone wrong, from an ordinary publisher, on every topic of the stack."""
    rng = random.Random(6)
    # Nobody answers the simulated robot: it is to wait all the same.
    waits = {"simulated_robot": ("--ros-args", "-p", "answer_timeout:=3600.0")}
    nodes = {name: node_process(name, *waits.get(name, ()), domain=domain) for name in NODES}
    try:
        with listening(domain) as listener:
            heard = listener.record("/diagnostics")
            topics = [t for t in TOPICS if t not in ("/clock", "/diagnostics", "robot_description", "imu/data_raw")]
            senders = {topic: listener.sender(topic) for topic in topics}

            def everybody() -> bool:
                return {f"/{name}" for name in NODES} <= {s.name for array in heard for s in array.status}

            listener.wait(everybody, 60.0, "diagnostics of every node")
            names = [*shelver().joint_names, *shelver().drive.names]
            for number in range(count):
                topic = rng.choice(topics)
                message = spoilt(rng, TOPICS[topic][0](), names)
                raw = serialize_message(message)
                # The sender's own middleware passes on not quite everything.
                with contextlib.suppress(RCLError):
                    senders[topic].publish(spoilt_bytes(rng, raw) if rng.random() < 0.5 else message)
                if number % 20 == 0:
                    listener.turn(0.01)
            heard.clear()
            listener.wait(everybody, 30.0, "diagnostics of every node, afterwards")
        assert {name: process.poll() for name, process in nodes.items()} == dict.fromkeys(NODES)
    finally:
        for process in nodes.values():
            process.send_signal(signal.SIGINT)
        said = {name: process.communicate(timeout=20)[1] for name, process in nodes.items()}
    for name, words in said.items():
        assert "Traceback" not in words and "Error:" not in words, f"{name}: {words[-1500:]}"


def test_hostile_bytes_over_the_bus_end_no_node(ros_domain_id: int) -> None:
    """400 of them: every node lives on, and tells of itself."""
    over_the_bus(ros_domain_id, 400)


@pytest.mark.prove
def test_thousands_of_hostile_messages_over_the_bus(ros_domain_id: int) -> None:
    """5000 of them."""
    over_the_bus(ros_domain_id, 5000)
