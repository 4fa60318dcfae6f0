"""From one motion into the next: arm paths joined in time, planned stops, and where a plan in force will be."""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.plan_request import BallMotion, HandWrench, StartState
from ballbal_ros.motion.spline import ArmPath, JointPath
from ballbal_ros.robot.arrays import Array

_FINE = 0.001
_MOVING = 1e-4


@attrs.frozen(eq=False)
class Motion:
    """A motion that was let go: the arms' ``path`` from ``arms_start``, s, on, and the lean ``plan`` from
    ``lean_start`` on; ``wrenches``: what the world is planned to exert on the hands, their times as ours.
    """

    lean_start: float
    arms_start: float
    path: ArmPath
    plan: LeanPlan
    wrenches: Sequence[HandWrench] = ()

    @property
    def end(self) -> float:
        """When the arms come to rest, s."""
        return self.arms_start + self.path.duration


@attrs.frozen(eq=False)
class Spliced:
    """A path that is given up for another one, ``at`` s after its own start."""

    first: JointPath
    second: JointPath
    at: float

    @property
    def duration(self) -> float:
        """Length from the first path's start to the second one's end, s."""
        return self.at + self.second.duration

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s from the first path's start."""
        before = self.first.sample(times)
        after = self.second.sample(times - self.at)
        later = (times >= self.at)[:, None]
        return (
            np.where(later, after[0], before[0]),
            np.where(later, after[1], before[1]),
            np.where(later, after[2], before[2]),
        )


@attrs.frozen(eq=False)
class Later:
    """What is left of a path ``by`` s after its start."""

    path: JointPath
    by: float

    @property
    def duration(self) -> float:
        """Length of what is left, s."""
        return max(0.0, self.path.duration - self.by)

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s from where it goes on."""
        return self.path.sample(times + self.by)


def stop_path(position: Array, rate: Array, acceleration: Array, time: float, low: Array, high: Array) -> ArmPath:
    """From a moving state [n] to rest in ``time`` s: the rate falls as a cubic, where the joints' limits [n] leave
    room.

    Rad or m, s.
    """
    end = np.clip(position + 0.5 * time * rate + time**2 / 12.0 * acceleration, low, high)
    still = np.zeros_like(position)
    rates, accelerations = np.stack((rate, still)), np.stack((acceleration, still))
    return ArmPath.through(np.array([0.0, time]), np.stack((position, end)), rates, accelerations)


@attrs.frozen(eq=False)
class Handover:
    """Where a plan in force will be when another one takes over.

    ``start`` is in the new plan's axes, its ball relative to where the old plan's ball would have come to rest;
    ``ball`` brings a rolling ball and a turning heading to rest from there.
    """

    start: StartState
    ball: BallMotion | None

    @classmethod
    def at(cls, plan: LeanPlan, time: float, stop_time: float) -> Handover | None:
        """The handover ``time`` s after the plan's start; None where the plan has ended by then."""
        if time >= plan.duration:
            return None
        row = plan.table(_FINE)[max(0, round(time / _FINE))]
        turned = float(row[8] - plan.heading[0])
        sin, cos = math.sin(turned), math.cos(turned)
        into = np.array([[cos, sin], [-sin, cos]])
        rate, acceleration = into @ row[6:8], into @ row[15:17]
        rolls = bool(np.abs(plan.ball[-1] - plan.ball[0]).max() > _MOVING or np.ptp(plan.heading) > _MOVING)
        if rolls and (np.abs(rate).max() > _MOVING or abs(row[9]) > _MOVING):
            start = StartState(row[0:2].copy(), row[2:4].copy(), np.zeros(2), np.zeros(2))
            return cls(start, _rolling_out(np.append(rate, row[9]), np.append(acceleration, 0.0), stop_time))
        away = into @ (row[4:6] - plan.ball[-1])
        return cls(StartState(row[0:2].copy(), row[2:4].copy(), away, rate), None)


def _rolling_out(rate: Array, acceleration: Array, time: float) -> BallMotion:
    """Ball and heading [3] from a rate to rest in ``time`` s, the rate falling as a cubic; positions from 0."""
    none = np.zeros(3)
    path = stop_path(none, rate, acceleration, time, none - np.inf, none + np.inf)
    times: Array = 0.01 * np.arange(int(np.ceil(time / 0.01)) + 1, dtype=float)
    return BallMotion(times, *path.sample(times))
