"""How runs end: by Ctrl-C, by a node that dies, by one that never answers; nothing is left behind."""

from __future__ import annotations

import os
import signal
import subprocess
from pathlib import Path

import pytest

pytest.importorskip("rclpy")

from helpers.ros_stack import NOD, alive, ballbal, children_of, node_process, wait_until


def started(domain: int, plan: Path) -> tuple[subprocess.Popen[str], dict[str, int]]:
    """A headless run with all its nodes up, by their names."""
    plan.write_text(NOD.replace("wait: 0.4", "wait: 60.0"))
    process = ballbal("headless", str(plan), "--compensation", "planned", domain=domain)

    def nodes() -> dict[str, int]:
        found = {}
        for pid in children_of(process.pid):
            words = Path(f"/proc/{pid}/cmdline").read_bytes().decode().split("\0")
            found.update({word.rpartition(".")[2]: pid for word in words if word.startswith("ballbal_ros.nodes.")})
        return found

    wait_until(lambda: len(nodes()) == 4, 30.0, "the start of four nodes")
    return process, nodes()


@pytest.mark.parametrize(("ending", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 130)])
def test_an_interrupt_ends_all(ending: signal.Signals, status: int, ros_domain_id: int, tmp_path: Path) -> None:
    """Ctrl-C, or being told to end, ends every node, whether they have got going or not."""
    process, nodes = started(ros_domain_id, tmp_path / "plan.yaml")
    os.kill(process.pid, ending)
    _, err = process.communicate(timeout=20)
    assert process.returncode == status
    assert err.strip() in ("", "ballbal: interrupted")
    assert not [name for name, pid in nodes.items() if alive(pid)]


def test_a_node_that_dies_ends_the_run_in_one_line(ros_domain_id: int, tmp_path: Path) -> None:
    """When a node is killed the runner names it, ends the others, and exits with 1."""
    process, nodes = started(ros_domain_id, tmp_path / "plan.yaml")
    os.kill(nodes["balance"], signal.SIGKILL)
    _, err = process.communicate(timeout=20)
    assert process.returncode == 1
    assert err.startswith("ballbal headless: balance ended with signal 9") and len(err.strip().splitlines()) == 1
    assert not [name for name, pid in nodes.items() if alive(pid)]


def test_a_runner_that_is_killed_leaves_no_node(ros_domain_id: int, tmp_path: Path) -> None:
    """Even a runner that can't clean up takes its nodes with it."""
    process, nodes = started(ros_domain_id, tmp_path / "plan.yaml")
    process.kill()
    process.communicate(timeout=10)
    wait_until(lambda: not any(map(alive, nodes.values())), 10.0, "the end of the nodes")


def test_a_simulated_robot_that_nobody_answers_says_who_is_silent(ros_domain_id: int) -> None:
    """Without a balance node the simulator ends with an error that names what it waited for."""
    process = node_process("simulated_robot", "--ros-args", "-p", "answer_timeout:=1.0", domain=ros_domain_id)
    _, err = process.communicate(timeout=30)
    assert process.returncode == 1
    assert "drive_command" in err and "balance is not there" in err and len(err.strip().splitlines()) == 1


@pytest.mark.parametrize("ending", [signal.SIGINT, signal.SIGTERM])
def test_a_node_told_to_end_exits_with_0(ending: signal.Signals, ros_domain_id: int) -> None:
    """SIGINT and SIGTERM are how nodes are ended: exit status 0, and no words about it."""
    process = node_process("balance", domain=ros_domain_id)
    name = f"/balance domain {ros_domain_id}"
    wait_until(
        lambda: any("dds" in t.read_text() for t in Path(f"/proc/{process.pid}/task").glob("*/comm")), 20.0, name
    )
    # It listens once the middleware's threads are there and the node is made.
    with pytest.raises(subprocess.TimeoutExpired):
        process.communicate(timeout=2.0)
    process.send_signal(ending)
    _, err = process.communicate(timeout=10)
    assert (process.returncode, err.strip()) == (0, "")
