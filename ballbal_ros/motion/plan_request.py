"""What the lean planner is asked for: where it begins, what arms, ball and hands do, what else pulls."""

from __future__ import annotations

from collections.abc import Sequence

import attrs
import numpy as np

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.loads import Load


@attrs.frozen(eq=False)
class StartState:
    """Where a plan begins: lean and its rate [2], rad; ball relative to the station and its rate [2], m, in the
    plan's axes.
    """

    lean: Array
    lean_rate: Array
    ball: Array
    ball_rate: Array


@attrs.frozen(eq=False)
class HandWrench:
    """What the world is planned to exert on one hand: force and moment [N, 3] at times [N], ``base_footprint`` axes,
    held outside.
    """

    hand: str
    times: Array
    force: Array
    moment: Array


@attrs.frozen(eq=False)
class BallMotion:
    """A planned ball motion: [N, 3] (x, y in plan axes, m; heading, rad) with rates and accelerations at times [N],
    held outside.
    """

    times: Array
    position: Array
    rate: Array
    acceleration: Array


@attrs.frozen(eq=False)
class OutsideMoment:
    """A couple on the body [N, 2] (roll, pitch), N m in ``base_footprint`` axes, at times [N], held outside; and
    ``torque`` [N, 2], what the drive must give besides (a force makes another moment about the ball's centre than about
    the contact, and drives have errors of their own).
    """

    times: Array
    moment: Array
    torque: Array

    def at(self, times: Array) -> tuple[Array, Array]:
        """Couple and torque [M, 2] at other times [M], s."""
        both = [np.interp(times, self.times, column) for column in (*self.moment.T, *self.torque.T)]
        return np.stack(both[:2], axis=1), np.stack(both[2:], axis=1)


@attrs.frozen(eq=False)
class PlanRequest:
    """What is to happen. ``arms`` is what the arms will really do (servo lag included), from ``lead_in`` s after the
    plan's start.

    ``loads`` are changes (time from the plan's start, load); ``start`` None means at rest in equilibrium. ``moment``:
    what else pulls, beside what the trim bears.
    """

    arms: JointPath
    lead_in: float
    loads: Sequence[tuple[float, Load]] = ()
    ball: BallMotion | None = None
    wrenches: Sequence[HandWrench] = ()
    start: StartState | None = None
    moment: OutsideMoment | None = None
