"""What a robot whose stack is up tells on the bus: its senses, its state, the answers to plans; nothing is sent."""

from __future__ import annotations

import contextlib
import math
import time
from collections.abc import Callable
from typing import Any, TypeVar

import attrs

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.commands.checkup_bus import Ear
from ballbal_ros.commands.terminal import told_to_end
from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.diagnostics import number_of, values_of
from ballbal_ros.nodes.messages import BILLION, JointReader, load_of, seconds
from ballbal_ros.nodes.plan_report import EARLIER
from ballbal_ros.nodes.topics import subscribe
from ballbal_ros.nodes.wire_readers import ImuReader
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.weighing.gathering import Gathering
from ballbal_ros.weighing.record import Record

_DISCOVERY, _KEPT_COMES = 5.0, 0.5
_NAMES_COME, _TURNS = 3.0, 50
_AGO = 0.1
# Half a second of a loop at 1 kHz: enough for as long as this process looks elsewhere.
_DEPTH = 500

_Robot = TypeVar("_Robot", bound="RobotEar")


@attrs.define
class _Heard:
    """What has come, newest first in mind: stamps in s."""

    imu: float = -math.inf
    state: str = ""
    reason: str = ""
    state_stamp: float = -math.inf
    state_came: float = -math.inf
    supported: bool | None = None
    held: dict[str, float] = attrs.field(factory=dict)
    report: Any = None


class RobotEar(Ear):
    """Hears a robot that balances with the stack that is up, and gathers its senses once there is a gathering.

    As a context it keeps a Ctrl-C for the next :meth:`turn`.
    """

    def __init__(self, domain: int, namespace: str, files: RobotFiles) -> None:
        super().__init__(domain, namespace)
        description = files.description
        self.record = Record(files.balance.loop.period)
        self._files = files
        self._imu, self._drive = ImuReader(), JointReader(description.drive.names, "drive_states")
        self._arms = JointReader(description.joint_names, "joint_states")
        self._heard = _Heard()
        self._gathering: Gathering | None = None
        self._wrong: BallbalError | None = None
        self._told: list[int] = []
        self._ending = contextlib.ExitStack()
        self._came, self._asked, self._asked_at = time.monotonic(), False, 0.0
        self._imu_topic = ""
        for topic in ("imu/data", "imu/data_raw"):
            subscribe(self.node, topic, self._guarded(self._on_imu, topic), raw=True, depth=_DEPTH)
        subscribe(self.node, "drive_states", self._guarded(self._on_drive), raw=True, depth=_DEPTH)
        subscribe(self.node, "joint_states", self._guarded(self._on_arms), raw=True, depth=_DEPTH)
        subscribe(self.node, "balance_state", self._on_state)
        subscribe(self.node, "plan_report", self._on_report)
        subscribe(self.node, "support", self._on_support)
        subscribe(self.node, "hand_load", self._guarded(self._on_load))

    def __enter__(self: _Robot) -> _Robot:
        self._told = self._ending.enter_context(told_to_end())
        return self

    def __exit__(self, *_: object) -> None:
        self._ending.close()
        super().__exit__()

    def _guarded(self, take: Callable[..., None], *more: str) -> Callable[[Any], None]:
        """Keep what is wrong with a message for the next :meth:`turn`: an executor would swallow or break on it."""

        def call(message: Any) -> None:
            """Take a message in, and keep what is wrong with it."""
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
        # One from before the node was active, which the bus has kept, has none.
        heard.state_stamp = number_of(values.get("stamp", "")) or math.nan
        heard.state_came = time.monotonic()

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
