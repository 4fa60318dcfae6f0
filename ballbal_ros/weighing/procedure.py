"""The weighing itself: from posture to posture, wait until the ball rests, look for a while; then a slow swing.

It asks a :class:`Robot` to move and to wait, and doesn't know whether that is the simulated one or a real one.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial
from typing import Protocol

import attrs
import numpy as np

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.weighing.record import Record

_LOOK = 0.25
_STEP = 0.02
_SWINGS = 2
_SLOWER = (1.0, 1.4, 2.0)


class Robot(Protocol):
    """A robot that balances and can be asked to move; all its rows go into ``record``."""

    record: Record

    @property
    def time(self) -> float:
        """How long it has run, s of its own time."""

    def arms(self) -> Array:
        """Arm positions [n] as measured, rad or m."""

    def move(self, path: Callable[[Array], ArmPath]) -> None:
        """Plan the motion from where the arms are, make it, and come back once arms and plan have ended."""

    def roll(self, x: float, y: float) -> None:
        """Command a velocity of the ball, m/s, heading axes."""

    def wait(self, seconds: float, /) -> None:
        """Let so much time pass. Raises :class:`BallbalError` where the robot falls or lets go."""


@attrs.frozen(kw_only=True)
class ProcedureSettings:
    """How it is done. ``joint_speed``: greatest speed of a joint, rad/s or m/s; ``least_move``: shortest time of a
    move, s; ``settle``: time that the ball has to come to rest, at least and at most, s; ``rest_speed``: of the ball,
    at which it rests, m/s; ``look``: how long each rest is averaged, s; ``swing_speed`` and ``swing_periods``:
    of the ball, m/s, and s.
    """

    joint_speed: float = 1.5
    least_move: float = 1.5
    settle: tuple[float, float] = (1.0, 4.0)
    rest_speed: float = 0.004
    look: float = 2.0
    swing_speed: float = 0.12
    swing_periods: tuple[float, ...] = (2.4, 1.4)


def weigh(
    robot: Robot, postures: Array, settings: ProcedureSettings, told: Callable[[str], None] | None = None
) -> None:
    """Take the robot through postures [K, n] and back to where it began, and through the swing; the rest is in its
    record. ``told`` hears what is being done.
    """
    say = told or (lambda _: None)
    home = robot.arms()
    rest(robot, settings)
    for number, posture in enumerate(postures, start=1):
        say(f"posture {number} of {len(postures)}")
        go(robot, posture, settings)
        rest(robot, settings)
    say("back to where it began")
    go(robot, home, settings)
    rest(robot, settings)
    say("a slow swing")
    swing(robot, settings)


def go(robot: Robot, posture: Array, settings: ProcedureSettings) -> None:
    """Move the arms to a posture [n], straight and slowly; slower still where the plan would go beyond a limit.

    Raises :class:`PlanRefused` where that doesn't help.
    """
    far = float(np.abs(posture - robot.arms()).max())
    during = max(settings.least_move, 1.875 * far / settings.joint_speed)
    for slower in _SLOWER:
        try:
            robot.move(partial(_straight, posture, slower * during))
            return
        except PlanRefused:
            if slower == _SLOWER[-1]:
                raise


def _straight(posture: Array, during: float, start: Array) -> ArmPath:
    both, still = np.stack((start, posture)), np.zeros((2, len(posture)))
    return ArmPath.through(np.array([0.0, during]), both, still, still)


def rest(robot: Robot, settings: ProcedureSettings) -> None:
    """Wait until the ball rests, at most so long, and look."""
    least, most = settings.settle
    waited = least
    robot.wait(least)
    while waited < most and not rests(robot.record, settings.rest_speed):
        robot.wait(_LOOK)
        waited += _LOOK
    first = len(robot.record)
    robot.wait(settings.look)
    robot.record.rests.append((first, len(robot.record)))


def rests(record: Record, speed: float) -> bool:
    """Whether the ball has gone less in the last half second than it would at ``speed``, m/s; no while nothing was
    heard of it.
    """
    if len(record) < 2:
        return False
    _, ball = record.recent(0.5)
    half = len(ball) // 2
    return bool(np.hypot(*(ball[half:].mean(axis=0) - ball[:half].mean(axis=0))) < 0.25 * speed)


def swing(robot: Robot, settings: ProcedureSettings) -> None:
    """Roll to and fro along x, then along y, each with two periods: slowly, gravity and the ball's acceleration work
    on the mass centre's height; faster, the inertia comes in.
    """
    first = len(robot.record)
    for x, y in ((1.0, 0.0), (0.0, 1.0)):
        for period in settings.swing_periods:
            for step in range(round(_SWINGS * period / _STEP)):
                phase = 2.0 * math.pi * (step + 1) * _STEP / period
                speed = settings.swing_speed * math.sin(phase)
                robot.roll(x * speed, y * speed)
                robot.wait(_STEP)
    robot.roll(0.0, 0.0)
    robot.wait(settings.settle[0])
    robot.record.swings.append((first, len(robot.record)))
