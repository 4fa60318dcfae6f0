"""Node ``simulated_robot``: the simulated robot behind the topics of a real one, in lock-step or by the wall clock."""

from __future__ import annotations

import sys
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from rclpy.clock import Clock as RosClock
from rclpy.clock import ClockType
from rclpy.node import Node
from std_msgs.msg import Bool
from std_srvs.srv import SetBool

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import read_story
from ballbal_ros.node_parameters import SimulatedRobotNodeParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.answer_times import AnswerTimes
from ballbal_ros.nodes.diagnostics import ERROR, OK, Diagnostics, values_of
from ballbal_ros.nodes.lock_step import LockStep
from ballbal_ros.nodes.messages import BILLION, load_of, nanoseconds, seconds, to_time
from ballbal_ros.nodes.parameters import NodeParameters, robot_file
from ballbal_ros.nodes.simulated_messages import SimulatedMessages
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.trajectories import ArmWaypoints
from ballbal_ros.nodes.wall_pace import WallPace
from ballbal_ros.nodes.wire_readers import JointStateReader
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.happenings import Happenings
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.peaks import Peaks
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.truth import parse_truth

_ATTEND = 0.1
_PUSH_LASTS = 0.1
# Whoever has lost a message on the way asks for it again within 3 s.
_LINGER = (0.2, 4.0)


