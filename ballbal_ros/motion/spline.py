"""Arm paths: smooth curves through waypoints, and what the joint servos make of them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol

import attrs
import numpy as np
from scipy.interpolate import BPoly, PPoly, make_interp_spline
from scipy.linalg import expm

from ballbal_ros.errors import PlanError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

LONGEST = 300.0
"""The longest motion that is planned at once, s."""
_FINE = 0.001


class JointPath(Protocol):
    """A motion of all arm joints over [0, duration] s, which holds its ends outside."""

    @property
    def duration(self) -> float:
        """Length in time, s."""

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s from the path's start."""


@attrs.frozen(eq=False)
class ArmPath:
    """A piecewise quintic of all arm joints, twice continuously differentiable; at rest outside [0, duration]."""

    knots: Array
    _position: PPoly
    _rate: PPoly
    _acceleration: PPoly

    @classmethod
    def through(cls, knots: Array, position: Array, rate: Array, acceleration: Array) -> ArmPath:
        """The quintic pieces between knots [K] with these positions, rates and accelerations [K, n] at them."""
        values = np.stack((position, rate, acceleration), axis=1)
        poly = PPoly.from_bernstein_basis(BPoly.from_derivatives(knots, values))
        return cls(np.array(knots, float), poly, poly.derivative(), poly.derivative(2))

    @classmethod
    def still(cls, position: Array, duration: float = 0.0) -> ArmPath:
        """Arms that stay where they are."""
        both = np.stack((position, position))
        return cls.through(np.array([0.0, max(duration, 1e-3)]), both, 0.0 * both, 0.0 * both)

    @property
    def duration(self) -> float:
        """Time of the last knot, s."""
        return float(self.knots[-1])

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s from the path's start."""
        clipped = np.clip(times, self.knots[0], self.knots[-1])
        inside = ((times >= self.knots[0]) & (times <= self.knots[-1]))[:, None]
        return self._position(clipped), self._rate(clipped) * inside, self._acceleration(clipped) * inside


def path_through_waypoints(
    times: Sequence[float],
    positions: Array,
    rates: Sequence[Array | None] | None = None,
    accelerations: Sequence[Array | None] | None = None,
) -> ArmPath:
    """A smooth path through waypoints [K, n] at increasing times [K], s; it ends at rest.

    Rates and accelerations are honoured where they are given. Where they are not, they are those of the quintic spline
    through the positions, at rest at both ends and wherever two waypoints are the same (a dwell).
    The first point may be moving: then the path takes over from a motion. Raises :class:`PlanError` where the times
    don't increase, a number is not finite, there are fewer than two points, or the last one moves.
    """
    knots, points = np.asarray(times, float), np.asarray(positions, float)
    if not (np.all(np.isfinite(knots)) and np.all(np.isfinite(points))):
        raise PlanError("plan", "a time or position is not finite", "give finite numbers")
    if len(knots) < 2:
        raise PlanError("plan", f"has {len(knots)} points", "an arm motion takes a first and a last point at least")
    if np.any(np.diff(knots) <= 0.0):
        bad = int(np.argmax(np.diff(knots) <= 0.0))
        raise PlanError(
            "plan",
            f"time_from_start of point {bad + 1} is {knots[bad + 1]:g} s after {knots[bad]:g} s",
            "times must increase",
        )
    given_rate = [None] * len(knots) if rates is None else list(rates)
    given_acceleration = [None] * len(knots) if accelerations is None else list(accelerations)
    rate, acceleration = _smooth(knots, points)
    for k, value in enumerate(given_rate):
        if value is not None:
            rate[k] = value
    if any(value is not None for value in given_rate):
        acceleration = _fitting_accelerations(knots, points, rate)
    for k, value in enumerate(given_acceleration):
        if value is not None:
            acceleration[k] = value
    if not (np.all(np.isfinite(rate)) and np.all(np.isfinite(acceleration))):
        raise PlanError("plan", "a rate or acceleration is not finite", "give finite numbers, or leave them out")
    if np.any(rate[-1]):
        raise PlanError("plan", "its last point is still moving", "end at rest: velocity 0")
    return ArmPath.through(knots, points, rate, acceleration)


def _smooth(knots: Array, points: Array) -> tuple[Array, Array]:
    """Rates and accelerations at the knots of quintic splines between the dwells."""
    rate, acceleration = np.zeros_like(points), np.zeros_like(points)
    dwell = np.all(np.diff(points, axis=0) == 0.0, axis=1)
    edges = [0, *(np.flatnonzero(dwell[1:] | dwell[:-1]) + 1).tolist(), len(knots) - 1]
    rest: Any = [(1, np.zeros(points.shape[1])), (2, np.zeros(points.shape[1]))]
    for first, last in zip(edges[:-1], edges[1:], strict=True):
        if last - first >= 2:
            spline = make_interp_spline(knots[first : last + 1], points[first : last + 1], k=5, bc_type=(rest, rest))
            inner = slice(first + 1, last)
            rate[inner], acceleration[inner] = spline.derivative()(knots[inner]), spline.derivative(2)(knots[inner])
    return rate, acceleration


