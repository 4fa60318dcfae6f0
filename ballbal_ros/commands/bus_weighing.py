"""``ballbal weigh-in --live``'s end of the bus: the robot whose stack is up, as the weighing wants it."""

from __future__ import annotations

import contextlib
import math
import time
from collections.abc import Callable
from typing import Any, TypeVar

import attrs
from geometry_msgs.msg import TwistStamped
from trajectory_msgs.msg import JointTrajectory

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.commands.checkup_bus import Ear
from ballbal_ros.commands.terminal import TypedLines, told_to_end
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.nodes.diagnostics import OK, values_of
from ballbal_ros.nodes.messages import BILLION, JointReader, load_of, seconds, stamp_text, to_time
from ballbal_ros.nodes.plan_report import EARLIER
from ballbal_ros.nodes.topics import publisher, subscribe
from ballbal_ros.nodes.trajectories import path_message
from ballbal_ros.nodes.wire_readers import ImuReader
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.weighing.gathering import Gathering
from ballbal_ros.weighing.record import Record

_DISCOVERY, _KEPT_COMES = 5.0, 0.5
_NAMES_COME, _TURNS = 3.0, 50
_SILENT, _STATE_SILENT = 10.0, 2.0
_ANSWER, _AGO = 30.0, 0.1
_LEAVE = 3.0
# Half a second of a loop at 1 kHz: enough for as long as this process looks elsewhere.
_DEPTH = 500
_AT_ONCE = to_time(0.0)

_Line = TypeVar("_Line", bound="BusWeighing")


@attrs.define
class _Heard:
    """What has come, newest first in mind: stamps in s."""

    imu: float = -math.inf
    state: str = ""
    reason: str = ""
    state_stamp: float = -math.inf
    supported: bool | None = None
    held: dict[str, float] = attrs.field(factory=dict)
    report: Any = None