class SimulatedRobotNode(Node):
    """Publishes what the simulated sensors say at t, waits for the command that answers it, and steps on.

    In lock-step it also waits, at t, for whatever else belongs to t (:class:`LockStep`), so that a run depends on
    stamps alone.
    """

    exit_status: int | None = None

    def __init__(self) -> None:
        super().__init__("simulated_robot", **process.NODE_OPTIONS)
        parameters = NodeParameters(
            self,
            {
                "robot.yaml": RobotParameters,
                "simulation.yaml": SimulationParameters,
                "node": SimulatedRobotNodeParameters,
            },
        )
        self._own: SimulatedRobotNodeParameters = parameters["node"]
        self.description = RobotDescription.from_parameters(parameters["robot.yaml"], robot_file())
        self._robot = self._make_robot(parameters["simulation.yaml"])
        self._peaks = Peaks(self._robot, self._own.count_from)
        parameters.declare()
        self._rate = self._robot.parameters.loop_rate
        self._period = 1.0 / self._rate
        self._real_time = self._own.clock == "real_time"
        self._ns = 0
        self._ended: tuple[int, float] | None = None
        self._effort: Any = None
        self._commands = JointStateReader()
        self._answers, self._late = AnswerTimes(), 0.0
        self._nothing = np.zeros(len(self.description.drive.names))
        self._lock = LockStep(self, round(self._period * BILLION), self._own.wait_for_plan)
        self._messages = SimulatedMessages(self, self.description, self._own.imu_topic)
        self._support = publisher(self, "support")
        self._diagnostics = Diagnostics(self, self.description.name, self._report, lambda: to_time(self._robot.time))
        self._listen()
        self._waiting_since = time.monotonic()
        self._wall = WallPace(self._period, self._own.catch_up)
        self._command_at = 0.0
        self._support.publish(Bool(data=True))
        steady = RosClock(clock_type=ClockType.STEADY_TIME)
        self._attending = self.create_timer(_ATTEND, self._attend, clock=steady)
        self._pacing = self.create_timer(self._period, self._pace, clock=steady, autostart=self._real_time)
        self._messages.publish(self._robot, 0, again=True)

    def _make_robot(self, parameters: SimulationParameters) -> SimulatedRobot:
        own = self._own
        truth = parse_truth(own.truth, self.description)
        story = read_story(Path(own.plan), self.description) if own.plan else None
        posture = np.zeros(self.description.joint_count) if story is None else story.posture
        loads = () if story is None else story.start_loads
        robot = SimulatedRobot(self.description, parameters, posture, loads, own.seed, truth)
        if own.hung > 0.0:
            robot.hang(own.hung)
        self._happenings = Happenings(robot)
        if story is not None and own.plan_start >= 0.0:
            self._happenings.add_story(story, own.plan_start)
        return robot

    def _listen(self) -> None:
        inputs = self._diagnostics.inputs
        inputs.subscribe("drive_command", self._on_drive_command, raw=True)
        inputs.subscribe("arm_command", self._on_arm_command)
        inputs.subscribe("balance_state", self._on_balance_state)
        inputs.subscribe("push", self._on_push)
        inputs.subscribe("simulated_load", self._on_load)
        inputs.subscribe("arm_plan", self._on_arm_plan)
        inputs.subscribe("plan_report", self._on_plan_report)
        inputs.subscribe("emergency_stop", lambda message: self._lock.emergency_stop_came(bool(message.data)))
        self.create_service(SetBool, "~/stand", self._on_stand)

    def _on_drive_command(self, raw: bytes) -> None:
        try:
            command = self._commands.read(raw)
        except BallbalError as error:
            self._diagnostics.refuse("drive_command", f"drive_command: {error}")
            return
        self._answers.answered(command.stamp)
        if command.stamp != self._ns and not self._wall.began:
            return
        try:
            self._effort = self._messages.effort(command)
        except BallbalError as error:
            self._diagnostics.refuse("drive_command", str(error))
            return
        self._command_at = self._robot.time
        self._go_on()

    def _go_on(self, in_time: bool = False) -> None:
        """Step if all that belongs to this instant is here; by the wall clock not before it is time."""
        if self._effort is None or self._wall.began or self._ended is not None:
            return
        if self._real_time and not in_time:
            return
        if self._lock.silent(self._ns, self._robot.support):
            return
        if self._real_time and not self._lock.waits_for_plan:
            self._wall.begin(time.monotonic(), self._robot.time)
            return
        self._step(self._effort)
        self._effort = None

    def _pace(self) -> None:
        """Real time: step until simulated time has come up with the wall clock."""
        self._go_on(in_time=True)
        now = time.monotonic()
        while self._ended is None and (late := self._wall.late(now, self._robot.time)) >= 0.0:
            self._late = late
            stale = self._robot.time - self._command_at > self._own.drive_watchdog
            self._step(self._nothing if stale or self._effort is None else self._effort)

    def _step(self, effort: Any) -> None:
        robot = self._robot
        if robot.support and self._lock.lets_go(self._ns, not self._real_time):
            self._hold(False)
        if self._ns == 0:
            self._messages.record(robot, 0)
        self._happenings.come_to(robot.time)
        self._diagnostics.pace.was_late(self._late)
        robot.step(effort)
        self._peaks.look(effort)
        self._ns = round(robot.time * BILLION)
        self._waiting_since = time.monotonic()
        self._publish()
        if self._own.duration > 0.0 and robot.time >= self._own.duration - 0.5 * self._period:
            self._end(0, "")

    def _hold(self, holds: bool) -> None:
        self._robot.support = holds
        self._support.publish(Bool(data=holds))

    def _on_stand(self, request: Any, response: Any) -> Any:
        self._hold(bool(request.data))
        response.success, response.message = True, "the stand holds it" if request.data else "the stand let go"
        return response

    def _publish(self) -> None:
        self._answers.asked(self._ns, self._late)
        self._messages.publish(self._robot, self._ns)

    def _attend(self) -> None:
        """By the wall clock: say what is so now again until it is answered, and end if somebody stays silent."""
        if self._ended is not None:
            self._linger(*self._ended)
            return
        if self._wall.began:
            return
        if time.monotonic() - self._waiting_since > _ATTEND:
            # Somebody may have come to listen only now.
            self._messages.publish(self._robot, self._ns, again=True)
        self._go_on()
        if self._ended is None and time.monotonic() - self._waiting_since > self._own.answer_timeout:
            self._end(1, self._who_is_silent())

    def _linger(self, status: int, since: float) -> None:
        """Leave when everybody has the record."""
        least, most = _LINGER
        gone_by = time.monotonic() - since
        if gone_by > most or (gone_by > least and (status != 0 or self._messages.recorded())):
            self.exit_status = status
        else:
            self._diagnostics.publish()

    def _who_is_silent(self) -> str:
        where = f"simulated_robot: at t = {self._robot.time:.3f} s, {self._own.answer_timeout:g} s without"
        if self._effort is not None:
            return f"{where} {self._lock.silent(self._ns, self._robot.support)}"
        refused = self._diagnostics.refusals.get("drive_command")
        if refused:
            return f"{where} a drive_command that can be used: {refused}"
        there = self.count_publishers("drive_command") > 0
        cause = "balance is there but silent: configure and activate it" if there else "balance is not there: start it"
        return f"{where} a drive_command with this stamp: {cause}"

    def _end(self, status: int, line: str) -> None:
        """No further step; the process stays a moment longer, so that what was published last gets through."""
        self._ended = (status, time.monotonic())
        if line:
            print(line, file=sys.stderr, flush=True)
        self._diagnostics.publish()

    def _on_arm_command(self, message: Any) -> None:
        try:
            command = ArmWaypoints.of(message, self.description, "arm_command")
            still = np.zeros(self.description.joint_count)
            path = command.path(self._robot.arm_position, still, still)
        except BallbalError as error:
            self._diagnostics.refuse("arm_command", str(error))
            return
        self._diagnostics.accept("arm_command")
        self._robot.command_arms(path, command.start if command.start > 0.0 else self._robot.time)
        self._lock.arm_command_came(nanoseconds(message.header.stamp))
        self._go_on()

    def _on_balance_state(self, message: Any) -> None:
        self._lock.balance_state_came(message.message, values_of(message))
        self._go_on()

    def _on_arm_plan(self, _: Any) -> None:
        self._lock.arm_plan_came()

    def _on_plan_report(self, message: Any) -> None:
        self._lock.plan_report_came(message)
        self._go_on()

    def _on_load(self, message: Any) -> None:
        try:
            stamp, load = load_of(message, self.description, "simulated_load")
            self._happenings.add_load(load, stamp)
        except BallbalError as error:
            self._diagnostics.refuse("simulated_load", str(error))
            return
        self._diagnostics.accept("simulated_load")

    def _on_push(self, message: Any) -> None:
        force, torque, link = message.wrench.force, message.wrench.torque, message.header.frame_id
        begin = max(seconds(message.header.stamp), self._robot.time)
        try:
            self._happenings.add_wrench(
                begin, _PUSH_LASTS, link, (force.x, force.y, force.z), (torque.x, torque.y, torque.z)
            )
        except BallbalError as error:
            self._diagnostics.refuse("push", str(error))
            return
        self._diagnostics.accept("push")

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        robot = self._robot
        values: dict[str, object] = {
            "clock": self._own.clock,
            "time": robot.time,
            "support": robot.support,
            "seed": self._own.seed,
            "ended": self._ended is not None,
            **self._peaks.values(),
            **(self._answers.values() if self._wall.began else {}),
            **self._wall.values(),
        }
        return (ERROR, "fell", values) if robot.fell else (OK, self._held(), values)

    def _held(self) -> str:
        if not self._robot.support:
            return "free"
        return "hung up" if self._own.hung > 0.0 else "on its stand"


def main() -> None:
    """Run the node."""
    process.main(SimulatedRobotNode)


if __name__ == "__main__":
    main()
