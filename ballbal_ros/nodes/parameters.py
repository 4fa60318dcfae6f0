"""Parameters of the nodes: read through ROS, checked by their one declaration, declared back with range and meaning."""

from __future__ import annotations

import array
import copy
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from rcl_interfaces.msg import FloatingPointRange, IntegerRange, ParameterDescriptor, ParameterType, SetParametersResult
from rclpy.node import Node
from rclpy.parameter import Parameter

from ballbal_ros.declaration import Declaration, build, declarations, flatten
from ballbal_ros.errors import BallbalError, ParameterError, nearest
from ballbal_ros.nodes.parameter_services import ParameterServices, plain
from ballbal_ros.parameter_change import Change

_TYPES = {
    "double": ParameterType.PARAMETER_DOUBLE,
    "integer": ParameterType.PARAMETER_INTEGER,
    "bool": ParameterType.PARAMETER_BOOL,
    "string": ParameterType.PARAMETER_STRING,
    "double_array": ParameterType.PARAMETER_DOUBLE_ARRAY,
    "string_array": ParameterType.PARAMETER_STRING_ARRAY,
}
_GREATEST = sys.float_info.max
# Parameters that every ROS node has of itself.
_OF_ROS = ("use_sim_time", "start_type_description_service")


def parameter_files() -> dict[str, Path]:
    """The files given on the command line with ``--params-file``, by their name."""
    words = sys.argv
    return {Path(b).name: Path(b) for a, b in zip(words, words[1:]) if a == "--params-file"}


def robot_file() -> Path:
    """The robot.yaml on the command line, beside which the URDF is looked for."""
    return parameter_files().get("robot.yaml", Path("robot.yaml"))


class NodeParameters:
    """The parameters of one node: one read-only object for each class, from what the parameter files and ``-p`` gave.

    The node must have been made with ``process.NODE_OPTIONS``. ``classes`` maps a
    file's name (as errors name it) to the parameter class of that file. Raises :class:`ParameterError` in one line.
    """

    def __init__(self, node: Node, classes: Mapping[str, type]) -> None:
        self._node, self._classes = node, dict(classes)
        given = {name: plain(p.value) for name, p in node.get_parameters_by_prefix("").items() if _is_ours(name)}
        self._objects = self._build(given)
        for name in given:
            node.undeclare_parameter(name)
        self._on_change: Callable[[NodeParameters], None] | None = None
        self._flat = {key: value for made in self._objects.values() for key, value in flatten(made).items()}
        named = [(d, file) for file, cls in classes.items() for d in declarations(cls, flat=self._flat)]
        self._declared = {declared.name: declared for declared, _ in named}
        self._files = {declared.name: file for declared, file in named}

    def __getitem__(self, file: str) -> Any:
        """The parameter object of one file's class."""
        return self._objects[file]

    def declare(
        self, on_change: Callable[[NodeParameters], None] | None = None, services: ParameterServices | None = None
    ) -> None:
        """Declare all to ROS. ``on_change`` takes changed runtime parameters over, or raises :class:`BallbalError`.

        Without it nothing may change while the node runs. ``services`` are the node's parameter services, where others
        than the usual are wanted: these check a value and answer at once.
        """
        if services is None:
            ParameterServices(self._node, self._node, self.proposed)
        self._on_change = on_change
        for name, declared in self._declared.items():
            value, descriptor = self._flat[name], descriptor_of(declared, changeable=on_change is not None)
            if declared.kind == "string_array" and not value:
                # ROS can't tell of what an empty list is.
                self._node.declare_parameter(name, Parameter.Type.STRING_ARRAY, descriptor)
            else:
                self._node.declare_parameter(
                    name, array.array("d", value) if declared.kind == "double_array" else value, descriptor
                )
        self._node.add_on_set_parameters_callback(self._set)

    def proposed(self, changed: Mapping[str, Any]) -> NodeParameters | None:
        """What the parameters would be with some values changed, checked; None where none of them is ours.

        Raises :class:`ParameterError` in one line. Nothing is set.
        """
        flat = {name: value for name, value in changed.items() if name in self._declared}
        if not flat:
            return None
        for name, value in flat.items():
            declared = self._declared[name]
            if not declared.runtime and value != self._flat[name]:
                change = Change(declared, self._flat[name], value)
                where = self.source(self._files[name])
                raise ParameterError(where, f"{change} can't change while the node runs", "start the node anew with it")
        new = copy.copy(self)
        new._flat = {**self._flat, **flat}
        new._objects = self._build(new._flat)
        return new

    def source(self, file: str) -> str:
        """How errors name a file: by its path where it was given on the command line."""
        return str(parameter_files().get(file, f"parameters of {self._node.get_name()}"))

    def _build(self, flat: Mapping[str, Any]) -> dict[str, Any]:
        names = {file: {d.name for d in declarations(cls, flat=flat)} for file, cls in self._classes.items()}
        known = set().union(*names.values())
        paths = parameter_files()
        for key in flat:
            if key not in known:
                raise ParameterError(self._given_by(key, paths), f"unknown parameter {key}", nearest(key, known))
        return {
            file: build(
                cls,
                {k: v for k, v in flat.items() if k in names[file]},
                self.source(file),
            )
            for file, cls in self._classes.items()
        }

    def _given_by(self, key: str, paths: Mapping[str, Path]) -> str:
        last = key.rpartition(".")[2]
        for path in paths.values():
            if path.is_file() and f"{last}:" in path.read_text(encoding="utf-8", errors="replace"):
                return str(path)
        return f"parameters of {self._node.get_name()}"

    def _set(self, changed: Sequence[Any]) -> SetParametersResult:
        try:
            new = self.proposed({p.name: plain(p.value) for p in changed})
            if new is None:
                return SetParametersResult(successful=True)
            if self._on_change is None:
                raise ParameterError(changed[0].name, "can't change while the node runs", "start the node anew")
            self._on_change(new)
            self._objects, self._flat = new._objects, new._flat
        except BallbalError as error:
            return SetParametersResult(successful=False, reason=str(error))
        except Exception as error:
            return SetParametersResult(successful=False, reason=f"{type(error).__name__}: {error}")
        return SetParametersResult(successful=True)


def descriptor_of(declared: Declaration, *, changeable: bool) -> ParameterDescriptor:
    """The ROS descriptor of a declaration: type, range, meaning with unit, read-only unless it may change while
    running.
    """
    unit = "" if declared.unit == "-" else f" [{declared.unit}]"
    descriptor = ParameterDescriptor(
        name=declared.name,
        type=_TYPES[declared.kind],
        description=declared.meaning + unit,
        additional_constraints=declared.range_text if declared.choices else "",
        read_only=not (changeable and declared.runtime),
    )
    if declared.low is None and declared.high is None:
        return descriptor
    if declared.kind == "double":
        low = -_GREATEST if declared.low is None else declared.low
        high = _GREATEST if declared.high is None else declared.high
        descriptor.floating_point_range = [FloatingPointRange(from_value=float(low), to_value=float(high))]
    elif declared.kind == "integer":
        least = -(2**62) if declared.low is None else int(declared.low)
        most = 2**62 if declared.high is None else int(declared.high)
        descriptor.integer_range = [IntegerRange(from_value=least, to_value=most)]
    return descriptor


def _is_ours(name: str) -> bool:
    return name not in _OF_ROS and not name.startswith("qos_overrides.")
