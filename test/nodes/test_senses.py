"""By the wall clock the loop is told how old each sense is: one that falls silent is answered as the table says."""

from __future__ import annotations

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.balance.acceptance import check_plan
from ballbal_ros.balance.answers import ARMS, DRIVE
from ballbal_ros.balance.guard import BALANCING, STANDBY
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.nodes.senses import Senses
from ballbal_ros.nodes.wire_writers import ImuWriter, JointStateWriter
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.rehearsal import plan_story
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, story


class Stack:
    """A simulated robot and its loop; what the sensors say goes through messages, but for topics that are `silent`."""

    def __init__(self) -> None:
        description, told = files().description, story("reach")
        self.robot = SimulatedRobot(description, files().simulation, told.posture, told.start_loads)
        self.loop = BalanceLoop(description, files().balance, told.posture, told.start_loads)
        self.loop.supported = True
        self._senses = Senses(description, files().balance, False, self._tick, None)  # type: ignore[arg-type]
        self._arms = JointStateWriter(description.joint_names, position=True)
        self._drive = JointStateWriter(description.drive.names, position=True)
        self._imu = ImuWriter(description.parameters.imu.frame, True)
        self._effort: Array = np.zeros(len(description.drive.names))
        self.silent: tuple[str, ...] = ()
        self.arms_ahead = 0.0

    def _tick(self, _: int) -> None:
        self._effort = self.loop.tick(self._senses.measurement)
        if self.robot.support and self.loop.guard.state == BALANCING:
            self.robot.support = self.loop.supported = False

    def go_on(self, span: float) -> None:
        """So many seconds, tick by tick."""
        for _ in range(round(span / self.loop.period)):
            seen, ns, values = self.robot.measurement(), round(1e9 * self.robot.time), self._imu.values
            self._arms.position[:], self._drive.position[:] = seen.arm_position, seen.drive_angle
            assert seen.imu_quat_xyzw is not None
            values[0:4], values[13:16], values[25:28] = seen.imu_quat_xyzw, seen.imu_rate, seen.imu_acceleration
            if ARMS not in self.silent:
                self._senses.on_arms(self._arms.serialised(ns + round(1e9 * self.arms_ahead)))
            if DRIVE not in self.silent:
                self._senses.on_drive(self._drive.serialised(ns))
            self._senses.on_imu(self._imu.serialised(ns))
            self.robot.step(self._effort)


def plan_from_here(stack: Stack) -> LeanPlan:
    """A lean plan that begins where the robot leans."""
    plan = plan_story(files(), story("reach"), Timeline.of(story("reach"), files().compensation))
    return attrs.evolve(plan, lean=plan.lean - plan.lean[0] + stack.loop.reference.row[:2])


def test_silent_joint_states_are_noticed_and_no_plan_is_taken() -> None:
    """It goes on balancing with the arms where they were; after arms_timeout plans are refused, until they are heard
    again.
    """
    stack = Stack()
    stack.go_on(2.5)
    loop, plan = stack.loop, plan_from_here(stack)
    assert loop.guard.state == BALANCING and loop.senses.arms and loop.watch.quiet
    check_plan(plan, loop.clock.now + 0.1, loop.clock.now, loop)
    stack.silent = (ARMS,)
    stack.go_on(files().balance.arms_timeout + 0.02)
    assert not loop.senses.arms and loop.watch.troubles(loop.clock.now)[ARMS].startswith("silent")
    with pytest.raises(PlanRefused, match="came while joint_states are 0.22 s old"):
        check_plan(plan, loop.clock.now + 0.1, loop.clock.now, loop)
    stack.silent = ()
    stack.go_on(0.05)
    assert loop.guard.state == BALANCING and loop.senses.arms and loop.watch.quiet
    check_plan(plan, loop.clock.now + 0.1, loop.clock.now, loop)


def test_it_does_not_engage_without_arm_data() -> None:
    """Joint states that fell silent while it stood on its stand keep torque away, and the reason says so."""
    stack = Stack()
    stack.go_on(0.5)
    stack.silent = (ARMS,)
    stack.go_on(2.0)
    assert stack.loop.guard.state == STANDBY and stack.loop.guard.reason == "no arm data that can be used"


def test_a_silent_drive_is_told_as_silent() -> None:
    """After drive_timeout the loop coasts, and diagnostics say silent; heard again, it goes on."""
    stack = Stack()
    stack.go_on(2.5)
    stack.silent = (DRIVE,)
    stack.go_on(files().balance.drive_timeout + 0.03)
    loop = stack.loop
    assert not loop.senses.drive and loop.watch.troubles(loop.clock.now)[DRIVE].startswith("silent")
    stack.silent = ()
    stack.go_on(0.5)
    assert loop.guard.state == BALANCING and loop.senses.drive and loop.watch.quiet


def test_joint_states_of_a_clock_far_ahead_make_nothing_look_old() -> None:
    """One message from the year 2038 does not hide those that follow."""
    stack = Stack()
    stack.arms_ahead = 2.0e9
    stack.go_on(0.01)
    stack.arms_ahead = 0.0
    stack.go_on(2.5)
    assert stack.loop.guard.state == BALANCING and stack.loop.senses.arms
    assert stack.loop.senses.arms_age(stack.loop.clock.now) == 0.0
