"""Node ``config_watch``: an edited parameter file comes into the running nodes within a second, whole or not at all."""

from __future__ import annotations

import os
import queue
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from rcl_interfaces.msg import ParameterEvent
from rclpy.clock import Clock as RosClock
from rclpy.clock import ClockType
from rclpy.node import Node
from rclpy.parameter import parameter_value_to_python
from rclpy.qos import qos_profile_parameter_events
from std_srvs.srv import Trigger

from ballbal_ros.declaration import read_parameter_file
from ballbal_ros.errors import BallbalError
from ballbal_ros.node_parameters import ConfigWatchParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.beside import Beside
from ballbal_ros.nodes.diagnostics import OK, WARN, Diagnostics
from ballbal_ros.nodes.file_watch import FileWatch
from ballbal_ros.nodes.parameter_link import ParameterLink
from ballbal_ros.nodes.parameter_services import plain
from ballbal_ros.nodes.parameters import NodeParameters, robot_file
from ballbal_ros.parameter_files import FILES, READERS
from ballbal_ros.parameter_history import ParameterHistory, state_folder
from ballbal_ros.parameter_keeper import Keeper, Taken, changeable

_TURN = 0.05
_WAIT_FOR_NODES = 10.0
_WAIT_FOR_OTHERS = 2.0


