"""Parameters of the nodes: read through ROS, checked by their one declaration, declared back with range and meaning."""

from __future__ import annotations

import array
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import attrs
from rcl_interfaces.msg import FloatingPointRange, IntegerRange, ParameterDescriptor, ParameterType, SetParametersResult
from rclpy.node import Node
from rclpy.parameter import Parameter

from ballbal_ros.declaration import Declaration, build, declarations, flatten, parameter
from ballbal_ros.errors import BallbalError, ParameterError, nearest

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
_WAYS_OF_IMU = ("imu/data", "imu/data_raw")


@attrs.frozen(kw_only=True)
class DescriptionParameters:
    """Where a node finds the robot's URDF."""

    robot_description_wait: float = parameter(
        "double",
        1.0,
        unit="s",
        low=0.0,
        high=60.0,
        meaning="how long to look for a publisher of robot_description before the URDF named in robot.yaml is read; 0: not at all",
    )


@attrs.frozen(kw_only=True)
class BalanceNodeParameters(DescriptionParameters):
    """What the balance node needs besides robot.yaml and balance.yaml."""

    lock_step: bool = parameter(
        "bool", False, unit="-", meaning="answer a tick only once IMU, drive and arm data carry its stamp (simulation)"
    )
    imu_topic: str = parameter(
        "string", "imu/data", unit="-", choices=_WAYS_OF_IMU, meaning="where the IMU's data come from"
    )
    command_lifespan: float = parameter(
        "double",
        0.02,
        unit="s",
        low=0.001,
        high=1.0,
        meaning="age past which an undelivered drive command is dropped (not in lock-step)",
    )
    odom_rate: float = parameter("double", 50.0, unit="Hz", low=1.0, high=1000.0, meaning="how often odom is published")


@attrs.frozen(kw_only=True)
class ArmCompensationNodeParameters(DescriptionParameters):
    """What the arm compensation node needs besides robot.yaml and compensation.yaml."""


@attrs.frozen(kw_only=True)
class KinematicsNodeParameters(DescriptionParameters):
    """What the whole-body kinematics node needs besides robot.yaml."""

    rate: float = parameter(
        "double",
        0.0,
        unit="Hz",
        low=0.0,
        high=10000.0,
        meaning="greatest rate of center_of_mass and body_inertia; 0: each joint state",
    )
    marker_rate: float = parameter(
        "double", 10.0, unit="Hz", low=0.1, high=1000.0, meaning="greatest rate of com_marker"
    )


@attrs.frozen(kw_only=True)
class SimulatedRobotNodeParameters:
    """What the simulated robot needs besides robot.yaml and simulation.yaml."""

    clock: str = parameter(
        "string",
        "lock_step",
        unit="-",
        choices=("lock_step", "real_time"),
        meaning="wait for each answer, or go by the wall clock",
    )
    duration: float = parameter(
        "double", 0.0, unit="s", low=0.0, high=1e6, meaning="simulated time after which it ends; 0: when it is told to"
    )
    seed: int = parameter("integer", 0, unit="-", low=0, high=2**62, meaning="seed of all that is random")
    answer_timeout: float = parameter(
        "double",
        30.0,
        unit="s",
        low=0.1,
        high=3600.0,
        meaning="wall time to wait for an answer before it ends with an error",
    )
    drive_watchdog: float = parameter(
        "double",
        0.05,
        unit="s",
        low=0.001,
        high=10.0,
        meaning="age of the newest drive command past which the drive lets go (real time)",
    )
    wait_for_plan: bool = parameter(
        "bool",
        False,
        unit="-",
        meaning="hold time, once the robot balances on its stand, until an arm plan has been accepted or refused",
    )
    imu_topic: str = parameter(
        "string",
        "imu/data",
        unit="-",
        choices=_WAYS_OF_IMU,
        meaning="what the IMU offers: with or without an orientation",
    )
    plan: str = parameter(
        "string",
        "",
        unit="-",
        meaning="plan file whose start posture and loads it begins with; its arm motion is left to arm_compensation",
    )
    plan_start: float = parameter(
        "double",
        -1.0,
        unit="s",
        low=-1.0,
        high=1e6,
        meaning="when the plan file's loads and pushes begin; negative: they do not happen",
    )
    count_from: float = parameter(
        "double", 0.0, unit="s", low=0.0, high=1e6, meaning="when the peaks that it tells at the end begin to count"
    )
    truth: list[str] = parameter(
        "string_array", [], unit="-", meaning="KEY=VALUE, where the simulated robot differs from the model"
    )


