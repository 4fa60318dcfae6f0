"""A rehearsal: a story run in-process through the very same planner, estimator and loop as the nodes, against the
simulated robot.
"""

from __future__ import annotations

import math
import time
from collections.abc import Iterable

import attrs
import numpy as np

from ballbal_ros.balance.clock import is_looked_at
from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.motion.repetition import Learned, plan_with_learned
from ballbal_ros.motion.spline import FollowedPath
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.happenings import Happenings
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.weighing.standing import EVERY, StandingWatch


@attrs.frozen(kw_only=True)
class RobotFiles:
    """The four files of a robot's folder, read and checked."""

    description: RobotDescription
    balance: BalanceParameters
    compensation: CompensationParameters
    simulation: SimulationParameters


@attrs.frozen(eq=False)
class Trace:
    """What a run looked like, a row every tick from the run's start: time (s), true ball x, y and heading-frame lean,
    torque, arm positions.
    """

    time: Array
    ball: Array
    lean: Array
    torque: Array
    arms: Array
    friction: Array


def request_of(files: RobotFiles, story: Story, timeline: Timeline) -> PlanRequest:
    """What the planner is asked for a story: servo lag and announced loads included."""
    arm = files.description.parameters.arm
    lead_in = timeline.lead_in
    ball = story.ball
    if ball is not None:
        ball = attrs.evolve(ball, times=ball.times + lead_in)
    return PlanRequest(
        arms=FollowedPath.of(story.arms, arm.servo, files.description.servo_bandwidth),
        lead_in=lead_in,
        loads=[(when + lead_in, load) for when, load in story.announced],
        ball=ball,
        wrenches=[attrs.evolve(wrench, times=wrench.times + lead_in) for wrench in story.wrenches],
    )


def plan_story(
    files: RobotFiles,
    story: Story,
    timeline: Timeline,
    loads: Iterable[Load] | None = None,
    learned: Learned | None = None,
) -> LeanPlan:
    """The lean plan for a story; refused where it goes beyond the limits. ``loads``: what the hands hold at its start,
    where that is not what the story says; ``learned``: what runs before have taught, which must fit.
    """
    body = WholeBody(files.description, story.start_loads if loads is None else loads)
    request = request_of(files, story, timeline)
    plan = plan_lean(body, request, files.compensation)
    if learned is not None:
        said = WholeBody(files.description, story.start_loads)
        plan = plan_with_learned(learned, said, body, request, plan, files.compensation)
    plan.refuse_beyond_limits(story.name)
    return plan


