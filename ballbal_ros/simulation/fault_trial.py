"""One trial of the fault campaign: a rehearsal during which something fails, and what came of it."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.balance.guard import BALANCING, RELEASED, STATES, STOPPING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation import fault_kinds
from ballbal_ros.simulation.fault_kinds import KINDS
from ballbal_ros.simulation.faults import Fault, FaultyRobot
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.timeline import RUN_START, Timeline

_AFTERWARDS = 2.5
_HELD_AFTER = 1.0
_MOST_LASTING = 2.0


@attrs.frozen
class Trial:
    """What a trial found. ``react``: s from the fault's start until the guard did something, or else until anything
    was noticed; None where nothing was. ``wrong_commands``: how many were not finite, beyond a limit, or sent in a
    state that may not. ``torque_step``: greatest change of the level torque in a tick, N m. ``why`` says what is not
    as the table has it.
    """

    kind: str
    wheels: int
    number: int
    fault: Fault
    outcome: str
    state: str
    reason: str
    ball_travel_mm: float
    worst_effort_nm: float
    torque_step_nm: float
    react_s: float | None
    wrong_commands: int
    why: str

    @property
    def ok(self) -> bool:
        """Whether it ended as the table says."""
        return not self.why


class _Commands:
    """Looks at every command that is sent."""

    def __init__(self, files: RobotFiles) -> None:
        self._most = files.description.drive.effort_limit * (1.0 + 1e-9)
        limits = files.balance.limits
        self._level = min(limits.torque, files.description.parameters.limits.drive_torque) * (1.0 + 1e-9)
        self._step = limits.torque_rate * files.balance.loop.period * (1.0 + 1e-6)
        self._before: Array = np.zeros(3)
        self._lost = 0
        self.wrong, self.worst, self.step = 0, 0.0, 0.0

    def see(self, effort: Array, loop: BalanceLoop) -> None:
        """Take a command [n], N m, and the loop that made it."""
        size = np.abs(effort)
        torque = loop.torque.copy()
        sends = STATES[loop.guard.state].sends
        step = math.hypot(*(torque - self._before)[:2].tolist())
        fine = bool(np.isfinite(effort).all()) and bool((size <= self._most).all()) and (sends or not effort.any())
        # What an actuator that is given up had been sent falls away at once.
        given_up, self._lost = len(loop.output.lost) != self._lost, len(loop.output.lost)
        fine = fine and math.hypot(*torque[:2].tolist()) <= self._level
        fine = fine and (not sends or given_up or step <= self._step)
        self.wrong += not fine
        self.worst = max(self.worst, float(size.max()))
        self.step = max(self.step, step if sends else 0.0)
        self._before = torque


class FaultTrial:
    """Runs one trial: ``story`` with its ``plan``; the arms move while it fails. With ``stand`` one takes hold 1 s
    after a stop.
    """

    def __init__(
        self,
        files: RobotFiles,
        story: Story,
        timeline: Timeline,
        plan: LeanPlan | None,
        fault: Fault,
        number: int,
        stand: bool,
        schedule: GainSchedule | None = None,
    ) -> None:
        self._rehearsal = Rehearsal(files, story, "planned", timeline, plan, number, schedule=schedule)
        self._files, self._fault, self._number, self._stand = files, fault, number, stand
        period = self._rehearsal.loop.period
        self._between = FaultyRobot(files.description, fault, period)
        self._ticks = round((fault.start + min(fault.duration, _MOST_LASTING) + _AFTERWARDS) / period)
        self._noticed: float | None = None
        self._done: float | None = None

    def run(self) -> Trial:
        """Run it."""
        rehearsal, between, fault = self._rehearsal, self._between, self._fault
        robot, loop = rehearsal.robot, rehearsal.loop
        commands = _Commands(self._files)
        effort: Array = np.zeros(len(self._files.description.drive.names))
        station: Array | None = None
        travel, unset = 0.0, True
        for _ in range(self._ticks):
            now = robot.time
            if unset and fault.kind == "battery sags" and fault.on(now):
                loop.set_drive_scale(fault.size)
                unset = False
            told = between.measure(robot.measurement())
            if told is not None:
                effort = rehearsal.answer(told)
                commands.see(effort, loop)
            self._follow(robot, loop)
            if now >= RUN_START:
                here = robot.ball_position[:2]
                station = here if station is None else station
                travel = max(travel, math.hypot(*(here - station).tolist()))
            robot.step(between.effort(effort, now))
            if robot.fell:
                break
        return self._verdict(robot, loop, commands, 1e3 * travel)

    def _follow(self, robot: SimulatedRobot, loop: BalanceLoop) -> None:
        """Note when something is done about the fault, and let the stand take hold of a robot that has stopped."""
        since = robot.time - self._fault.start
        if since < 0.0:
            return
        if self._noticed is None and loop.watch.counts:
            self._noticed = since
        if self._done is None and loop.guard.state != BALANCING:
            self._done = since
        stopped = loop.guard.state == STOPPING and self._done is not None
        if self._stand and stopped and not robot.support and since > (self._done or 0.0) + _HELD_AFTER:
            robot.support = loop.supported = True

    def _outcome(self, robot: SimulatedRobot, loop: BalanceLoop) -> str:
        state = loop.guard.state
        if robot.fell or state not in (BALANCING, STOPPING, RELEASED):
            return fault_kinds.FELL
        if state == BALANCING:
            return fault_kinds.HELD if loop.watch.counts else fault_kinds.UNNOTICED
        return fault_kinds.STOPPED if state == STOPPING else fault_kinds.RELEASED

    def _verdict(self, robot: SimulatedRobot, loop: BalanceLoop, commands: _Commands, travel_mm: float) -> Trial:
        fault, kind = self._fault, KINDS[self._fault.kind]
        outcome, latest = self._outcome(robot, loop), kind.latest(fault)
        wheels = len(self._files.description.drive.names)
        wanted = kind.outcomes(fault, wheels)
        why = []
        if outcome not in wanted:
            why.append(f"{outcome}, where the table says {' or '.join(wanted)}")
        if latest is not None and (self._done is None or self._done > latest):
            why.append(f"nothing done within {latest:.2f} s")
        if commands.wrong:
            why.append(f"{commands.wrong} commands that may not be sent")
        return Trial(
            kind=fault.kind,
            wheels=wheels,
            number=self._number,
            fault=fault,
            outcome=outcome,
            state=loop.guard.state,
            reason=loop.guard.reason,
            ball_travel_mm=travel_mm,
            worst_effort_nm=commands.worst,
            torque_step_nm=commands.step,
            react_s=self._noticed if self._done is None else self._done,
            wrong_commands=commands.wrong,
            why="; ".join(why),
        )
