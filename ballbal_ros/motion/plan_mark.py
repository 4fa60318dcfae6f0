"""By what a plan, and all that it is made of, is known again."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterable
from typing import Any

import attrs
import numpy as np

from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.motion.pulls import at_time
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load

# Coarser than what a message's nanoseconds and its knots make of a motion, finer than any motion that differs.
_EVERY, _MOTION, _TIME, _MASS = 0.05, 4, 6, 9


@attrs.frozen
class PlanMark:
    """``motion``: the mark of what arms and ball are to do; ``fits``: of that, and of model, loads, forces, lead-in and
    grid, on which depends how the body must lean for it.
    """

    motion: str
    fits: str


def plan_mark(
    description: RobotDescription, loads: Iterable[Load], request: PlanRequest, parameters: CompensationParameters
) -> PlanMark:
    """The mark of a plan for ``request`` with these ``loads`` at its start. Whatever of it changes, the mark does too;
    the same motion has the same, whether it comes from a plan file or by a message.
    """
    lead_in = round(request.lead_in, _TIME)
    arms = _rounded(request.arms.sample(_times(request.arms.duration))[0])
    ball = [] if request.ball is None else _along(request.ball.times, request.ball.position, request.lead_in)
    robot = {key: value for key, value in attrs.asdict(description.parameters).items() if key != "urdf"}
    held = sorted(_load(load) for load in loads if load.mass > 0.0)
    changes = [[round(when, _TIME), *_load(load)] for when, load in request.loads]
    pulls = []
    for wrench in sorted(request.wrenches, key=lambda each: each.hand):
        times = _times(float(wrench.times[-1]))
        sampled = _rounded(np.array([np.concatenate(at_time(wrench, time)) for time in times.tolist()]))
        if np.any(sampled):
            pulls.append([wrench.hand, sampled])
    grid = parameters.planner.step, parameters.planner.tail
    motion = [arms, ball]
    return PlanMark(_hash(motion), _hash([motion, description.urdf_text, robot, held, changes, pulls, lead_in, grid]))


def _hash(content: Any) -> str:
    return hashlib.sha256(json.dumps(content, default=str).encode()).hexdigest()[:16]


def _times(duration: float) -> Array:
    """Times from 0 to the duration, s, and up to one step further."""
    return _EVERY * np.arange(max(math.ceil(round(duration, _TIME) / _EVERY - 1e-6), 0) + 1, dtype=float)


def _along(times: Array, values: Array, begin: float) -> list[Any]:
    at = _times(float(times[-1]) - begin) + begin
    return _rounded(np.stack([np.interp(at, times, column) for column in values.T], axis=1))


def _rounded(values: Array) -> list[Any]:
    # Adding nothing makes a zero of a negative one.
    return list((np.round(values, _MOTION) + 0.0).tolist())


def _load(load: Load) -> list[Any]:
    numbers = np.concatenate(([load.mass], load.center, load.inertia.ravel()))
    return [load.hand, *(np.round(numbers, _MASS) + 0.0).tolist()]
