"""The demo robot and its `reach`, as the tests of the mathematics want them."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import attrs
import numpy as np
import yaml

from ballbal_ros.declaration import load
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.spline import ArmPath, path_through_waypoints
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody

CONFIG = Path(__file__).resolve().parents[2] / "config"


@cache
def shelver() -> RobotDescription:
    """The demo robot."""
    return RobotDescription.load(CONFIG / "shelver")


@cache
def compensation() -> CompensationParameters:
    """How the demo robot's arm motions are compensated."""
    return load(CompensationParameters, CONFIG / "shelver" / "compensation.yaml")


@attrs.frozen
class Reach:
    """The plan `reach`: its loads, and its one move from `first` to `last` [n] during `duration` s."""

    loads: tuple[Load, ...]
    first: Array
    last: Array
    duration: float

    def body(self) -> WholeBody:
        """The demo robot that holds these loads; a new one each time, for it is not to be shared."""
        return WholeBody(shelver(), self.loads)

    def path(self) -> ArmPath:
        """The move."""
        return path_through_waypoints([0.0, self.duration], np.stack((self.first, self.last)))


@cache
def reach() -> Reach:
    """The demo plan `reach`, read from its file."""
    plan = yaml.safe_load((CONFIG / "plans" / "reach.yaml").read_text())
    first = posture(plan["start"]["posture"])
    (move,) = (step for step in plan["steps"] if "move" in step)
    loads = tuple(Load(held["hand"], held["mass"], held["center"]) for held in plan["start"]["loads"])
    return Reach(loads, first, posture(move["move"], first), float(move["during"]))


def posture(named: dict[str, float], otherwise: Array | None = None) -> Array:
    """Arm position [n] from joints by name; those not named are at 0, or as in `otherwise`."""
    position = np.zeros(shelver().joint_count) if otherwise is None else otherwise.copy()
    for name, value in named.items():
        position[shelver().joint_index(name, "test")] = value
    return position
