"""A node that is killed while the robot moves comes back by itself, and nobody is left in doubt about the plan."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import subprocess
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy")

from std_msgs.msg import Bool

from ballbal_ros.commands.processes import Processes
from ballbal_ros.nodes.diagnostics import ERROR, OK, values_of
from ballbal_ros.nodes.messages import seconds
from ballbal_ros.nodes.plan_report import EARLIER
from helpers.robots import CONFIG
from helpers.ros_stack import NOD, Listener, ballbal, children_of, listening, running_stack
from helpers.stack_robot import Robot, plan

SHOULDERS = ["left_shoulder_pitch", "right_shoulder_pitch"]
# The arms' motion, a second swing, and time for a node to come back in: some 13 s of simulated time.
LONG_NOD = NOD + "  - move: {left_shoulder_pitch: 0.0, right_shoulder_pitch: 0.0}\n    during: 0.8\n  - wait: 6.0\n"


def node_of(run: subprocess.Popen[str], name: str) -> int:
    """The process of one node of a headless run; 0 where there is none."""
    for pid in children_of(run.pid):
        words: list[str] = []
        with contextlib.suppress(FileNotFoundError, ProcessLookupError):
            words = Path(f"/proc/{pid}/cmdline").read_bytes().decode().split("\0")
        if f"ballbal_ros.nodes.{name}" in words:
            return pid
    return 0


def killed(listener: Listener, run: subprocess.Popen[str], name: str, at: float) -> int:
    """Kill a node with SIGKILL once the simulated time has come to ``at``, and return the one that comes in its place;
    a negative time: as soon as it has the plan.
    """
    if at < 0.0:
        listener.wait(lambda: listener.newest("arm_plan") is not None, 60.0, "the plan")
    else:

        def came() -> bool:
            heard = listener.newest("joint_states")
            return heard is not None and seconds(heard.header.stamp) >= at

        listener.wait(came, 60.0, f"{at} s")
    before = node_of(run, name)
    os.kill(before, signal.SIGKILL)
    listener.wait(lambda: node_of(run, name) not in (0, before), 20.0, f"{name} to come back")
    return node_of(run, name)


def run_with_kills(
    domain: int, plan: Path, kills: Sequence[tuple[str, float]], file: Path
) -> tuple[dict[str, Any], list[Any], str]:
    """What a run says in which nodes are killed, the reports that were heard, and its screen."""
    with listening(domain) as listener:
        listener.hear("joint_states", "arm_plan")
        reports = listener.record("plan_report")
        words = ("headless", str(plan), "--compensation", "planned", "--json", str(file))
        run = ballbal(*words, domain=domain)
        try:
            for name, at in kills:
                killed(listener, run, name, at)
            listener.wait(lambda: run.poll() is not None, 120.0, "the run's end")
            out, err = run.communicate(timeout=10)
        finally:
            run.kill()
    assert run.returncode == 0, err
    return json.loads(file.read_text()), [status for array in reports for status in array.status], out


def told(found: dict[str, Any], kills: Sequence[tuple[str, float]], screen: str) -> None:
    """It did not fall, the ball stayed, and both screen and document say what happened and what became of the plan."""
    run = found["runs"][0]
    assert not run["fell"] and run["ball_travel_peak_mm"] <= 30.0
    for (name, _), note in zip(kills, found["notes"], strict=True):
        assert f"{name} ended with signal 9 and was started anew; the plan was finished" in note
        assert note in " ".join(screen.split())


@pytest.mark.parametrize(
    "kills", [(("arm_compensation", 3.4), ("whole_body_kinematics", 3.8)), (("arm_compensation", -1.0),)]
)
def test_a_killed_node_comes_back_and_the_plan_is_finished(
    kills: tuple[tuple[str, float], ...], ros_domain_id: int, tmp_path: Path
) -> None:
    """Killed while the arms move, or while it plans: the run goes on, the plan is accepted and carried out once."""
    plan, file = tmp_path / "nod.yaml", tmp_path / "found.json"
    plan.write_text(LONG_NOD)
    found, reports, screen = run_with_kills(ros_domain_id, plan, kills, file)
    told(found, kills, screen)
    assert len([r for r in reports if r.level == OK]) == 1
    # What the node that was started anew finds waiting is either planned for the first time or refused in words.
    again = [EARLIER in values_of(r) for r in reports if r.level == ERROR]
    assert again == ([True] if len(kills) == 2 else [])


def killed_while_the_arms_move(robot: Robot, processes: Processes) -> None:
    """arm_compensation is killed one second into a motion of four, and the emergency stop is pressed."""
    report = robot.ask(plan(SHOULDERS, (4.0, [-1.2, -1.2])))
    assert report.level == OK, report.message
    arms = float(values_of(report)["arm_command"])
    robot.listener.wait(lambda: robot.time > arms + 1.0, 30.0, "the arms' start")
    killed = next(child for child in processes._children if child.name == "arm_compensation")
    killed.process.kill()
    killed.process.wait()
    # Time stands still until somebody answers it.
    robot.senders["emergency_stop"].publish(Bool(data=True))

@pytest.mark.parametrize("remembers", [True, False])
def test_an_emergency_stop_after_a_restart_stops_the_arms(
    remembers: bool, ros_domain_id: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Pressed while arm_compensation is down: the one that is started anew knows the motion in force, and brings the
    arms to rest by a compensated stop. Where the file is gone, it says that it can't, again once it can do something,
    and the arms come to their planned end. The ball stays within 30 mm in both.
    """
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path))
    simulated = {"seed": 1, "answer_timeout": 60.0}
    with running_stack(ros_domain_id, simulated) as processes, listening(ros_domain_id) as listener:
        robot = Robot(listener)
        robot.bring_up()
        robot.go_on(0.5)
        station = robot.ball()
        killed_while_the_arms_move(robot, processes)
        if not remembers:
            next(tmp_path.rglob("motion_*.json")).unlink()
        child = next(child for child in processes._children if child.name == "arm_compensation")
        child.process = child.start()

        def told_of_the_stop() -> list[Any]:
            return [status for array in robot.reports for status in array.status if status.name == "emergency_stop"]

        told = listener.wait(told_of_the_stop, 40.0, "the report of the stop")
        assert (told[0].level == OK) is remembers, told[0].message
        robot.go_on(5.0)
        travel, angle = 1e3 * float(np.hypot(*(robot.ball() - station))), robot.angle(SHOULDERS[0])
        print(f"ball {travel:.2f} mm; shoulders at {angle:.3f} rad; {told[0].message}")
        assert robot.state == "stopping" and travel <= 30.0
        assert -1.0 < angle < -0.02 if remembers else angle == pytest.approx(-1.2, abs=0.02)
        assert told_of_the_stop()[-1].level == OK
        assert remembers or "can't cut short" in told[0].message


@pytest.mark.prove
@pytest.mark.parametrize("name", ["whole_body_kinematics", "arm_compensation"])
@pytest.mark.parametrize("at", [2.6, 5.0, 9.0, 14.0, 20.0])
def test_a_node_killed_during_shelve(name: str, at: float, ros_domain_id: int, tmp_path: Path) -> None:
    """`shelve`, a node killed at one of several times: it stands, within 30 mm, and the plan is finished."""
    plan, kills = CONFIG / "plans" / "shelve.yaml", [(name, at)]
    found, _, screen = run_with_kills(ros_domain_id, plan, kills, tmp_path / "found.json")
    print(f"{name} at {at} s: {found['runs'][0]['ball_travel_peak_mm']:.2f} mm")
    told(found, kills, screen)
