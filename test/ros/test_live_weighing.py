"""``ballbal weigh-in --live``: the simulated robot weighed over the bus, and left in order whatever comes between."""

from __future__ import annotations

import contextlib
import io
import os
import signal
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("rclpy")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from nav_msgs.msg import Odometry
from rclpy.serialization import deserialize_message
from rich.console import Console
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.commands import checkup_bus, robot_ear
from ballbal_ros.commands.bus_weighing import BusWeighing
from ballbal_ros.commands.checkup_bus import Ear
from ballbal_ros.commands.live_weighing import live_weighing
from ballbal_ros.commands.weighing_run import Weighing, rehearsed
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.nodes.diagnostics import ERROR, key_values
from ballbal_ros.nodes.messages import load_message, to_time
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.truth import drawn_truth
from ballbal_ros.weighing.postures import DesignSettings
from ballbal_ros.weighing.procedure import ProcedureSettings
from ballbal_ros.weighing.regressor import shown_to_true
from helpers.rehearsing import files, story
from helpers.robots import reach
from helpers.ros_stack import SHELVER, Listener, ballbal, listening, running_stack

DOMAIN = 1 + (os.getpid() + 53) % 101
SEED = 1
# What a scale with steps of 0.1 kg shows of it.
MASS = 56.8
STAND = """\
name: stand
start:
  posture:
    left_shoulder_roll: 0.08
    left_elbow_pitch: -0.5
    left_wrist_pitch: -0.3
    right_shoulder_roll: -0.08
    right_elbow_pitch: -0.5
    right_wrist_pitch: -0.3
steps:
  - wait: 0.5
"""
QUICK = ProcedureSettings(
    joint_speed=2.0, least_move=1.0, settle=(0.3, 0.8), look=0.5, swing_speed=0.1, swing_periods=(1.0,)
)


