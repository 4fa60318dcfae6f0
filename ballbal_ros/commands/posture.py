"""The posture and the loads that a command is asked about: from a plan file's start, and from options."""

from __future__ import annotations

import math
from collections.abc import Iterable
from pathlib import Path

import attrs
import numpy as np

from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.motion.story import read_story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import Posture, WholeBody


@attrs.frozen(eq=False)
class AskedPosture:
    """A robot with its loads at an arm position [n], rad or m: ``body`` and ``posture`` are its mass model."""

    body: WholeBody
    arm_position: Array
    posture: Posture

    @property
    def named_position(self) -> dict[str, float]:
        """Arm position by joint name."""
        return dict(zip(self.body.description.joint_names, self.arm_position.tolist(), strict=True))

    @property
    def loads(self) -> dict[str, float]:
        """Mass in each hand that holds something, kg."""
        return {hand: load.mass for hand, load in self.body.loads.items()}


def asked_posture(
    description: RobotDescription, plan: Path | None = None, joints: Iterable[str] = (), loads: Iterable[str] = ()
) -> AskedPosture:
    """The start of a plan file (else all joints at 0, hands empty), changed by ``NAME=VALUE`` options.

    ``joints`` in rad or m, ``loads`` as ``HAND=MASS`` in kg at the hand link's origin. Raises a :class:`BallbalError`
    in one line.
    """
    arm_position, body = np.zeros(description.joint_count), WholeBody(description)
    if plan is not None:
        story = read_story(plan, description)
        arm_position[:] = story.posture
        for load in story.start_loads:
            body.set_load(load)
    for option in joints:
        name, value = _named_number(option, "--joint", "NAME=VALUE, in rad or m", description.joint_names)
        index = description.joint_index(name, "--joint")
        low, high = float(description.position_low[index]), float(description.position_high[index])
        if not low <= value <= high:
            raise ModelError("--joint", f"{name} is {value:g}", f"its range is {low:g} … {high:g}")
        arm_position[index] = value
    for option in loads:
        hand, mass = _named_number(option, "--load", "HAND=MASS, in kg", body.hands)
        body.set_load(Load(hand, mass), "--load")
    return AskedPosture(body, arm_position, body.posture(arm_position))


def _named_number(option: str, where: str, form: str, known: Iterable[str]) -> tuple[str, float]:
    name, sign, text = option.partition("=")
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not sign or not math.isfinite(value):
        raise ModelError(where, f"{option!r} is not understood", f"it takes {form}")
    if name not in known:
        raise ModelError(where, f"unknown name {name}", nearest(name, known))
    return name, value
