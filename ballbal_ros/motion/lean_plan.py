"""The lean plan: what the balance loop follows while the arms move, and what it is predicted to use."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.parameters import AcceptanceParameters
from ballbal_ros.robot.arrays import Array, apply
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription

REFERENCE_WIDTH = 17
"""Columns of a reference row: lean (2), lean rate (2), ball (2), ball rate (2), heading, heading rate, torque (3), lean
acceleration (2), ball acceleration (2)."""


@attrs.frozen
class Use:
    """One predicted peak against its limit."""

    name: str
    value: float
    limit: float
    unit: str

    @property
    def ok(self) -> bool:
        """Whether it is within its limit."""
        return bool(self.value <= self.limit)


@attrs.frozen(eq=False)
class LeanPlan:
    """A planned motion of the body on a uniform grid ``times`` [N], s from the plan's start.

    ``lean`` and its rates [N, 2] in ``base_footprint``; ``ball`` and its rates [N, 2], relative to the station at the
    start, in ``odom`` axes turned by the heading at the start; ``heading`` and its rates [N]; ``torque`` [N, 3], the
    drive torque feedforward about the axes of ``base_footprint``, N m (the rotors' inertia is in it); ``lead_in``:
    time at which the arms start, s. ``rotor_torque`` [N, 3]: the part of the torque that the
    drive's own rotors and friction take.
    """

    times: Array
    lead_in: float
    lean: Array
    lean_rate: Array
    lean_acceleration: Array
    ball: Array
    ball_rate: Array
    ball_acceleration: Array
    heading: Array
    heading_rate: Array
    heading_acceleration: Array
    torque: Array
    uses: tuple[Use, ...] = ()
    rotor_torque: Array = attrs.field(factory=lambda: np.zeros((0, 3)))

    @property
    def duration(self) -> float:
        """Length of the plan, s."""
        return float(self.times[-1])

    def refuse_beyond_limits(self, where: str) -> None:
        """Raise :class:`PlanRefused` with the worst use beyond its limit, in one line."""
        beyond = [use for use in self.uses if not use.ok]
        if beyond:
            worst = max(beyond, key=lambda use: use.value / use.limit if use.limit > 0 else np.inf)
            raise PlanRefused(
                where,
                f"would need {worst.name} {worst.value:.3g} {worst.unit}".rstrip(),
                f"its limit is {worst.limit:.3g} {worst.unit}: a slower or smaller motion, or more lead-in",
            )

    def at(self, time: float) -> tuple[Array, Array, Array, Array]:
        """Lean, lean rate, ball and ball rate [2] at a time, s, from the plan's start; its end holds."""
        step, time = float(self.times[1] - self.times[0]), min(max(time, 0.0), self.duration)
        index = np.array([min(int(time / step + 1e-9), len(self.times) - 2)])
        s = (np.array([time]) - self.times[index]) / step
        lean = _quintic(self.lean, self.lean_rate, self.lean_acceleration, index, s, step)
        ball = _quintic(self.ball, self.ball_rate, self.ball_acceleration, index, s, step)
        return lean[0][0], lean[1][0], ball[0][0], ball[1][0]

    def until(self, time: float) -> LeanPlan:
        """The plan up to a time, s."""
        nodes = int(np.searchsorted(self.times, time + 1e-9))
        arrays = [field.name for field in attrs.fields(LeanPlan) if field.name not in ("lead_in", "uses")]
        cut: dict[str, Any] = {name: getattr(self, name)[:nodes] for name in arrays}
        return attrs.evolve(self, **cut)

    def table(self, period: float, torque_ahead: float = 0.0) -> Array:
        """References [M, 17] at 0, period, 2 period … to the end: quintic between the grid's points, torque linear.

        ``torque_ahead``: how much later than the rest the torque is read, s; it acts after the loop's delay, held over
        a period.
        """
        count = int(np.floor(self.duration / period + 1e-9)) + 1
        times = np.minimum(np.arange(count) * period, self.duration)
        step = float(self.times[1] - self.times[0])
        index = np.minimum((times / step + 1e-9).astype(int), len(self.times) - 2)
        s = (times - self.times[index]) / step
        table = np.empty((count, REFERENCE_WIDTH))
        table[:, 0:2], table[:, 2:4] = _quintic(self.lean, self.lean_rate, self.lean_acceleration, index, s, step)
        table[:, 4:6], table[:, 6:8] = _quintic(self.ball, self.ball_rate, self.ball_acceleration, index, s, step)
        heading = [a[:, None] for a in (self.heading, self.heading_rate, self.heading_acceleration)]
        table[:, 8:9], table[:, 9:10] = _quintic(heading[0], heading[1], heading[2], index, s, step)
        for columns, values, at in (
            (slice(10, 13), self.torque, times + torque_ahead),
            (slice(13, 15), self.lean_acceleration, times),
            (slice(15, 17), self.ball_acceleration, times),
        ):
            table[:, columns] = np.stack([np.interp(at, self.times, column) for column in values.T], axis=1)
        return table


def _quintic(value: Array, rate: Array, acceleration: Array, index: Array, s: Array, h: float) -> tuple[Array, Array]:
    """Position and rate of the quintic through the grid's values, rates and accelerations, at fraction s of interval
    ``index``.
    """
    s = s[:, None]
    x0, x1 = value[index], value[index + 1]
    v0, v1 = rate[index] * h, rate[index + 1] * h
    a0, a1 = acceleration[index] * h * h, acceleration[index + 1] * h * h
    d = x1 - x0 - v0 - 0.5 * a0
    e = v1 - v0 - a0
    f = a1 - a0
    c3, c4, c5 = 10.0 * d - 4.0 * e + 0.5 * f, -15.0 * d + 7.0 * e - f, 6.0 * d - 3.0 * e + 0.5 * f
    position = x0 + s * (v0 + s * (0.5 * a0 + s * (c3 + s * (c4 + s * c5))))
    speed = (v0 + s * (a0 + s * (3.0 * c3 + s * (4.0 * c4 + s * 5.0 * c5)))) / h
    return position, speed


@attrs.frozen(eq=False)
class Prediction:
    """What a motion asks of drive and floor at N samples."""

    torque: Array
    force: Array
    ball_acceleration: Array
    lean: Array
    ball: Array
    ball_rate: Array


def predicted_uses(
    prediction: Prediction, description: RobotDescription, acceptance: AcceptanceParameters
) -> tuple[Use, ...]:
    """Peaks of lean, drive torque, actuator effort, floor friction and torsion, and ball travel and speed, with their
    limits.
    """
    parameters = description.parameters
    mass, torque, force = parameters.ball.mass, prediction.torque, prediction.force
    normal = force[:, 2] + mass * GRAVITY
    # What the floor gives to the ball moves the ball and, through it, the body.
    grip = np.hypot(*(force[:, :2] + mass * prediction.ball_acceleration).T)
    friction = grip / (parameters.floor.friction * np.maximum(normal, 1e-6))
    torsion = np.abs(torque[:, 2]) / np.maximum(parameters.floor.torsion * normal, 1e-9)
    torque_in_base = apply(rotation_lean(prediction.lean).transpose(0, 2, 1), torque)
    effort = np.abs(torque_in_base @ description.drive.effort_map.T) / description.drive.effort_limit
    limits = parameters.limits
    horizontal = np.abs(torque[:, :2]).max()
    return (
        Use("peak lean", float(np.degrees(np.hypot(*prediction.lean.T).max())), float(np.degrees(limits.lean)), "deg"),
        Use("drive torque", float(horizontal), acceptance.torque_use * limits.drive_torque, "N m"),
        Use("actuator effort use", float(effort.max()), acceptance.torque_use, ""),
        Use("friction use", float(friction.max()), acceptance.friction_use, ""),
        Use("torsion use", float(torsion.max()), acceptance.torsion_use, ""),
        Use("ball travel", float(1e3 * np.hypot(*prediction.ball.T).max()), 1e3 * acceptance.ball_travel, "mm"),
        Use("ball speed", float(np.hypot(*prediction.ball_rate.T).max()), limits.ball_speed, "m/s"),
    )
