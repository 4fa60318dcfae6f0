"""``ballbal weigh-in --live``'s end of the bus: the robot whose stack is up, as the weighing wants it."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from geometry_msgs.msg import TwistStamped
from trajectory_msgs.msg import JointTrajectory

from ballbal_ros.commands.checkup_bus import Ear
from ballbal_ros.commands.robot_ear import RobotEar
from ballbal_ros.commands.terminal import TypedLines
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.nodes.diagnostics import OK, values_of
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.trajectories import path_message
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.weighing.gathering import Gathering

_SILENT, _STATE_SILENT = 10.0, 2.0
_ANSWER, _LEAVE = 30.0, 3.0
_AT_ONCE = to_time(0.0)


class BusWeighing(RobotEar):
    """A robot that balances with the stack that is up; see :class:`ballbal_ros.weighing.procedure.Robot`.

    As a context it leaves the arms to a planned stop and the ball at rest, whatever ends it. Nothing is sent before
    :meth:`begin`.
    """

    def __init__(self, domain: int, namespace: str, files: RobotFiles) -> None:
        super().__init__(domain, namespace, files)
        self._names, self._tail = files.description.joint_names, files.compensation.planner.tail
        self._typed = TypedLines()
        self._until, self._began = 0.0, 0.0
        self._plans = publisher(self.node, "arm_plan")
        self._velocity = publisher(self.node, "cmd_vel")

    def __exit__(self, *_: object) -> None:
        try:
            self._leave()
        finally:
            super().__exit__()

    @property
    def time(self) -> float:
        """How long it has been weighing, s by the robot's stamps."""
        return self._heard.imu - self._began

    @property
    def share(self) -> float:
        """How many IMU readings were heard for each row of the record."""
        return 0.0 if self._gathering is None else self._gathering.share

    def read_line(self) -> str:
        """A line from the terminal, while what comes is taken in; raises where the robot no longer balances."""

        def meanwhile() -> None:
            """Take in what has come; raises where it no longer balances."""
            self.turn()
            self.check()

        return self._typed.read(meanwhile)

    def begin(self) -> None:
        """From here on it is recorded, and may be moved."""
        self.check()
        self._began = self._until = self._heard.imu
        self._gathering = Gathering(self._files.description, self.record)

    def arms(self) -> Array:
        """Arm positions [n] as measured."""
        return self._arms.position.copy()

    def move(self, path: Callable[[Array], ArmPath]) -> None:
        """Send the motion as an ``arm_plan``, and wait for its end; raises :class:`PlanRefused` with the answer."""
        wanted = path(self.arms())
        values = values_of(self._ask(path_message(wanted, self._names, _AT_ONCE)))
        start = float(values["arm_command"])
        self.record.moves.append((start, wanted))
        self._until = self._heard.imu
        self.wait(start + float(values["duration s"]) + self._tail - self._heard.imu)

    def _ask(self, plan: JointTrajectory) -> Any:
        """Send an arm plan, and return its accepting answer."""
        self._asked, self._asked_at, self._heard.report = True, self._heard.imu, None
        self._plans.publish(plan)
        until = time.monotonic() + _ANSWER
        while self._heard.report is None:
            self._go_on()
            if time.monotonic() > until:
                raise BallbalError("plan_report", f"no answer to an arm_plan within {_ANSWER:g} s", "see to that node")
        report, self._asked = self._heard.report, False
        requested = values_of(report).get("requested")
        if report.name != "arm_plan" or requested != stamp_text(_AT_ONCE):
            raise BallbalError("plan_report", f"answers somebody else's {report.name}", "let nobody else move it now")
        if report.level != OK:
            where, _, what = report.message.partition(": ")
            raise PlanRefused(where, what) if what else PlanRefused("arm_plan", where)
        return report

    def roll(self, x: float, y: float) -> None:
        """Command a velocity of the ball."""
        message = TwistStamped()
        message.header.stamp, message.header.frame_id = to_time(max(self._heard.imu, 0.0)), "base_footprint"
        message.twist.linear.x, message.twist.linear.y = x, y
        self._velocity.publish(message)

    def wait(self, span: float) -> None:
        """Let so much of the robot's time pass, s, and record."""
        now = self._heard.imu
        # Waits add up to what was asked for, but what was long missed is not made up for.
        self._until = max(self._until, now - min(span, 0.1)) + span
        while self._heard.imu < self._until:
            self._go_on()
        if self._gathering is not None:
            self._gathering.gather()

    def _go_on(self) -> None:
        self.turn()
        self.check()
        heard = self._heard
        if time.monotonic() - self._came > _SILENT:
            raise BallbalError(self._imu_topic or "imu/data", f"silent for {_SILENT:g} s", "see to the stack")
        # By both clocks: simulated time may go many times faster than this process hears of it.
        if min(heard.imu - heard.state_stamp, time.monotonic() - heard.state_came) > _STATE_SILENT:
            raise BallbalError("balance_state", f"silent for {_STATE_SILENT:g} s", "see to the balance node")

    def _leave(self) -> None:
        """Arms to a planned stop, ball to rest; a second Ctrl-C doesn't come between."""
        if self._gathering is None:
            return
        self._gathering = None
        self._asked, self._asked_at, self._heard.report = True, self._heard.imu, None
        self._plans.publish(JointTrajectory())
        until = time.monotonic() + _LEAVE
        while self._heard.report is None and time.monotonic() < until:
            self.roll(0.0, 0.0)
            Ear.turn(self)