class BusWeighing(Ear):
    """A robot that balances with the stack that is up; see :class:`ballbal_ros.weighing.procedure.Robot`.

    As a context it leaves the arms to a planned stop and the ball at rest, whatever ends it. Nothing is sent before
    :meth:`begin`.
    """

    def __init__(self, domain: int, namespace: str, files: RobotFiles) -> None:
        super().__init__(domain, namespace)
        description = files.description
        self.record = Record(files.balance.loop.period)
        self._files, self._names = files, description.joint_names
        self._tail = files.compensation.planner.tail
        self._imu, self._drive = ImuReader(), JointReader(description.drive.names, "drive_states")
        self._arms = JointReader(description.joint_names, "joint_states")
        self._heard, self._typed = _Heard(), TypedLines()
        self._gathering: Gathering | None = None
        self._wrong: BallbalError | None = None
        self._told: list[int] = []
        self._ending = contextlib.ExitStack()
        self._came, self._asked, self._until, self._began = time.monotonic(), False, 0.0, 0.0
        self._imu_topic, self._asked_at = "", 0.0
        for topic in ("imu/data", "imu/data_raw"):
            subscribe(self.node, topic, self._guarded(self._on_imu, topic), raw=True, depth=_DEPTH)
        subscribe(self.node, "drive_states", self._guarded(self._on_drive), raw=True, depth=_DEPTH)
        subscribe(self.node, "joint_states", self._guarded(self._on_arms), raw=True, depth=_DEPTH)
        subscribe(self.node, "balance_state", self._on_state)
        subscribe(self.node, "plan_report", self._on_report)
        subscribe(self.node, "support", self._on_support)
        subscribe(self.node, "hand_load", self._guarded(self._on_load))
        self._plans = publisher(self.node, "arm_plan")
        self._velocity = publisher(self.node, "cmd_vel")

    def __enter__(self: _Line) -> _Line:
        self._told = self._ending.enter_context(told_to_end())
        return self

    def __exit__(self, *_: object) -> None:
        try:
            self._leave()
        finally:
            self._ending.close()
            super().__exit__()

    def _guarded(self, take: Callable[..., None], *more: str) -> Callable[[Any], None]:
        """Keep what is wrong with a message for the next :meth:`turn`: an executor would swallow or break on it."""

        def call(message: Any) -> None:
            try:
                take(message, *more)
            except BallbalError as error:
                self._wrong = error

        return call

    def _on_imu(self, raw: bytes, topic: str) -> None:
        values = self._imu.read(raw)
        if self._imu_topic != topic:
            # With both there, that with an orientation; they are the same sensor's.
            if self._imu_topic == "imu/data":
                return
            self._imu_topic = topic
        frame = self._files.description.parameters.imu.frame
        if values.frame != frame or not math.isfinite(sum(values.rate) + sum(values.acceleration)):
            raise BallbalError(topic, f"has frame_id {values.frame!r}, or numbers that are not finite", f"see {frame}")
        self._heard.imu, self._came = values.stamp / BILLION, time.monotonic()
        if self._gathering is not None:
            self._gathering.imu(self._heard.imu, values.rate, values.acceleration)

    def _on_drive(self, raw: bytes) -> None:
        if self._drive.read(raw) and self._gathering is not None:
            self._gathering.drive(self._drive.stamp / BILLION, self._drive.position)

    def _on_arms(self, raw: bytes) -> None:
        if self._arms.read(raw) and self._gathering is not None:
            self._gathering.arms(self._arms.stamp / BILLION, self._arms.position)

    def _on_state(self, message: Any) -> None:
        values, heard = values_of(message), self._heard
        heard.state, heard.reason = message.message, values.get("reason", "")
        heard.state_stamp = float(values.get("stamp", "nan"))

    def _on_report(self, message: Any) -> None:
        # Answers are kept on the bus: those from before it was asked are somebody else's.
        if seconds(message.header.stamp) < self._asked_at - _AGO:
            return
        for status in message.status:
            if self._asked and EARLIER not in values_of(status):
                self._heard.report = status

    def _on_support(self, message: Any) -> None:
        self._heard.supported = bool(message.data)

    def _on_load(self, message: Any) -> None:
        _, load = load_of(message, self._files.description)
        self._heard.held[load.hand] = load.mass

    @property
    def time(self) -> float:
        """How long it has been weighing, s by the robot's stamps."""
        return self._heard.imu - self._began

    @property
    def share(self) -> float:
        """How many IMU readings were heard for each row of the record."""
        return 0.0 if self._gathering is None else self._gathering.share

    @property
    def simulated(self) -> bool:
        """Whether it is the simulated robot that is up."""
        return self._comes("simulated_robot")

    def wait_for_robot(self) -> None:
        """Wait until the stack has told all; raises :class:`BallbalError` where it does not, or does not balance."""
        heard, until = self._heard, time.monotonic() + _DISCOVERY
        while not (heard.state and self._drive.complete and self._arms.complete and self._imu_topic):
            self.turn()
            if time.monotonic() > until:
                raise self._missing()
        if not self._comes("arm_compensation"):
            raise BallbalError("arm_compensation", "is not there", "nobody would plan the arms' way: start it")
        until = time.monotonic() + _KEPT_COMES
        while time.monotonic() < until:
            self.turn()
        self.check()

    def _comes(self, name: str) -> bool:
        """Whether a node is there, or is discovered soon."""
        until = time.monotonic() + _NAMES_COME
        while name not in self.present():
            if time.monotonic() > until:
                return False
            for _ in range(_TURNS):
                self.turn()
        return True

    def _missing(self) -> BallbalError:
        if not self._heard.state:
            what = f"silent for {_DISCOVERY:g} s: no balance node balances in this domain and namespace"
            return BallbalError("balance_state", what, "bring the stack up, and activate balance")
        for reader, topic in ((self._drive, "drive_states"), (self._arms, "joint_states")):
            if not reader.complete:
                return BallbalError(topic, f"has not told of {', '.join(reader.missing())}", "is --robot this one?")
        return BallbalError("imu/data", "silent", "start the IMU's driver, in this domain and namespace")

    def check(self) -> None:
        """Raise :class:`BallbalError` unless it balances, freely and with empty hands."""
        heard = self._heard
        if heard.state != BALANCING:
            reason = f": {heard.reason}" if heard.reason else ""
            remedy = "look why, and begin anew" if self._gathering else "it must balance before it can be weighed"
            raise BallbalError("balance_state", f"says {heard.state}{reason}", remedy)
        if heard.supported:
            raise BallbalError("support", "says that something holds the robot", "let go of it first")
        full = [f"{hand} holds {mass:g} kg" for hand, mass in heard.held.items() if mass > 0.0]
        if full:
            raise BallbalError("hand_load", f"says that {', '.join(full)}", "empty the hands first")

    def turn(self) -> None:
        """Take in what has come; raises what was wrong with it, and KeyboardInterrupt where somebody wants an end."""
        super().turn()
        if self._told:
            raise KeyboardInterrupt
        if self._wrong is not None:
            wrong, self._wrong = self._wrong, None
            raise wrong

    def read_line(self) -> str:
        """A line from the terminal, while what comes is taken in; raises where the robot no longer balances."""

        def meanwhile() -> None:
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
        if heard.imu - heard.state_stamp > _STATE_SILENT:
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
            super().turn()
