"""Plan files: their steps laid on a timeline of arm motion, loads, pushes, pulls and ball moves."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import attrs
import numpy as np

from ballbal_ros.errors import BallbalError, PlanError, nearest, shown
from ballbal_ros.motion.plan_request import BallMotion, HandWrench
from ballbal_ros.motion.pulls import Pull, hand_wrenches
from ballbal_ros.motion.spline import LONGEST, ArmPath, check_path
from ballbal_ros.motion.story_steps import (
    LoadStep,
    Move,
    PullStep,
    PushStep,
    RollStep,
    Start,
    Wait,
    read_start,
    read_step,
)
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.yaml_files import read_yaml

_ROLL_SPEED = 0.5
_SHORTEST_ROLL = 2.0
_TURN_SHARE = 0.9


@attrs.frozen
class LoadChange:
    """At ``time`` s the named hand's load becomes ``load``."""

    time: float
    load: Load
    announced: bool


@attrs.frozen
class Push:
    """From ``time`` on, for ``during`` s, a force [3] N in odom axes at a point [3] m of a link."""

    time: float
    during: float
    link: str
    at: tuple[float, float, float]
    force: tuple[float, float, float]


@attrs.frozen(eq=False)
class Story:
    """A plan file on a timeline, s from its beginning.

    ``arms`` begins at ``arms_start``, the first thing that is to be planned for.
    """

    name: str
    posture: Array
    start_loads: tuple[Load, ...]
    arms: ArmPath
    arms_start: float
    load_changes: tuple[LoadChange, ...]
    pushes: tuple[Push, ...]
    pulls: tuple[Pull, ...]
    ball: BallMotion | None
    duration: float

    @property
    def planned(self) -> bool:
        """Whether there is anything to plan for (a move, an announced load or pull, a ball move)."""
        return self.arms_start < self.duration

    @property
    def announced(self) -> tuple[tuple[float, Load], ...]:
        """The load changes that the robot is told of, timed from ``arms_start``."""
        return tuple((c.time - self.arms_start, c.load) for c in self.load_changes if c.announced)

    @property
    def wrenches(self) -> tuple[HandWrench, ...]:
        """What the robot is told that the world will exert on its hands, timed from ``arms_start``."""
        return hand_wrenches((pull for pull in self.pulls if pull.announced), -self.arms_start)


def read_story(path: Path, description: RobotDescription) -> Story:
    """Read a plan file for a robot; raises :class:`PlanError` in one line that names file, step and key."""
    where = str(path)
    document = read_yaml(Path(path))
    if not isinstance(document, Mapping):
        raise PlanError(where, "is no plan", "a plan has name, start and steps")
    for key in document:
        if key not in ("name", "start", "steps"):
            raise PlanError(where, f"unknown key {key}", nearest(str(key), ("name", "start", "steps")))
    steps = document.get("steps")
    if not isinstance(steps, list) or not steps:
        raise PlanError(where, f"steps is {shown(steps)}", "it takes a list of steps, each one verb")
    start = read_start(document.get("start") or {}, where)
    builder = _Builder(description, where, start)
    for number, step in enumerate(steps, start=1):
        builder.add(read_step(step, where, f"step {number}"), f"{where} step {number}")
    return builder.story(str(document.get("name", Path(path).stem)))


