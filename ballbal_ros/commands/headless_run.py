"""One run of a story by the whole stack: nodes as processes, over the bus."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import attrs
import numpy as np

from ballbal_ros.commands.bus import Bus
from ballbal_ros.commands.processes import Processes, RunFailed, environment
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.story import Story
from ballbal_ros.nodes.diagnostics import number_of
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.stack import LOOP, RobotFolder, headless_stack, hurried

_SIMULATOR = "simulated_robot"
_PRIORITY = 20
_SHOW_EVERY = 0.2
_KINEMATICS_RATE = 50.0
_LAST_WORDS = 2.0
# Share of a run by the wall clock for which simulated time may stand still before it is worth a word.
_HELD = 0.01


@attrs.frozen(eq=False, kw_only=True)
class HeadlessSetup:
    """What all runs of one call share. ``rate``: of the loop, Hz; ``timeout``: wall time for which anybody may stay
    silent, s; ``learned``: file of what rehearsals have taught.
    """

    folder: RobotFolder
    description: RobotDescription
    story: Story
    story_file: Path
    timeline: Timeline
    plan: LeanPlan | None
    truth: tuple[str, ...]
    clock: str
    namespace: str
    domain: int
    rate: float
    timeout: float
    learned: Path | None = None


@attrs.frozen
class Glimpse:
    """What a run looks like now: simulated time (s), distance of the true ball from where it was meant to be (mm), the
    guard's state.
    """

    time: float
    travel: float
    state: str


class HeadlessRun:
    """One run of a story with one kind of compensation and one seed."""

    def __init__(self, setup: HeadlessSetup, kind: str, seed: int) -> None:
        self.setup, self.kind, self.seed = setup, kind, seed
        self.moves = kind != "still" and setup.story.planned
        self._origin: tuple[float, float] | None = None
        self.notes: list[str] = []

    def run(self, show: Callable[[Glimpse], None]) -> RunResult:
        """Start all, run to the end, end all; raises :class:`RunFailed` in one line.

        A node that ends and may be started anew is; ``notes`` then say so, and what became of the plan.
        """
        with Processes() as processes:
            try:
                result = self._run(processes, show)
            except RunFailed as error:
                raise RunFailed("; ".join([str(error), *self._restarts(processes)])) from error
            end = "the plan was finished" if self.moves else "the run went on to its end"
            self.notes += [f"{self.kind}, seed {self.seed}: {line}; {end}" for line in self._restarts(processes)]
            return result

    @staticmethod
    def _restarts(processes: Processes) -> list[str]:
        return [f"{name} ended with {how} and was started anew" for name, how in processes.restarts]

    def _run(self, processes: Processes, show: Callable[[Glimpse], None]) -> RunResult:
        setup = self.setup
        self._start(processes)
        with Bus(setup.domain, setup.namespace, processes, setup.timeout) as bus:
            show(Glimpse(0.0, 0.0, "starting"))
            bus.wait_for_nodes()
            bus.send_start(setup.story)
            bus.bring_up()
            self._check_start(bus)
            if self.moves:
                bus.send_story(setup.story, setup.timeline, setup.description.joint_names)
                bus.wait_for_report()
                if setup.learned is not None and self.kind == "planned":
                    self.notes.append(f"planned, seed {self.seed}: learnt before: {bus.reported('learned')}")
            began, from_time = time.monotonic(), bus.place()[0]
            self._follow(processes, bus, show)
            took = time.monotonic() - began
            truth = self._whole(bus)
            self._note_held(bus.peaks)
            if processes.restarts and bus.state != "balancing":
                raise RunFailed(f"the plan was not finished: balance ended {bus.state}")
            return self._result(truth, bus.peaks, (truth[-1, 0] - from_time) / max(took, 1e-9))

    def _check_start(self, bus: Bus) -> None:
        """What is told by a stamp must not be over before it balances: ticks that come late keep it from engaging."""
        begins, balances = self.setup.timeline.count_from, bus.balances_from
        if balances > begins:
            why = f"it balances only from {balances:.1f} s on, and the run begins at {begins:g} s"
            raise RunFailed(f"{why}; before, it said: {bus.waited}")

    def _note_held(self, told: dict[str, str]) -> None:
        """Where the machine was too busy for the simulated robot, its time stood still: a real one's does not."""
        held, longest = (number_of(told.get(key, "")) for key in ("time held s", "time held at once ms"))
        if held > _HELD * self.setup.timeline.end:
            busy = "this machine is too busy to say how a robot's own computer would do"
            what = f"simulated time stood still for {held:.1f} s in all, {longest:.0f} ms at once"
            self.notes.append(f"{self.kind}, seed {self.seed}: {what}: {busy}")

    def _start(self, processes: Processes) -> None:
        setup, timeline = self.setup, self.setup.timeline
        way = self.kind if self.kind in ("quasi_static", "none") else "planned"
        simulated = {
            "seed": self.seed,
            "duration": timeline.end,
            "answer_timeout": setup.timeout,
            "wait_for_plan": self.moves,
            "plan": str(setup.story_file.resolve()),
            "plan_start": timeline.story if self.kind != "still" else -1.0,
            "count_from": timeline.count_from,
        }
        if setup.truth:
            simulated["truth"] = list(setup.truth)
        processes.may_end = _SIMULATOR
        priority = _PRIORITY if setup.clock == "real_time" else 0
        for node in hurried(headless_stack(setup.folder, setup.clock, setup.namespace, simulated), priority):
            if node.executable == "balance":
                node = node.with_parameters(compensation=way)
            elif node.executable == "arm_compensation":
                node = node.with_parameters(compensation=way, planner__lead_in=timeline.lead_in)
                if setup.learned is not None:
                    node = node.with_parameters(learned=str(setup.learned.resolve()))
            elif node.executable == "whole_body_kinematics":
                node = node.with_parameters(rate=_KINEMATICS_RATE)
            # On two cores the loop, from simulated robot to balance and back, goes before all that only listens.
            first = node.executable in LOOP
            words = node.command(setup.namespace)
            processes.start(node.executable, words, environment(setup.domain), first, node.respawn)

    def _follow(self, processes: Processes, bus: Bus, show: Callable[[Glimpse], None]) -> None:
        """Until all is recorded: every tick of the run, and what the simulated robot says at its end."""
        shown, ended_at = 0.0, np.inf
        silent_since, heard = time.monotonic(), 0
        while len(bus.records) <= self._wanted or bus.peaks.get("ended") != "True":
            bus.turn()
            now = time.monotonic()
            ended_at = min(ended_at, now if processes.ended(_SIMULATOR) else np.inf)
            if now - ended_at > _LAST_WORDS:
                break
            if len(bus.records) != heard:
                silent_since, heard = now, len(bus.records)
            elif now - silent_since > 2.0 * self.setup.timeout:
                raise RunFailed(f"ground_truth: nothing for {now - silent_since:.0f} s")
            if now - shown >= _SHOW_EVERY:
                shown = now
                at, x, y = bus.place()
                show(Glimpse(at, self._travel(at, x, y), bus.state))

    @property
    def _wanted(self) -> int:
        return round(self.setup.timeline.end * self.setup.rate)

    def _whole(self, bus: Bus) -> Array:
        """The record, which must be complete."""
        truth, wanted = bus.truth(), self._wanted + 1
        if len(truth) != wanted or np.abs(np.diff(truth[:, 0]) * self.setup.rate - 1.0).max() > 1e-3:
            raise RunFailed(f"ground_truth: {len(truth)} of {wanted} instants came: the bus lost some")
        return truth

    def _meant(self, times: Array) -> Array:
        """Where the ball is meant to be [N, 2] from where it was at the run's start, m."""
        plan = self.setup.plan
        if self.kind != "planned" or plan is None or self.setup.story.ball is None:
            return np.zeros((len(times), 2))
        since = times - self.setup.timeline.lean
        return np.stack([np.interp(since, plan.times, column) for column in plan.ball.T], axis=1)

    def _travel(self, at: float, x: float, y: float) -> float:
        if at < self.setup.timeline.count_from:
            return 0.0
        if self._origin is None:
            self._origin = x, y
        meant = self._meant(np.array([at]))[0]
        return 1e3 * float(np.hypot(x - self._origin[0] - meant[0], y - self._origin[1] - meant[1]))

    def _result(self, truth: Array, peaks: dict[str, str], factor: float) -> RunResult:
        counted = truth[truth[:, 0] >= self.setup.timeline.count_from - 1e-6]
        away = counted[:, 1:3] - counted[0, 1:3] - self._meant(counted[:, 0])
        travel = 1e3 * np.hypot(*away.T)
        return RunResult(
            compensation=self.kind,
            seed=self.seed,
            fell=peaks.get("fell") == "True",
            ball_travel_peak_mm=float(travel.max()),
            ball_travel_end_mm=float(travel[-1]),
            lean_peak_deg=float(np.degrees(np.hypot(*counted[:, 3:5].T).max())),
            drive_torque_peak_nm=float(peaks["drive torque peak"]),
            friction_use_peak=float(peaks["friction use peak"]),
            duration_s=float(truth[-1, 0]),
            real_time_factor=float(factor),
        )
