"""The simulated robot as the weighing wants it: in one process, with the very loop and planner of a rehearsal."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_motion import ArmState, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.weighing.record import Record

_STANDING = 3.0


class SimulatedWeighing:
    """A simulated robot that stands and can be told to move; see :class:`ballbal_ros.weighing.procedure.Robot`."""

    def __init__(self, files: RobotFiles, posture: Array, seed: int = 0, truth: Truth | None = None) -> None:
        """It is let go by its stand at once, at arm ``posture`` [n], with empty hands."""
        self.robot = SimulatedRobot(files.description, files.simulation, posture, (), seed, truth)
        self.loop = BalanceLoop(files.description, files.balance, posture)
        self.loop.supported = True
        self.record = Record(self.loop.period)
        self._schedule = ArmSchedule(files.description, files.compensation)
        self._tail = files.compensation.planner.tail
        self.wait(_STANDING)
        if self.loop.guard.state != BALANCING:
            what = f"the robot does not begin to balance: {self.loop.guard.reason or self.loop.guard.state}"
            raise BallbalError("weigh-in", what, "begin where its mass centre is nearer to above the ball")

    @property
    def time(self) -> float:
        """How long it has run, s."""
        return self.robot.time

    def arms(self) -> Array:
        """Arm positions [n] as measured."""
        return self.loop.senses.arm_position.copy()

    def move(self, path: Callable[[Array], ArmPath]) -> None:
        """Plan, move, and wait for the end of arms and plan."""

        def from_state(state: ArmState) -> ArmPath:
            """The path from where the arms will be."""
            return path(state.position)

        wanted = Wanted(stamp=0.0, duration=path(self.arms()).duration, path=from_state)
        proposal = self._schedule.plan(wanted, self.time, self.arms())
        self._schedule.accept(proposal)
        if proposal.plan is not None:
            self.loop.add_plan(proposal.lean_start, proposal.plan)
        self.robot.command_arms(proposal.path, proposal.arms_start)
        self.record.moves.append((proposal.arms_start, proposal.path))
        self.wait(proposal.end + self._tail - self.time)

    def roll(self, x: float, y: float) -> None:
        """Command a velocity of the ball."""
        self.loop.reference.set_velocity(x, y, 0.0)

    def wait(self, seconds: float) -> None:
        """Go on for so long, and record."""
        robot, loop, record = self.robot, self.loop, self.record
        for _ in range(round(seconds / loop.period)):
            seen = robot.measurement()
            effort = loop.tick(seen)
            if robot.support and loop.guard.state == BALANCING:
                robot.support = loop.supported = False
            assert seen.imu_acceleration is not None
            imu, arms = np.concatenate((seen.imu_rate, seen.imu_acceleration)), loop.senses.arm_position.copy()
            record.add(robot.time, loop.lean, loop.heading, loop.senses.ball, imu, arms)
            robot.step(effort)
            if robot.fell:
                raise BallbalError("weigh-in", f"the robot fell after {robot.time:.1f} s", "look at its trace")
        if not loop.guard.sends and not robot.support:
            raise BallbalError("weigh-in", f"the robot let go: {loop.guard.reason}", "look why, and begin anew")