class Rehearsal:
    """One run of a story. ``kind`` is one of :data:`~ballbal_ros.simulation.run_result.KINDS`; ``plan`` is needed for
    ``planned``.
    """

    def __init__(
        self,
        files: RobotFiles,
        story: Story,
        kind: str,
        timeline: Timeline,
        plan: LeanPlan | None = None,
        seed: int = 0,
        truth: Truth | None = None,
        schedule: GainSchedule | None = None,
        learned: Learned | None = None,
    ) -> None:
        """``schedule``: as :class:`BalanceLoop` takes it. ``learned``: what ``plan`` was made with."""
        self.kind, self.seed, self.timeline, self.story = kind, seed, timeline, story
        self.robot = SimulatedRobot(files.description, files.simulation, story.posture, story.start_loads, seed, truth)
        way = kind if kind in ("quasi_static", "none") else "planned"
        self.loop = BalanceLoop(
            files.description, attrs.evolve(files.balance, compensation=way), story.posture, story.start_loads, schedule
        )
        self.loop.supported = True
        self._period_ns = round(1e9 * self.loop.period)
        self.plan = plan if kind == "planned" else None
        self._meant: Array | None = None
        self._files, self._planning = files, timeline.lean - files.compensation.planner.allowance
        self.watch = StandingWatch(self.loop)
        self._look_every = max(1, round(EVERY / self.loop.period))
        self._ticks, self._believes_other = 0, False
        self._learned = learned
        if self.plan is not None and story.ball is not None:
            self._meant = self.plan.table(self.loop.period)[:, 4:6]
        self._happenings = Happenings(self.robot)
        if kind != "still":
            self.robot.command_arms(story.arms, timeline.arms)
            self._happenings.add_story(story, timeline.story)
            for change in story.load_changes:
                if change.announced:
                    self.loop.set_load(change.load, change.time + timeline.story)

    def _happen(self, now: float) -> None:
        """What is due at ``now``, s."""
        self._happenings.come_to(now)

    def answer(self, measured: Measurement | None = None) -> Array:
        """One tick of the loop, after what happens then: its efforts, which the robot has still to step with.

        ``measured``: what comes to the loop in place of what the robot's sensors say.
        """
        robot, loop = self.robot, self.loop
        self._happen(robot.time)
        if robot.time >= self._planning - 1e-9:
            self._offer_plan()
        effort = loop.tick(measured or robot.measurement())
        if robot.support and loop.guard.state == BALANCING and is_looked_at(round(1e9 * robot.time), self._period_ns):
            robot.support = loop.supported = False
        self._ticks += 1
        if self._ticks % self._look_every == 0:
            found = [load for load in self.watch.see(robot.time) if self._believe(load)]
            self.watch.adopted(found)
            self._believes_other |= bool(found)
        return effort

    def _believe(self, load: Load) -> bool:
        """Take a load that the robot has found out by itself for true, where that can be now."""
        return self.loop.adopt_load(load)

    def _offer_plan(self) -> None:
        """Hand the plan to the loop; made anew where the robot has found other loads than it was told of."""
        self._planning = math.inf
        if self.plan is not None and self._believes_other:
            self.plan = plan_story(self._files, self.story, self.timeline, self.loop.body.loads.values(), self._learned)
        if self.plan is not None:
            self.loop.add_plan(self.timeline.lean, self.plan)

    def step(self) -> None:
        """One tick of loop and robot together."""
        self.robot.step(self.answer())

    def run(self, trace: bool = False) -> tuple[RunResult, Trace | None]:
        """Run to the end, or until it falls; with ``trace`` keep what it looked like."""
        robot, loop = self.robot, self.loop
        ticks = int(round(self.timeline.end / loop.period))
        first = int(round(self.timeline.count_from / loop.period))
        states = np.zeros((max(ticks - first, 1), 6))
        rows: list[tuple[Array, ...]] = []
        began = time.perf_counter()
        count = 0
        for tick in range(ticks):
            effort = self.answer()
            if tick >= first:
                roll, pitch = loop.lean
                x, y, _ = robot.ball_position.tolist()
                states[count] = x, y, roll, pitch, math.hypot(*loop.torque[:2].tolist()), robot.friction_use
                count += 1
                if trace:
                    rows.append((np.array(robot.lean), loop.torque.copy(), robot.arm_position))
            robot.step(effort)
            if robot.fell:
                break
        elapsed = time.perf_counter() - began
        result = self._result(states[:count], robot.time / max(elapsed, 1e-9))
        return result, self._trace(states[:count], rows) if trace else None

    def _result(self, states: Array, real_time_factor: float) -> RunResult:
        if not len(states):
            states = np.full((1, 6), np.nan)
        away = states[:, :2] - states[0, :2]
        if self._meant is not None:
            begin = int(round((self.timeline.lean - self.timeline.count_from) / self.loop.period))
            index = np.clip(np.arange(len(away)) - begin, 0, len(self._meant) - 1)
            away = away - self._meant[index]
        travel = 1e3 * np.hypot(*away.T)
        return RunResult(
            compensation=self.kind,
            seed=self.seed,
            fell=self.robot.fell,
            ball_travel_peak_mm=float(travel.max()),
            ball_travel_end_mm=float(travel[-1]),
            lean_peak_deg=float(np.degrees(np.hypot(states[:, 2], states[:, 3]).max())),
            drive_torque_peak_nm=float(states[:, 4].max()),
            friction_use_peak=float(states[:, 5].max()),
            duration_s=float(self.robot.time),
            real_time_factor=float(real_time_factor),
        )

    def _trace(self, states: Array, rows: list[tuple[Array, ...]]) -> Trace:
        lean, torque, arms = (np.array(column) for column in zip(*rows))
        return Trace(
            np.asarray(self.timeline.count_from + self.loop.period * np.arange(len(states)), float),
            states[:, :2],
            lean,
            torque,
            arms,
            states[:, 5],
        )