def _fitting_accelerations(knots: Array, points: Array, rate: Array) -> Array:
    """Accelerations at the knots where rates are given: the mean of the cubics' on both sides; zero where the path
    rests.
    """
    step = np.diff(knots)[:, None]
    slope = np.diff(points, axis=0) / step
    leaving = (6.0 * slope - 4.0 * rate[:-1] - 2.0 * rate[1:]) / step
    arriving = (-6.0 * slope + 2.0 * rate[:-1] + 4.0 * rate[1:]) / step
    acceleration = np.zeros_like(points)
    acceleration[1:-1] = 0.5 * (leaving[1:] + arriving[:-1])
    ends = [(0, leaving[0]), (-1, arriving[-1])]
    for index, value in ends:
        acceleration[index] = np.where(rate[index] == 0.0, 0.0, value)
    # A joint that dwells must not be drawn away from where it is.
    dwell = (np.diff(points, axis=0) == 0.0) & (rate[:-1] == 0.0) & (rate[1:] == 0.0)
    acceleration[:-1][dwell] = 0.0
    acceleration[1:][dwell] = 0.0
    return acceleration


def check_path(path: JointPath, description: RobotDescription, where: str) -> None:
    """Raise :class:`PlanError` where a path leaves a joint's position or velocity limits; one line that names joint
    and time.
    """
    times = np.arange(0.0, path.duration + 0.005, 0.005)
    position, rate, _ = path.sample(times)
    for index, name in enumerate(description.joint_names):
        low, high, fastest = (
            description.position_low[index],
            description.position_high[index],
            description.velocity_limit[index],
        )
        outside = (position[:, index] < low - 1e-6) | (position[:, index] > high + 1e-6)
        if outside.any():
            k = int(np.argmax(outside))
            raise PlanError(
                where,
                f"{name} would be at {position[k, index]:.3f} rad after {times[k]:.2f} s",
                f"its limits are {low:g} to {high:g}",
            )
        k = int(np.argmax(np.abs(rate[:, index])))
        if abs(rate[k, index]) > fastest * (1.0 + 1e-6):
            raise PlanError(
                where,
                f"{name} would move at {abs(rate[k, index]):.2f} rad/s after {times[k]:.2f} s",
                f"its limit is {fastest:g} rad/s",
            )


@attrs.frozen(eq=False)
class FollowedPath:
    """The motion that a joint servo makes of a commanded path, at any time from the command's start.

    ``ideal``: the path itself. ``position_velocity``: q'' = 2w (v_ref - v) + w² (q_ref - q). ``position``:
    q'' = -2w v + w² (q_ref - q), which lags by 2/w. Sampled at 1 ms by exact discretisation (first-order hold).
    """

    duration: float
    _times: Array
    _values: tuple[Array, Array, Array]

    @classmethod
    def of(cls, path: JointPath, servo: str, bandwidth: float | Array) -> JointPath:
        """What a servo of this kind and bandwidth (rad/s; one for all joints or one each [n]) makes of a path."""
        if servo == "ideal":
            return path
        duration = path.duration + 12.0 / float(np.min(bandwidth))
        times: Array = _FINE * np.arange(int(np.ceil(duration / _FINE)) + 1, dtype=float)
        position, rate, _ = path.sample(times)
        w = np.broadcast_to(np.asarray(bandwidth, float), position.shape[1:])
        offset = position[0]
        pulled = w**2 * (position - offset)
        if servo == "position_velocity":
            pulled += 2.0 * w * rate
        state = np.empty((len(times), 2, len(w)))
        for each in np.unique(w):
            state[:, :, w == each] = _critically_damped(pulled[:, w == each], float(each))
        acceleration = pulled - w**2 * state[:, 0] - 2.0 * w * state[:, 1]
        return cls(duration, times, (state[:, 0] + offset, state[:, 1], acceleration))

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s from the command's start."""
        out = []
        for value in self._values:
            out.append(np.stack([np.interp(times, self._times, value[:, j]) for j in range(value.shape[1])], axis=1))
        inside = ((times >= 0.0) & (times <= self.duration))[:, None]
        return out[0], out[1] * inside, out[2] * inside


def _critically_damped(pulled: Array, bandwidth: float) -> Array:
    """Positions and rates [N, 2, n] of x'' = -2w x' - w² x + pulled [N, n] from rest; exact for a linear pull."""
    system: Array = np.zeros((4, 4))
    system[0, 1], system[1, :3] = 1.0, (-(bandwidth**2), -2.0 * bandwidth, 1.0)
    system[:2] *= _FINE
    system[2, 3] = 1.0
    step = expm(system)
    push = step[:2, 2][:, None] * pulled[:-1, None] + step[:2, 3][:, None] * np.diff(pulled, axis=0)[:, None]
    state = np.zeros((len(pulled), 2, pulled.shape[1]))
    for k, forced in enumerate(push):
        state[k + 1] = step[:2, :2] @ state[k] + forced
    return state
