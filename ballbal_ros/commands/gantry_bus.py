"""``ballbal checkup --gantry``'s end of the bus: hears ``drive_states``, sends ``drive_command`` while it pushes."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from typing import Any

import numpy as np

from ballbal_ros.commands.checkup_bus import Ear
from ballbal_ros.commands.terminal import TypedLines, told_to_end
from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.messages import BILLION
from ballbal_ros.nodes.topics import publisher, subscribe
from ballbal_ros.nodes.wire_readers import JointStateReader
from ballbal_ros.nodes.wire_writers import JointStateWriter
from ballbal_ros.robot.arrays import Array

_LIFESPAN = 0.02
_SILENT = 0.2
_LOOK = 0.5
_ZEROS, _BETWEEN = 10, 0.02

_UNKNOWN = "a node that has not told its name yet"

Tick = Callable[[float, Array], Array]


class DriveLine(Ear):
    """The one who commands the drive, as long as no balance node is up. Never sends anything but on :meth:`run`, and
    zeros when that ends, whatever ends it.
    """

    def __init__(self, domain: int, namespace: str, names: tuple[str, ...]) -> None:
        super().__init__(domain, namespace)
        self._names, self._reader = names, JointStateReader()
        self._writer = JointStateWriter(names, effort=True)
        self._out: Any = None
        self._tick: Tick | None = None
        self._wrong: BallbalError | None = None
        self.stamp, self.angle = -1, np.zeros(len(names))
        self._came, self._looked, self._typed = 0.0, 0.0, TypedLines()
        self._supported: bool | None = None
        self.see: Callable[[Array], None] | None = None
        subscribe(self.node, "drive_states", self._on_drive, raw=True)
        subscribe(self.node, "support", self._on_support)

    def _on_support(self, message: Any) -> None:
        self._supported = bool(message.data)

    def _on_drive(self, raw: bytes) -> None:
        try:
            self._take(raw)
        except BallbalError as error:
            self._wrong = error

    def _take(self, raw: bytes) -> None:
        values = self._reader.read(raw)
        missing = [name for name in self._names if name not in values.names]
        if missing or len(values.position) != len(values.names):
            what = f"has no angle for {', '.join(missing) or 'each of its names'}"
            raise BallbalError("drive_states", what, f"it takes the names of drive.contacts: {', '.join(self._names)}")
        angle = values.position[[values.names.index(name) for name in self._names]]
        if values.stamp <= 0 and self.stamp > 0:
            raise BallbalError("drive_states", "carries no stamp", "have the driver stamp its messages")
        self.stamp, self.angle, self._came = values.stamp, angle, time.monotonic()
        if self.see is not None:
            self.see(angle)
        if self._tick is not None:
            self._send(self._tick(values.stamp / BILLION, angle))

    def _send(self, effort: Array) -> None:
        self._writer.effort[:] = effort
        self._out.publish(self._writer.serialised(max(self.stamp, 0)))

    def check_alone(self) -> None:
        """Raise :class:`BallbalError` where a balance node is up, somebody else commands the drive, or ``support`` says
        that nothing holds the robot.
        """
        if self._supported is False:
            raise BallbalError("support", "says that nothing holds the robot", "hang it up first")
        if "balance" in self.present():
            raise BallbalError("balance", "is up, and would command the drive too", "end it first")
        found = self._publishers("drive_command")
        if len(found) > (self._out is not None):
            names = {i.node_name for i in found} - {self.node.get_name()}
            told = ", ".join(sorted(_UNKNOWN if name.startswith("_NODE_") else name for name in names))
            raise BallbalError("drive_command", f"comes from {told}", "end that first")

    def _look_around(self) -> None:
        """Check again now and then: somebody may come up, or be discovered, only later."""
        now = time.monotonic()
        if now - self._looked > _LOOK:
            self._looked = now
            self.check_alone()

    def turn_for(self, span: float) -> None:
        """Take in what comes for a while, s."""
        until = time.monotonic() + span
        while time.monotonic() < until:
            self.turn()

    def turn(self) -> None:
        """Take in what has come; raises what was wrong with it."""
        super().turn()
        if self._wrong is not None:
            wrong, self._wrong = self._wrong, None
            raise wrong

    def wait_for_drive(self, timeout: float) -> None:
        """Wait until the drive tells its angles."""
        until = time.monotonic() + timeout
        while self.stamp < 0:
            self.turn()
            if time.monotonic() > until:
                what = f"silent: nothing came within {timeout:g} s"
                raise BallbalError("drive_states", what, "start the drive's driver, in this domain and namespace")

    def read_line(self) -> str:
        """A line from the terminal, while what comes is taken in; "" at its end. Raises where somebody else comes to
        command the drive meanwhile.
        """

        def meanwhile() -> None:
            """Take in what has come; raises where somebody else came to command the drive."""
            self.turn()
            self._look_around()

        return self._typed.read(meanwhile)

    def run(self, tick: Tick, done: Callable[[], bool]) -> None:
        """Answer every ``drive_states`` with what ``tick(stamp in s, angles)`` gives, until ``done``; then zeros.

        Ends at once, with zeros, where the drive falls silent, a balance node comes up, or somebody wants it to end
        (KeyboardInterrupt).
        """
        with told_to_end() as told:
            self.check_alone()
            self._out = publisher(self.node, "drive_command", _LIFESPAN)
            self._tick, self._came = tick, time.monotonic()
            try:
                while not done():
                    self.turn()
                    if told:
                        raise KeyboardInterrupt
                    if time.monotonic() - self._came > _SILENT + (2.0 if self.stamp <= 0 else 0.0):
                        what = f"silent for {_SILENT:g} s during a push"
                        raise BallbalError("drive_states", what, "see to its driver")
                    self._look_around()
            finally:
                self._tick = None
                self._let_go()

    def _let_go(self) -> None:
        nothing = np.zeros(len(self._names))
        for _ in range(_ZEROS):
            self._send(nothing)
            with contextlib.suppress(BallbalError):
                self.turn_for(_BETWEEN)