class ConfigWatchNode(Node):
    """Watches the four files of a robot's folder. All work is done beside, in one thread: one change at a time.

    Services ``~/reload_parameters``, ``~/save_parameters`` and ``~/previous_parameters`` (std_srvs/Trigger).
    """

    def __init__(self) -> None:
        super().__init__("config_watch", **process.NODE_OPTIONS)
        parameters = NodeParameters(self, {"node": ConfigWatchParameters})
        own: ConfigWatchParameters = parameters["node"]
        folder = Path(own.folder) if own.folder else robot_file().parent
        if not (folder / "robot.yaml").is_file():
            raise BallbalError(str(folder), "holds no robot.yaml", "give the robot's folder: -p folder:=config/shelver")
        parameters.declare()
        self._own, self._folder = own, folder.resolve()
        history = Path(own.history).expanduser() if own.history else state_folder(self._folder, os.environ)
        self._link = ParameterLink(self, own.answer_timeout)
        self._keeper = Keeper(self._folder, self._link, ParameterHistory(history, own.keep))
        self._watch = FileWatch(self._folder, FILES, own.settle_time)
        self._accepted, self._refused = 0, 0
        self._wrong: dict[str, str] = {}
        self._doubtful: dict[str, float] = {}
        self._events: queue.SimpleQueue[ParameterEvent] = queue.SimpleQueue()
        self._begun, self._started, self._looked = False, time.monotonic(), 0.0
        self._away: set[str] = set()
        self._diagnostics = Diagnostics(self, self._folder.name, self._report)
        self.create_subscription(ParameterEvent, "/parameter_events", self._events.put, qos_profile_parameter_events)
        self._beside = Beside(self, "work")
        self._serve()

    def _serve(self) -> None:
        beside = self._beside
        for name, answer in (("reload", self._reload), ("save", self._save), ("previous", self._previous)):
            beside.node.create_service(Trigger, beside.name_of(f"{name}_parameters"), _answering(answer))
        beside.node.create_timer(_TURN, self._turn, clock=RosClock(clock_type=ClockType.STEADY_TIME))
        beside.start()

    def _turn(self) -> None:
        """Look after what has happened; runs beside."""
        now = time.monotonic()
        if not self._begun:
            # On a slow machine the nodes are not to be seen at once; what they run with decides what is new.
            silent = self._link.silent()
            if not silent or now - self._started > (
                _WAIT_FOR_NODES if silent == set(changeable()) else _WAIT_FOR_OTHERS
            ):
                self._begin()
            return
        if now - self._looked >= self._own.look_every:
            self._looked = now
            self._watch.look(now)
            self._greet()
        self._hear()
        for file in {*self._watch.due(now), *(f for f, since in self._doubtful.items() if now > since)}:
            self._take_in(file, now)

    def _begin(self) -> None:
        self._begun, self._away = True, self._link.silent()
        for outcome in self._keeper.begin(time.time()):
            if isinstance(outcome, Taken):
                self._tell(outcome)
            else:
                self._refuse(Path(outcome.where).name, str(outcome))
        if self._watch.warning:
            self.get_logger().warning(self._watch.warning)
        self.get_logger().info(f"watching {self._folder}; accepted sets are kept in {self._keeper.history.folder}")

    def _take_in(self, file: str, now: float) -> None:
        """Take a changed file in. What can't be read at all may be half-written: it gets some time to become whole."""
        try:
            taken = self._keeper.take_in(file, time.time())
        except BallbalError as error:
            since = self._doubtful.setdefault(file, now)
            if self._is_unfinished(file) and now - since < self._own.patience:
                return
            del self._doubtful[file]
            self._refuse(file, str(error))
        else:
            self._doubtful.pop(file, None)
            self._tell(taken)

    def _is_unfinished(self, file: str) -> bool:
        """Whether a file is missing, or no parameter file at all."""
        try:
            read_parameter_file(self._folder / file)
        except BallbalError:
            return True
        return False

    def _greet(self) -> None:
        """A node that has come back runs by its file, whatever had been set on it before."""
        silent = self._link.silent()
        for file in self._away - silent:
            values = self._link.get(file, list(changeable()[file])) or {}
            for line in self._keeper.notice(file, values, time.time()).lines():
                self.get_logger().info(f"{line}, as {READERS[file][0]} was started anew")
        self._away = silent

    def _hear(self) -> None:
        """Take note of what somebody has set on a node itself."""
        here = self.get_namespace().rstrip("/")
        while not self._events.empty():
            event = self._events.get()
            values = {p.name: plain(parameter_value_to_python(p.value)) for p in event.changed_parameters}
            for file, readers in READERS.items():
                if values and event.node in [f"{here}/{reader}" for reader in readers]:
                    for line in self._keeper.notice(file, values, time.time()).lines():
                        self.get_logger().info(f"{line}, set on {event.node}")

    def _tell(self, taken: Taken) -> list[str]:
        """A line a value into the log."""
        self._wrong.pop(taken.file, None)
        self._diagnostics.accept(taken.file)
        self._accepted += bool(taken.changes)
        lines = taken.lines()
        for line in lines:
            self.get_logger().info(line)
        return lines

    def _refuse(self, file: str, line: str) -> None:
        if self._wrong.get(file) != line:
            self._refused += 1
            self._wrong[file] = line
            self.get_logger().error(f"refused: {line}")
            self._diagnostics.refuse(file, line)

    def _reload(self) -> list[str]:
        """Read all files anew, also where they say what they said before but something else is in force."""
        lines, wrong = [], []
        for file in FILES:
            try:
                lines += self._tell(self._keeper.take_in(file, time.time(), whole=True))
            except BallbalError as error:
                self._refuse(file, str(error))
                wrong.append(str(error))
        if wrong:
            raise BallbalError("reload", " | ".join(wrong))
        return lines

    def _save(self) -> list[str]:
        return [line for saved in self._keeper.save(time.time()) for line in saved.lines()]

    def _previous(self) -> list[str]:
        when, wanted = self._keeper.previous(time.time())
        lines = [line for taken in wanted for line in self._tell(taken)]
        return [*lines, f"as of {when}; the files stay as they are: save_parameters writes them"]

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        values: dict[str, object] = {
            "folder": self._folder,
            "accepted": self._accepted,
            "refused": self._refused,
            "checksum": self._keeper.in_force.checksum[:12],
        }
        if self._keeper.warning:
            values["history"] = self._keeper.warning
        if self._wrong:
            return WARN, f"not in force as they are: {', '.join(sorted(self._wrong))}", values
        return (WARN if self._keeper.warning else OK), "watching" if self._begun else "looking for the nodes", values

    def leave(self) -> None:
        """Stop watching and working before the process ends."""
        self._watch.leave()
        self._beside.leave()


def _answering(work: Callable[[], list[str]]) -> Callable[[Any, Any], Any]:
    """A service's callback: what the work says, or why it could not be done."""

    def answer(_: Any, response: Any) -> Any:
        """Answer a call of the service."""
        try:
            response.message = "; ".join(work()) or "nothing changes"
            response.success = True
        except BallbalError as error:
            response.success, response.message = False, str(error)
        return response

    return answer


def main() -> None:
    """Run the node."""
    process.main(ConfigWatchNode)


if __name__ == "__main__":
    main()
