"""What happens to the simulated robot at given times: loads that truly come and go, pushes, pulls."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.motion.plan_request import HandWrench
from ballbal_ros.motion.pulls import at_time
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.outside import true_wrenches
from ballbal_ros.simulation.robot import SimulatedRobot

_SOON = 1e-9
_HARDEST = 1e5
_MOST_TO_COME = 1000


class Happenings:
    """Loads and pushes by their time, s, applied to a robot as its time comes to them."""

    def __init__(self, robot: SimulatedRobot) -> None:
        self._robot = robot
        self._loads: list[tuple[float, Load]] = []
        self._pushes: list[tuple[float, float, str, tuple[float, ...], tuple[float, ...]]] = []
        self._pushed_until: float | None = None
        self._pulls: list[HandWrench] = []

    def add_story(self, story: Story, begin: float) -> None:
        """All loads and pulls, announced or not, and pushes of a story that begins at ``begin``, s."""
        for change in story.load_changes:
            self.add_load(change.load, begin + change.time)
        for push in story.pushes:
            self.add_push(begin + push.time, push.during, push.link, push.at, push.force)
        if story.pulls:
            self._pulls += true_wrenches(story, self._robot.truth, begin)

    def add_load(self, load: Load, time: float) -> None:
        """What is truly in a hand from ``time`` on."""
        self._check_room("simulated_load", len(self._loads))
        self._loads = sorted([*self._loads, (time, load)], key=lambda entry: entry[0])

    @staticmethod
    def _check_room(what: str, waiting: int) -> None:
        if waiting >= _MOST_TO_COME:
            raise BallbalError(
                what, f"would be one more than {_MOST_TO_COME} still to come", "send it nearer to its time"
            )

    def add_push(self, time: float, during: float, link: str, at: Iterable[float], force: Iterable[float]) -> None:
        """A force [3], N in ``odom``, at a point [3], m, of a link, from ``time`` for ``during`` s; it takes the
        place of one before.
        """
        self._check_room("push", len(self._pushes))
        self._pushes = sorted(
            [*self._pushes, (time, during, link, tuple(at), tuple(force))], key=lambda entry: entry[0]
        )

    def add_wrench(
        self, time: float, during: float, link: str, force: Iterable[float], torque: Iterable[float]
    ) -> None:
        """A force and a torque about the link's origin [3], in ``odom`` axes, that one push makes: its line of action
        is found.

        Raises :class:`BallbalError` where a number is not finite, the link is unknown or the torque is none that the
        force makes.
        """
        f, moment = np.array(tuple(force), float), np.array(tuple(torque), float)
        robot = self._robot
        if not robot.description.model.existBodyName(link):
            links = [frame.name for frame in robot.description.model.frames if frame.type.name == "BODY"]
            raise BallbalError("push", f"unknown link {link!r}", nearest(link, links))
        size = float(f @ f) if np.abs(f).max() < _HARDEST else math.nan
        if not math.isfinite(size) or not np.abs(moment).max() < _HARDEST or abs(f @ moment) > 1e-6 * max(size, 1e-12):
            raise BallbalError(
                "push",
                f"is {f.tolist()} N with {moment.tolist()} N m",
                f"it takes finite numbers below {_HARDEST:g}, the torque at right angles to the force",
            )
        at = np.cross(f, moment) / size if size > 0.0 else np.zeros(3)
        rotation = robot.data.body(link).xmat.reshape(3, 3)
        self.add_push(time, during, link, (rotation.T @ at).tolist(), f.tolist())

    def come_to(self, now: float) -> None:
        """Apply what is due at time ``now``, s."""
        while self._loads and self._loads[0][0] <= now + _SOON:
            self._robot.set_load(self._loads.pop(0)[1])
        if self._pushed_until is not None and now >= self._pushed_until - _SOON:
            self._robot.release_push()
            self._pushed_until = None
        while self._pushes and self._pushes[0][0] <= now + _SOON:
            time, during, link, at, force = self._pushes.pop(0)
            self._robot.push(link, at, force)
            self._pushed_until = max(time, now) + during
        for wrench in self._pulls:
            self._robot.pull(wrench.hand, *at_time(wrench, now))
