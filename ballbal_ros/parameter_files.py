"""A robot's parameter files: read whole or not at all, compared, and what in them may change while the nodes run."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import attrs

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import build, flatten, read_parameter_file
from ballbal_ros.errors import ParameterError
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.node_parameters import (
    ArmCompensationNodeParameters,
    BalanceNodeParameters,
    ConfigWatchParameters,
    KinematicsNodeParameters,
    SimulatedRobotNodeParameters,
)
from ballbal_ros.parameter_change import Change, flat_changes
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.parameters import SimulationParameters

FILES: Mapping[str, type] = {
    "robot.yaml": RobotParameters,
    "balance.yaml": BalanceParameters,
    "compensation.yaml": CompensationParameters,
    "simulation.yaml": SimulationParameters,
}
"""The parameter class of each file of a robot's folder."""

OWN: Mapping[str, type] = {
    "balance": BalanceNodeParameters,
    "arm_compensation": ArmCompensationNodeParameters,
    "whole_body_kinematics": KinematicsNodeParameters,
    "simulated_robot": SimulatedRobotNodeParameters,
    "config_watch": ConfigWatchParameters,
}
"""What each node has besides its files."""

READERS: Mapping[str, tuple[str, ...]] = {
    "robot.yaml": ("balance", "arm_compensation", "whole_body_kinematics", "simulated_robot"),
    "balance.yaml": ("balance",),
    "compensation.yaml": ("arm_compensation",),
    "simulation.yaml": ("simulated_robot",),
}
"""The nodes that read each file, the one to ask for its values first. What may change at run time has one reader."""

Values = Mapping[str, Any]


def read_values(path: Path) -> dict[str, Any]:
    """All values of one parameter file, defaults filled in, by their dotted names.

    Raises :class:`ParameterError` in one line for whatever is wrong in it: nothing of such a file is used.
    """
    cls = FILES[path.name]
    return flatten(build(cls, read_parameter_file(path), str(path)))


def edits(path: Path, old: Values, new: Values) -> list[Change]:
    """What an edit changes in one file, in the order of declaration."""
    return flat_changes(FILES[path.name], old, new)


def check_may_change(path: Path, changes: list[Change]) -> None:
    """Raise :class:`ParameterError`, which names each of them, where a change is not possible while the nodes run."""
    fixed = [change for change in changes if not change.declared.runtime]
    if fixed:
        what = f"{', '.join(map(str, fixed))} can't change while the nodes run"
        raise ParameterError(str(path), what, "put the old value back, or start the nodes anew")


@attrs.frozen
class ParameterSet:
    """The values of all files at one time: file name → dotted name → value."""

    files: Mapping[str, Values]

    @property
    def checksum(self) -> str:
        """SHA-256 of the values, whatever the layout of the files is."""
        text = json.dumps({name: dict(values) for name, values in self.files.items()}, sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()

    def with_file(self, name: str, values: Values) -> ParameterSet:
        """The same set with one file's values replaced."""
        return ParameterSet({**self.files, name: dict(values)})
