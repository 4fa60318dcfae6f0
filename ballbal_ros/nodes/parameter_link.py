"""The nodes of the stack as the keeper of their parameter files wants them: asked and set over the bus."""

from __future__ import annotations

import threading
from collections.abc import Mapping, Sequence
from typing import Any

from rcl_interfaces.srv import GetParameters, SetParametersAtomically
from rclpy.node import Node
from rclpy.parameter import Parameter, parameter_value_to_python
from rclpy.qos import qos_profile_parameters

from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.parameter_services import plain
from ballbal_ros.parameter_change import Change
from ballbal_ros.parameter_files import READERS
from ballbal_ros.parameter_keeper import changeable

_TYPES = {
    "double": Parameter.Type.DOUBLE,
    "integer": Parameter.Type.INTEGER,
    "bool": Parameter.Type.BOOL,
    "string": Parameter.Type.STRING,
    "double_array": Parameter.Type.DOUBLE_ARRAY,
    "string_array": Parameter.Type.STRING_ARRAY,
}


class ParameterLink:
    """Asks and sets the nodes in the namespace of ``node``. Its methods wait: they are for another thread than that
    which spins ``node``.
    """

    def __init__(self, node: Node, timeout: float) -> None:
        self._timeout = timeout
        readers = sorted({reader for readers in READERS.values() for reader in readers})
        self._getters: dict[str, Any] = {
            reader: node.create_client(GetParameters, f"{reader}/get_parameters", qos_profile=qos_profile_parameters)
            for reader in readers
        }
        self._setters: dict[str, Any] = {
            reader: node.create_client(
                SetParametersAtomically, f"{reader}/set_parameters_atomically", qos_profile=qos_profile_parameters
            )
            for reader in readers
        }

    def silent(self) -> set[str]:
        """The files with values that may change whose node is not to be seen."""
        return {file for file in changeable() if not self._setters[READERS[file][0]].service_is_ready()}

    def _call(self, reader: str, client: Any, request: Any) -> Any:
        answered = threading.Event()
        future = client.call_async(request)
        future.add_done_callback(lambda _: answered.set())
        if not answered.wait(self._timeout):
            client.remove_pending_request(future)
            raise BallbalError(reader, f"did not answer within {self._timeout:g} s", "look whether it still runs")
        return future.result()

    def get(self, file: str, names: Sequence[str]) -> Mapping[str, Any] | None:
        """Values in force; None where no node that reads the file is there. What the node has not is left out."""
        for reader in READERS[file]:
            client = self._getters[reader]
            if client.service_is_ready():
                known = self._ask(reader, client, names)
                # One unknown name, and ROS answers for none: then one by one.
                return known if known or len(names) < 2 else self._each(reader, client, names)
        return None

    def _ask(self, reader: str, client: Any, names: Sequence[str]) -> dict[str, Any]:
        values = self._call(reader, client, GetParameters.Request(names=list(names))).values
        found = {name: plain(parameter_value_to_python(value)) for name, value in zip(names, values)}
        # What is not set is an empty list of strings: see NodeParameters.declare.
        return {name: [] if value is None else value for name, value in found.items()}

    def _each(self, reader: str, client: Any, names: Sequence[str]) -> dict[str, Any]:
        found: dict[str, Any] = {}
        for name in names:
            found.update(self._ask(reader, client, [name]))
        return found

    def set(self, file: str, changes: Sequence[Change]) -> None:
        """Set all or none; raises :class:`BallbalError` with the node's own line where it refuses or is silent."""
        (reader,) = READERS[file]
        parameters = [Parameter(c.name, _TYPES[c.declared.kind], c.new).to_parameter_msg() for c in changes]
        request = SetParametersAtomically.Request(parameters=parameters)
        result = self._call(reader, self._setters[reader], request).result
        if not result.successful:
            raise RefusedByNode(reader, result.reason)


class RefusedByNode(BallbalError):
    """A node would not have the values; its reason is a whole line already."""

    def __init__(self, reader: str, reason: str) -> None:
        super().__init__(reader, reason)

    def __str__(self) -> str:
        return self.what
