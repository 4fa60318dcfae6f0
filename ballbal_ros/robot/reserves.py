"""What a standing robot has in reserve: how hard a hand can be pulled, in which direction, before which limit gives."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.robot.arrays import Array, apply, cross
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture

_DIRECTIONS = 72


@attrs.frozen(eq=False)
class PullReserve:
    """Horizontal pulls on one hand, the robot at rest and leaning against them, at ``direction`` [N] (rad, 0 forward,
    left positive).

    For each direction the force in N at which one limit is reached: ``lean`` (limits.lean), ``torque``
    (limits.drive_torque), ``friction`` (the ball slides), ``heading`` (the ball spins on the spot, as the floor's
    torsion gives way).
    """

    hand: str
    direction: Array
    lean: Array
    torque: Array
    friction: Array
    heading: Array

    def weakest(self) -> tuple[float, str, float]:
        """(force in N, name of the limit, direction in rad) of the least pull that reaches a limit; the heading's set
        apart.
        """
        forces = {"lean": self.lean, "drive torque": self.torque, "floor friction": self.friction}
        name = min(forces, key=lambda key: float(forces[key].min()))
        index = int(np.argmin(forces[name]))
        return float(forces[name][index]), name, float(self.direction[index])


def pull_reserve(
    description: RobotDescription, posture: Posture, hand: str, position_hand_in_base: Array
) -> PullReserve:
    """How hard ``hand``, at a place [3] in ``base_link``, can be pulled level with the floor before each limit.

    At rest the moment about the contact point is that of gravity and the pull: (R p_h + r z) × f + (R m c) × (-g z) =
    0 about x and y, which is linear in f for a given lean. So the leans on the limit's circle give the pulls on the
    limit.
    """
    limits, floor, ball = description.parameters.limits, description.parameters.floor, description.parameters.ball
    about = np.linspace(-np.pi, np.pi, _DIRECTIONS, endpoint=False)
    lean = limits.lean * np.stack((np.sin(about), -np.cos(about)), axis=-1)
    rotation = rotation_lean(lean)
    center = apply(rotation, np.broadcast_to(posture.mass * posture.center, (_DIRECTIONS, 3)))
    at = apply(rotation, np.broadcast_to(position_hand_in_base, (_DIRECTIONS, 3)))
    height = at[:, 2] + ball.radius
    weight_moment = cross(center, np.array([0.0, 0.0, -GRAVITY]))
    force = np.stack((-weight_moment[:, 1] / height, weight_moment[:, 0] / height), axis=-1)
    size, direction = np.hypot(*force.T), np.arctan2(force[:, 1], force[:, 0])
    order = np.argsort(direction)
    size, direction, at = size[order], direction[order], at[order]
    normal = (posture.mass + ball.mass) * GRAVITY
    turning = np.abs(at[:, 0] * np.sin(direction) - at[:, 1] * np.cos(direction))
    return PullReserve(
        hand,
        direction,
        size,
        np.full(_DIRECTIONS, limits.drive_torque / ball.radius),
        np.full(_DIRECTIONS, floor.friction * normal),
        floor.torsion * normal / np.maximum(turning, 1e-6),
    )


def fall_time(rate: float, from_lean: float, to_lean: float) -> float:
    """Time in s in which a lean error grows from rest at ``from_lean`` to ``to_lean`` (rad) at a rate in rad/s:
    cosh(rate t).
    """
    return math.acosh(to_lean / from_lean) / rate
