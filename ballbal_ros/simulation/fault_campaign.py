"""The fault campaign: many seeded trials, shared out among processes."""

from __future__ import annotations

import multiprocessing
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from functools import cache

import attrs

from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.fault_kinds import KINDS, drawn
from ballbal_ros.simulation.fault_trial import FaultTrial, Trial
from ballbal_ros.simulation.rehearsal import RobotFiles, plan_story
from ballbal_ros.simulation.timeline import RUN_START, Timeline
from ballbal_ros.simulation.wheels import with_wheels

_WORKERS = 2
_SCENE: list[_Scene] = []


@attrs.frozen(eq=False)
class _Scene:
    """What all trials of a campaign share: robots by their number of wheels, the story, its plans, when faults may
    begin.
    """

    files: dict[int, RobotFiles]
    story: Story
    timeline: Timeline
    seed: int

    @cache  # noqa: B019  one scene lives as long as its process
    def plan(self, wheels: int) -> LeanPlan | None:
        """The story's plan for the robot with so many wheels."""
        return plan_story(self.files[wheels], self.story, self.timeline) if self.story.planned else None

    @cache  # noqa: B019
    def schedule(self, wheels: int) -> GainSchedule:
        """The gains for the robot with so many wheels: no fault changes them."""
        files = self.files[wheels]
        body = WholeBody(files.description, self.story.start_loads)
        return GainSchedule(files.description, files.balance, body.posture(self.story.posture))

    def trial(self, task: tuple[str, int, int]) -> Trial:
        """Run one trial: kind, wheels, number."""
        kind, wheels, number = task
        files = self.files[wheels]
        if kind.startswith("orientation"):
            files = attrs.evolve(files, balance=attrs.evolve(files.balance, attitude="imu"))
        begin = (max(RUN_START + 0.2, self.timeline.lean), self.timeline.arms + self.story.arms.duration)
        fault = drawn(kind, number, self.seed, begin)
        # Not by the number: kinds come in turn, and each would always have one, or never.
        stand = fault.seed % 2 == 1
        plan, schedule = self.plan(wheels), self.schedule(wheels)
        return FaultTrial(files, self.story, self.timeline, plan, fault, number, stand, schedule).run()


def _begin(scene: _Scene) -> None:
    _SCENE[:] = [scene]


def _run(task: tuple[str, int, int]) -> Trial:
    return _SCENE[0].trial(task)


def asked_kinds(asked: Sequence[str]) -> tuple[str, ...]:
    """The kinds asked for, all without any; raises :class:`BallbalError` for one that is not there."""
    for kind in asked:
        if kind not in KINDS:
            raise BallbalError("--kinds", f"unknown kind {kind!r}", nearest(kind, KINDS))
    return tuple(asked) or tuple(KINDS)


def run_campaign(
    files: RobotFiles,
    story: Story,
    trials: int,
    seed: int = 0,
    kinds: Sequence[str] = (),
    wheels: Sequence[int] = (3,),
    workers: int = _WORKERS,
) -> Iterator[Trial]:
    """Run trials and yield each as it is done, in order: the kinds in turn, and each round with the next number of
    wheels.

    ``files`` are the robot's; it is given as many wheels as ``wheels`` says. The same arguments give the same trials.
    """
    names = asked_kinds(kinds)
    robots = {n: attrs.evolve(files, description=with_wheels(files.description, n)) for n in wheels}
    scene = _Scene(robots, story, Timeline.of(story, files.compensation), seed)
    tasks = [(names[i % len(names)], wheels[(i // len(names)) % len(wheels)], i) for i in range(trials)]
    if workers <= 1:
        _begin(scene)
        yield from map(_run, tasks)
        return
    # Forked, as a robot's model can't be handed over by pickling it.
    context = multiprocessing.get_context("fork")
    _begin(scene)
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        yield from pool.map(_run, tasks, chunksize=1)
