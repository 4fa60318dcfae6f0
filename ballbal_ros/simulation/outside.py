"""What the world exerts on the simulated robot: a push on a link, pulls at the hands."""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import mujoco
import numpy as np

from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.motion.plan_request import HandWrench
from ballbal_ros.motion.pulls import hand_wrenches
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.simulation.world import World


class OutsideForces:
    """A push and the hands' pulls, given to MuJoCo once a tick. ``there``: whether there is any."""

    def __init__(self, world: World, data: mujoco.MjData) -> None:
        self._world, self._data = world, data
        self._push: tuple[int, Array, Array] | None = None
        self._pulls: dict[int, tuple[Array, Array]] = {}
        self.there = False

    def push(self, link: str, at: Sequence[float], force: Sequence[float]) -> None:
        """Push with a force [3], N in ``odom``, on the point ``at`` [3], m in the link, until :meth:`release_push`."""
        body = self._body(link)
        self.release_push()
        self._push = (body, np.array(at, float), np.array(force, float))
        self.there = True

    def release_push(self) -> None:
        """End the push."""
        if self._push is not None:
            self._data.xfrc_applied[self._push[0]] = 0.0
        self._push = None
        self.there = bool(self._pulls)

    def pull(self, hand: str, force: Array, moment: Array) -> None:
        """Exert this on a hand's origin from now on: force [3], N, moment [3], N m, ``base_footprint`` axes."""
        self._pulls[self._body(hand)] = (force, moment)
        self.there = True

    def apply(self) -> None:
        """Give MuJoCo what acts now, where the bodies are now."""
        data = self._data
        for body in self._pulls:
            data.xfrc_applied[body] = 0.0
        if self._push is not None:
            body, at, force = self._push
            data.xfrc_applied[body] = 0.0
            self._add(body, data.xmat[body].reshape(3, 3) @ at, force)
        if self._pulls:
            ahead = data.xmat[self._world.base]
            heading = math.atan2(ahead[3], ahead[0])
            sin, cos = math.sin(heading), math.cos(heading)
            turn = np.array([[cos, -sin, 0.0], [sin, cos, 0.0], [0.0, 0.0, 1.0]])
            for body, (force, moment) in self._pulls.items():
                self._add(body, np.zeros(3), turn @ force, turn @ moment)

    def _add(self, body: int, from_origin: Array, force: Array, moment: Array | float = 0.0) -> None:
        data = self._data
        lever = data.xpos[body] + from_origin - data.xipos[body]
        data.xfrc_applied[body, :3] += force
        data.xfrc_applied[body, 3:] += np.cross(lever, force) + moment

    def _body(self, link: str) -> int:
        body = self._world.bodies.get(link)
        if body is None:
            raise ModelError("push", f"unknown link {link}", nearest(link, self._world.bodies))
        return body


def true_wrenches(story: Story, truth: Truth, begin: float) -> tuple[HandWrench, ...]:
    """What the world truly exerts on the hands in a story that begins at ``begin``, s."""
    return tuple(
        attrs.evolve(
            wrench,
            times=wrench.times + truth.pull_late.get(wrench.hand, 0.0),
            force=truth.pull_factor.get(wrench.hand, 1.0) * wrench.force,
            moment=truth.pull_factor.get(wrench.hand, 1.0) * wrench.moment,
        )
        for wrench in hand_wrenches(story.pulls, begin)
    )