@pytest.fixture(scope="module")
def stack(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    """A robot unlike its drawing, with empty hands where `reach` begins; it balances, in lock-step."""
    plan = tmp_path_factory.mktemp("plan") / "stand.yaml"
    plan.write_text(STAND)
    simulated = {"plan": str(plan), "truth": [f"drawn={SEED}"], "seed": SEED, "answer_timeout": 300.0}
    with running_stack(DOMAIN, simulated):
        with hearing() as listener:

            def change(transition: int) -> bool:
                request = ChangeState.Request(transition=Transition(id=transition))
                return bool(listener.call(ChangeState, "balance/change_state", request).success)

            listener.wait(lambda: change(Transition.TRANSITION_CONFIGURE), 30.0, "configuring")
            assert change(Transition.TRANSITION_ACTIVATE)
            listener.wait(lambda: state(listener) == "balancing", 30.0, "balancing")
        yield


@contextlib.contextmanager
def hearing() -> Iterator[Listener]:
    """A listener for a while: who listens all the time takes the weighing's processor."""
    with listening(DOMAIN) as listener:
        listener.hear("joint_states", "balance_state", "odom", "ground_truth")
        listener.wait(lambda: listener.newest("joint_states") is not None, 30.0, "a simulated robot")
        yield listener


def state(listener: Listener) -> str:
    said = listener.newest("balance_state")
    return "" if said is None else str(said.message)


def angles(listener: Listener) -> np.ndarray:
    return np.array(listener.newest("joint_states").position)


def weighed(count: int, procedure: ProcedureSettings | None = None) -> Weighing:
    """The robot of the stack, weighed by topics alone."""
    design, console = DesignSettings(count=count, candidates=60), Console(file=io.StringIO(), width=100)
    return live_weighing(files(), DOMAIN, "", design, console, mass=MASS, sure=True, procedure=procedure)


def truth_now() -> tuple[np.ndarray, np.ndarray]:
    """The body's true lean, rad, and the arms' angles, at rest."""
    with hearing() as listener:
        raw = listener.record("ground_truth", raw=True)
        listener.wait(lambda: len(raw) > 100 and state(listener), 20.0, "the true motion")
        assert state(listener) == "balancing"
        poses = [deserialize_message(each, Odometry).pose.pose for each in raw]
        leans = [lean_and_heading_from_quat_xyzw(q.x, q.y, q.z, q.w)[:2] for q in (pose.orientation for pose in poses)]
        return np.mean(leans, axis=0), angles(listener)


@pytest.mark.usefixtures("stack")
def test_what_is_recorded_over_the_bus_is_how_it_truly_moved():
    """One posture, back, and a short swing: where it began, first and last, the lean is the one that the simulated
    robot truly comes to, seen by its tilted IMU, within 1 mrad; the ball has swung, and the arms are back. (What else
    a record of lossy messages is worth is in test/weighing/test_gathering.py.)
    """
    (_, arms), tilt = truth_now(), np.array(drawn_truth(files().description, SEED).imu_tilt)
    record = weighed(1, QUICK).record
    assert len(record.rests) == 3 and len(record.moves) == 2
    lean, arms_after = truth_now()
    assert arms_after == pytest.approx(arms, abs=2e-3)
    gone = record.recent(1e9)[1]
    assert np.hypot(*(gone - gone[0]).T).max() > 0.02
    found = shown_to_true(record.at_rest(record.motion(files().description.as_drawn())).lean, tilt)
    assert found[[0, -1]] == pytest.approx(np.array([lean, lean]), abs=1e-3)
    assert np.abs(found[1] - found[0]).max() > 0.005


@pytest.mark.prove
@pytest.mark.usefixtures("stack")
def test_a_robot_weighed_over_the_bus_keeps_its_ball_again():
    """Five postures, and `reach` costs the robot less than half of what it did."""
    found, truth = weighed(5), drawn_truth(files().description, SEED)
    runs = [rehearsed(robot, story("reach"), truth, SEED) for robot in (files(), found.files(files()))]
    peaks = [run.ball_travel_peak_mm for run in runs]
    assert peaks[1] < 0.5 * peaks[0], peaks


@pytest.mark.usefixtures("stack")
def test_ctrl_c_brings_arms_and_ball_to_rest(tmp_path: Path):
    """In the midst of a motion: exit status 130, the arms stop on their way, and the robot goes on balancing."""
    file = tmp_path / "found.json"
    words = ("weigh-in", "--live", "--yes", "--postures", "3", "--robot", str(SHELVER), "--json", str(file))
    with hearing() as listener:
        commands, before = listener.record("arm_command"), angles(listener)
        process = ballbal(*words, domain=DOMAIN)
        try:
            listener.wait(lambda: process.poll() or np.abs(angles(listener) - before).max() > 0.1, 60.0, "a motion")
            process.send_signal(signal.SIGINT)
            listener.wait(lambda: process.poll() is not None, 20.0, "its end")
            _, err = process.communicate()
        finally:
            process.kill()
        assert process.returncode == 130, err
        assert len(commands) >= 2 and not file.exists()
        goal = np.array(commands[-2].points[-1].positions)
        listener.turn(3.0)
        rested = angles(listener)
        listener.turn(0.5)
        assert angles(listener) == pytest.approx(rested, abs=5e-4) and np.abs(rested - goal).max() > 0.05
        twist = listener.newest("odom").twist.twist.linear
        assert state(listener) == "balancing" and abs(twist.x) + abs(twist.y) < 0.02


def test_where_nothing_balances_one_line_says_so(ros_domain_id: int, monkeypatch: pytest.MonkeyPatch):
    """No stack: it is told at once what is missing."""
    monkeypatch.setattr(robot_ear, "_DISCOVERY", 1.0)
    with pytest.raises(BallbalError, match="balance_state: silent for 1 s: no balance node balances"):
        live_weighing(files(), ros_domain_id, "", DesignSettings(), Console(file=io.StringIO()))


class Played:
    """A robot made of messages: it stands, its arms are where they began, and it answers plans as told."""

    def __init__(self, domain: int) -> None:
        self.context = listening(domain)
        self.listener = self.context.__enter__()
        topics = ("imu/data", "drive_states", "joint_states", "balance_state", "plan_report", "hand_load")
        self.senders = {topic: self.listener.sender(topic) for topic in topics}
        self.plans = self.listener.record("arm_plan")
        self.velocities = self.listener.record("cmd_vel")
        self.state, self.reason, self.answer = "balancing", "", "arm_plan: would lean too far; slower"
        self.answered, self.began, self.silent = 0, time.monotonic(), ""
        self.description = files().description

    def play(self) -> None:
        """One instant of all topics, and an answer to what was asked."""
        stamp = to_time(100.0 + time.monotonic() - self.began)
        imu, description = Imu(), self.description
        imu.header.stamp, imu.header.frame_id = stamp, description.parameters.imu.frame
        imu.linear_acceleration.z = 9.81
        drive = JointState(name=list(description.drive.names), position=[0.0] * len(description.drive.names))
        arms = JointState(name=list(description.joint_names), position=reach().first.tolist())
        drive.header.stamp = arms.header.stamp = stamp
        said = DiagnosticStatus(name="balance_state", message=self.state)
        said.values = key_values({"stamp": f"{stamp.sec}.{stamp.nanosec:09d}", "reason": self.reason})
        messages = {"drive_states": drive, "joint_states": arms, "balance_state": said, "imu/data": imu}
        for topic, message in messages.items():
            if topic != self.silent:
                self.senders[topic].publish(message)
        self.listener.turn(0.002)
        if len(self.plans) > self.answered:
            self.answered = len(self.plans)
            status = DiagnosticStatus(level=ERROR, name="arm_plan", message=self.answer)
            status.values = key_values({"requested": "0.000000000", "accepted": "no"})
            # One that was kept from long before comes first: it is nobody's answer now.
            report = DiagnosticArray(status=[DiagnosticStatus(name="arm_plan", message="nothing moves")])
            self.senders["plan_report"].publish(report)
            report = DiagnosticArray(status=[status])
            report.header.stamp = stamp
            self.senders["plan_report"].publish(report)


@pytest.fixture
def played(ros_domain_id: int, monkeypatch: pytest.MonkeyPatch) -> Iterator[tuple[Played, BusWeighing]]:
    """A played robot that goes on whenever the weighing listens, and the weighing's end of the bus."""
    robot = Played(ros_domain_id)
    with BusWeighing(ros_domain_id, "", files()) as line:
        turn, present = Ear.turn, line.present

        def both(ear: Ear) -> None:
            robot.play()
            for _ in range(4):
                turn(ear)

        monkeypatch.setattr(Ear, "turn", both)
        monkeypatch.setattr(checkup_bus, "_TURN", 0.001)
        monkeypatch.setattr(line, "present", lambda: [*present(), "arm_compensation"])
        yield robot, line
    robot.context.__exit__(None, None, None)


def still(start: np.ndarray) -> ArmPath:
    return ArmPath.through(np.array([0.0, 1.0]), *(np.stack((a, a)) for a in (start, 0.0 * start, 0.0 * start)))


def test_a_refused_plan_and_a_guard_that_lets_go_end_it_in_words(played: tuple[Played, BusWeighing]):
    """The answer to a plan is what is raised; when the guard leaves `balancing` its reason is; and at the end the arms'
    plan is cancelled and the ball's velocity zero.
    """
    robot, line = played
    line.wait_for_robot()
    assert not robot.plans and not robot.velocities
    line.begin()
    line.wait(0.3)
    assert len(line.record) > 100
    with pytest.raises(PlanRefused, match="arm_plan: would lean too far; slower"):
        line.move(still)
    robot.state, robot.reason = "stopping", "emergency stop"
    with pytest.raises(BallbalError, match="balance_state: says stopping: emergency stop"):
        line.wait(1.0)
    assert len(robot.plans) == 1 and robot.plans[0].points
    line._leave()
    robot.listener.turn(0.1)
    assert len(robot.plans) == 2 and not robot.plans[1].points
    assert robot.velocities and robot.velocities[-1].twist.linear.x == 0.0


def test_what_must_not_be_weighed_is_refused_before_anything_is_sent(played: tuple[Played, BusWeighing]):
    """A robot with something in its hand, or one that stands by; a sense that falls silent is told as well."""
    robot, line = played
    robot.senders["hand_load"].publish(load_message(Load("left_hand", 1.0), 0.0))
    with pytest.raises(BallbalError, match="hand_load: says that left_hand holds 1 kg"):
        line.wait_for_robot()
    robot.senders["hand_load"].publish(load_message(Load("left_hand", 0.0), 0.0))
    robot.state = "standby"
    with pytest.raises(BallbalError, match="balance_state: says standby; it must balance"):
        line.wait_for_robot()
    robot.state = "balancing"
    line.wait_for_robot()
    assert not robot.plans and not robot.velocities
    line.begin()
    robot.silent = "balance_state"
    with pytest.raises(BallbalError, match="balance_state: silent for 2 s"):
        line.wait(10.0)