def parameter_files() -> dict[str, Path]:
    """The files given on the command line with ``--params-file``, by their name."""
    words = sys.argv
    return {Path(b).name: Path(b) for a, b in zip(words, words[1:]) if a == "--params-file"}


def robot_file() -> Path:
    """The robot.yaml on the command line, beside which the URDF is looked for."""
    return parameter_files().get("robot.yaml", Path("robot.yaml"))


class NodeParameters:
    """The parameters of one node: one read-only object for each class, from what the parameter files and ``-p`` gave.

    The node must have been made with ``automatically_declare_parameters_from_overrides=True``. ``classes`` maps a file's name
    (as errors name it) to the parameter class of that file. Raises :class:`ParameterError` in one line.
    """

    def __init__(self, node: Node, classes: Mapping[str, type]) -> None:
        self._node, self._classes = node, dict(classes)
        given = {name: _plain(p.value) for name, p in node.get_parameters_by_prefix("").items() if _is_ours(name)}
        self._objects = self._build(given)
        for name in given:
            node.undeclare_parameter(name)
        self._on_change: Callable[[NodeParameters], None] | None = None
        self._flat = {key: value for made in self._objects.values() for key, value in flatten(made).items()}
        self._declared = {d.name: d for cls in classes.values() for d in declarations(cls, flat=self._flat)}

    def __getitem__(self, file: str) -> Any:
        """The parameter object of one file's class."""
        return self._objects[file]

    def declare(self, on_change: Callable[[NodeParameters], None] | None = None) -> None:
        """Declare all to ROS. ``on_change`` takes changed runtime parameters over, or raises :class:`BallbalError`.

        Without it nothing may change while the node runs.
        """
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

    def _build(self, flat: Mapping[str, Any]) -> dict[str, Any]:
        names = {file: {d.name for d in declarations(cls, flat=flat)} for file, cls in self._classes.items()}
        known = set().union(*names.values())
        paths = parameter_files()
        for key in flat:
            if key not in known:
                raise ParameterError(self._source(key, paths), f"unknown parameter {key}", nearest(key, known))
        return {
            file: build(
                cls,
                {k: v for k, v in flat.items() if k in names[file]},
                str(paths.get(file, f"parameters of {self._node.get_name()}")),
            )
            for file, cls in self._classes.items()
        }

    def _source(self, key: str, paths: Mapping[str, Path]) -> str:
        last = key.rpartition(".")[2]
        for path in paths.values():
            if path.is_file() and f"{last}:" in path.read_text(encoding="utf-8", errors="replace"):
                return str(path)
        return f"parameters of {self._node.get_name()}"

    def _set(self, changed: Sequence[Any]) -> SetParametersResult:
        flat = {p.name: _plain(p.value) for p in changed if p.name in self._declared}
        if not flat:
            return SetParametersResult(successful=True)
        try:
            if self._on_change is None:
                raise ParameterError(next(iter(flat)), "can't change while the node runs", "start the node anew")
            before = self._objects, self._flat
            self._flat = {**self._flat, **flat}
            try:
                self._objects = self._build(self._flat)
                self._on_change(self)
            except BaseException:
                self._objects, self._flat = before
                raise
        except BallbalError as error:
            return SetParametersResult(successful=False, reason=str(error))
        except Exception as error:
            return SetParametersResult(successful=False, reason=f"{type(error).__name__}: {error}")
        return SetParametersResult(successful=True)


def descriptor_of(declared: Declaration, *, changeable: bool) -> ParameterDescriptor:
    """The ROS descriptor of a declaration: type, range, meaning with unit, read-only unless it may change while running."""
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


def _plain(value: Any) -> Any:
    """Lists for what ROS gives as arrays; what can't be compared otherwise stays as it is."""
    return list(value) if hasattr(value, "__iter__") and not isinstance(value, (str, bytes)) else value