class _Builder:
    """Lays the steps on the timeline."""

    def __init__(self, description: RobotDescription, where: str, start: Start) -> None:
        self.description, self.where = description, where
        self.now = 0.0
        self.arm = np.zeros(description.joint_count)
        for name, value in start.posture.items():
            self.arm[description.joint_index(name, f"{where} start.posture")] = value
        self.posture = self.arm.copy()
        self.start_loads = tuple(self._load(step, f"{where} start.loads") for step in start.loads)
        self.knots: list[tuple[float, Array]] = []
        self.changes: list[LoadChange] = []
        self.pushes: list[Push] = []
        self.pulls: list[Pull] = []
        self.rolls: list[tuple[float, float, RollStep]] = []

    def _load(self, step: LoadStep, where: str) -> Load:
        hands = self.description.parameters.hands
        self._check_hand(step.hand, where)
        load = Load(step.hand, step.mass, step.center)
        try:
            load.check(where, hands.load_limit)
        except BallbalError as error:
            raise PlanError(error.where, error.what, error.remedy) from error
        return load

    def _check_hand(self, hand: str, where: str) -> None:
        hands = self.description.parameters.hands.links
        if hand not in hands:
            raise PlanError(where, f"unknown hand {hand}", nearest(hand, hands))

    def add(self, step: object, where: str) -> None:
        """Put one step at the present end of the timeline."""
        if isinstance(step, Wait):
            self.now += step.wait
        elif isinstance(step, Move):
            self.knots.append((self.now, self.arm.copy()))
            for name, value in step.move.items():
                self.arm[self.description.joint_index(name, where)] = value
            self.now += step.during
            self.knots.append((self.now, self.arm.copy()))
        elif isinstance(step, LoadStep):
            self.changes.append(LoadChange(self.now, self._load(step, where), step.announced))
        elif isinstance(step, PushStep):
            self._check_link(step.link, where)
            x, y, z = step.at
            self.pushes.append(
                Push(self.now, step.during, step.link, (x, y, z), (step.force[0], step.force[1], step.force[2]))
            )
            self.now += step.during
        elif isinstance(step, PullStep):
            self._check_hand(step.hand, where)
            (x, y, z), (a, b, c) = step.force, step.moment
            self.pulls.append(Pull(self.now, step.during, step.hand, (x, y, z), (a, b, c), step.announced))
            self.now += step.during
        elif isinstance(step, RollStep):
            before = self.rolls[-1][2] if self.rolls else RollStep()
            far = float(np.hypot(step.x - before.x, step.y - before.y))
            turning = _TURN_SHARE * self.description.parameters.limits.heading_rate
            slowest = max(far / _ROLL_SPEED, abs(step.heading - before.heading) / turning)
            during = step.during or max(_SHORTEST_ROLL, 1.875 * slowest)
            self.rolls.append((self.now, self.now + during, step))
            self.now += during

    def _check_link(self, link: str, where: str) -> None:
        model = self.description.model
        if not model.existBodyName(link):
            names = [frame.name for frame in model.frames if model.existBodyName(frame.name)]
            raise PlanError(where, f"unknown link {link}", nearest(link, names))

    def story(self, name: str) -> Story:
        """The timeline as a whole, its arm motion checked against the joints' limits."""
        if self.now > LONGEST:
            raise PlanError(self.where, f"lasts {self.now:g} s", f"it takes at most {LONGEST:g} s: make two of it")
        begins = (
            [time for time, _ in self.knots]
            + [c.time for c in self.changes if c.announced]
            + [pull.time for pull in self.pulls if pull.announced]
            + [roll[0] for roll in self.rolls]
        )
        first = min(begins, default=self.now)
        arms = self._arms(first)
        outside = (self.posture < self.description.position_low - 1e-9) | (
            self.posture > self.description.position_high + 1e-9
        )
        if outside.any():
            joint = int(np.argmax(outside))
            raise PlanError(
                f"{self.where} start.posture",
                f"{self.description.joint_names[joint]} is {self.posture[joint]:g} rad",
                f"its limits are {self.description.position_low[joint]:g} to {self.description.position_high[joint]:g}",
            )
        check_path(arms, self.description, self.where)
        return Story(
            name=name,
            posture=read_only(self.posture.copy()),
            start_loads=self.start_loads,
            arms=arms,
            arms_start=first,
            load_changes=tuple(self.changes),
            pushes=tuple(self.pushes),
            pulls=tuple(self.pulls),
            ball=self._ball(first),
            duration=self.now,
        )

    def _arms(self, first: float) -> ArmPath:
        if not self.knots:
            return ArmPath.still(self.posture)
        times, points = [0.0], [self.posture]
        for time, point in self.knots:
            if time - first > times[-1] + 1e-9:
                times.append(time - first)
                points.append(point)
        if len(times) < 2:
            raise PlanError(self.where, "moves the arms in no time", "give a move a time to be made in")
        both = np.array(points)
        return ArmPath.through(np.array(times), both, 0.0 * both, 0.0 * both)

    def _ball(self, first: float) -> BallMotion | None:
        if not self.rolls:
            return None
        times = np.arange(0.0, self.now - first + 0.01, 0.01)
        position, rate, acceleration = (np.zeros((len(times), 3)) for _ in range(3))
        place = np.zeros(3)
        for begin, end, step in self.rolls:
            goal = np.array([step.x, step.y, step.heading])
            span = end - begin
            s = np.clip((times + first - begin) / span, 0.0, 1.0)[:, None]
            position += (goal - place) * s**3 * (10 - 15 * s + 6 * s**2)
            rate += (goal - place) * 30 * s**2 * (1 - s) ** 2 / span
            acceleration += (goal - place) * 60 * s * (1 - s) * (1 - 2 * s) / span**2
            place = goal
        return BallMotion(times, position, rate, acceleration)
