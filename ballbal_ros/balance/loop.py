"""The balance loop: one tick from a measurement to actuator efforts. The node and the rehearsal run this very class."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from ballbal_ros.balance.answers import CLOCK, LEAN, STOP, TRIP
from ballbal_ros.balance.attitude import Attitude
from ballbal_ros.balance.ball_estimate import BallEstimate
from ballbal_ros.balance.changeover import ChangeOver, PreparedChange
from ballbal_ros.balance.clock import LoopClock
from ballbal_ros.balance.coasting import coasting_gain
from ballbal_ros.balance.controller import MEASURED, STATES, Controller, handed_over
from ballbal_ros.balance.guard import ENGAGING, STANDBY, STOPPING, Guard
from ballbal_ros.balance.judge import Judge
from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.output import TorqueOutput
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.readiness import missing
from ballbal_ros.balance.reference import Reference
from ballbal_ros.balance.rescheduling import Rescheduling
from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.balance.senses import Expected, Senses, gyro_noise
from ballbal_ros.balance.watch import Watch
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody

_TURN = 2.0 * math.pi


class BalanceLoop:
    """Keeps the robot on its ball. Not thread-safe; one :meth:`tick` a period, then read what is wanted.

    ``odom`` begins where it engages, with heading zero. What is wrong with an input is answered as the table
    :data:`~ballbal_ros.balance.answer_table.ANSWERS` says; ``watch`` keeps account of it.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: BalanceParameters,
        arm_position: Array,
        loads: Iterable[Load] = (),
        schedule: GainSchedule | None = None,
    ):
        """``schedule``: gains designed before for this robot, posture and parameters; without it, they are now."""
        self.description, self.parameters = description, parameters
        self.body = WholeBody(description, loads)
        self.period = parameters.loop.period
        self.guard, self.watch, self.clock = Guard(parameters), Watch(), LoopClock(self.period)
        posture = self.body.posture(arm_position)
        schedule = schedule or GainSchedule(description, parameters, posture)
        self.controller = Controller(
            schedule.at(posture),
            parameters.limits.trim_rate * self.period,
            parameters.limits.trim_moment,
            coasting_gain(posture, description, parameters),
        )
        self._gains = ChangeOver(schedule, parameters, description.parameters.limits.drive_torque)
        self._change: PreparedChange | None = None
        ahead = parameters.loop.delay + 0.5 * self.period
        self.reference = Reference(self.body, self.period, ahead, parameters.compensation != "none")
        self.senses = Senses(description, parameters, self.watch, arm_position)
        self.output = TorqueOutput(description, parameters, self.body.mass)
        self.judge = Judge(description, parameters, self.watch, self.output, posture)
        self._rescheduling = Rescheduling(self.body, self._gains, self.controller, self.judge)
        self.supported = False
        self.held_back = ""
        self._load_changes: list[tuple[float, Load]] = []
        self._deviation = np.zeros(MEASURED)
        self._expected = Expected()
        self.torque = np.zeros(3)

    @property
    def attitude(self) -> Attitude:
        """Lean, heading and rates as measured."""
        return self.senses.attitude

    @property
    def lean(self) -> tuple[float, float]:
        """Measured (roll, pitch), rad."""
        return self.senses.lean

    @property
    def heading(self) -> float:
        """Measured heading in ``odom``, rad."""
        return self.senses.heading

    @property
    def outside_moment(self) -> tuple[float, float, float]:
        """Estimated outside moment about the contact (roll, pitch) and about z, N m: what the trim leans against."""
        roll, pitch, yaw = self.controller.estimate[STATES:].tolist()
        return roll, pitch, yaw

    @property
    def ball(self) -> BallEstimate:
        """Estimate of ball and heading in ``odom``."""
        return BallEstimate.of(self.senses.ball, self.heading, self.controller.estimate, self.reference.row)

    @property
    def schedule(self) -> GainSchedule:
        """The gains in force: what a change is prepared with, see :func:`ballbal_ros.balance.changeover.prepare`."""
        return self._gains.schedule

    @property
    def change_step(self) -> float:
        """The most that changes of parameters have added to the torque in one tick, N m."""
        return self._gains.largest_step

    def add_plan(self, stamp: float, plan: LeanPlan) -> None:
        """Follow a lean plan from its stamp, s, on."""
        self.reference.add_plan(stamp, plan)

    def set_load(self, load: Load, stamp: float = -math.inf) -> None:
        """Take a load into the mass model, at once or from a stamp to come on, s."""
        self._load_changes = sorted([*self._load_changes, (stamp, load)], key=lambda change: change[0])

    def adopt_load(self, load: Load, ahead: float = math.inf) -> bool:
        """Believe a load that the robot has found out by itself, and stood with all the time: what the trim bore of it
        goes over to the mass model, and moves with the arms from now on, without a jump in torque. False while a plan
        is in force, which was made without it, or begins within ``ahead`` s. One that waits should be replaced.
        """
        arms = self.senses.arm_position
        if self.reference.has_plan_within(self.clock.now, ahead) or not self.reference.follow_arms:
            return False
        before = self.body.posture(arms)
        self.body.set_load(load, "found load")
        after = self.body.posture(arms)
        self.controller.shift(*handed_over(before, after, self.senses.lean))
        return True

    def stop(self, reason: str) -> None:
        """Controlled stop: no new motion, ball to rest, and torque off once a stand holds the robot. A plan in force
        is followed to its end, or until a planned stop takes its place, as the arms go on with it.
        """
        self.guard.stop(reason)
        self.reference.set_velocity(0.0, 0.0, 0.0)

    def reset(self) -> bool:
        """A person has seen to it: from where the guard was latched back to standby, or on from a controlled stop.
        False where there was nothing to reset.
        """
        if not self.guard.reset():
            return False
        self.watch.restart()
        self.senses.trust_all()
        if self.guard.state == STANDBY:
            self.output.find()
            self.senses.spin_held = self.senses.encoders.spin_held = True
        return True

    def set_drive_scale(self, scale: float) -> None:
        """What share of its torque the drive can still give, as a battery tells; the capturable region follows."""
        self.output.scale = min(1.0, max(scale, 0.05))
        self.judge.use()

    def change_parameters(self, change: PreparedChange) -> None:
        """Go over to a prepared change, from the next tick on and without a step in torque. Any thread may call it."""
        self._change = change

    def _take_over(self) -> None:
        change, self._change = self._change, None
        if change is not None:
            self.parameters = change.parameters
            self._gains.begin(change)
            self.attitude.reckon_with(gyro_noise(change.parameters), change.parameters.attitude_time)
            self.reference.follow(change.parameters.compensation != "none", self.senses.arm_position)

    def tick(self, measured: Measurement) -> Array:
        """Actuator efforts [n], N m, that answer this measurement; zeros unless the guard lets torque out. Never
        NaN.
        """
        clock, watch = self.clock, self.watch
        watch.begin()
        periods = clock.advance(measured.stamp)
        if clock.wrong:
            self._time_is_wrong(clock.wrong)
        if periods == 0:
            return self.output.effort.copy()
        for missed in range(periods - 1, 0, -1):
            self._pass_over(clock.now - missed * self.period)
        return self._answer(measured, clock.now)

    def _time_is_wrong(self, wrong: str) -> None:
        self.watch.see(self.clock.now, CLOCK, wrong)
        if wrong in ("jump", "stall"):
            self.watch.restart()
            self.senses.restart()
            if wrong == "jump":
                # Nobody knows whether the arms' clock has jumped, too; after a stall they are where the plan has them.
                self.reference.cancel_plans(self.senses.arm_position)
            if self.guard.sends:
                self.stop(f"{CLOCK}: {wrong}")

    def _pass_over(self, stamp: float) -> None:
        """A tick that nobody asked for: the drive went on with what it had."""
        row = self.reference.update(stamp, self.senses.arm_position)
        if self.guard.sends:
            self.senses.pass_over(self._expectation(row.tolist()))
            self.controller.correct(None)
            self.controller.predict(*(self.torque - row[10:13]).tolist())
            self.judge.begin()

    def _answer(self, measured: Measurement, now: float) -> Array:
        while self._load_changes and self._load_changes[0][0] <= now + 1e-9:
            self.body.set_load(self._load_changes.pop(0)[1])
        senses = self.senses
        senses.look_at_arms(measured, now)
        if self._change is not None:
            self._take_over()
        self._rescheduling.tick(senses.arm_position)
        row = self.reference.update(now, senses.arm_position)
        reference: list[float] = row.tolist()
        at_rest = self.supported and self.guard.state == STANDBY
        senses.look(measured, now, self._expectation(reference) if self.guard.sends else None, at_rest)
        return self._act(now, reference)

    def _expectation(self, reference: list[float]) -> Expected:
        """What reference and model expect at this tick."""
        before, prior = self.controller.estimate.tolist(), self.controller.prior.tolist()
        self._expected.fill(reference, before, prior, self.period, self.guard.state == ENGAGING, self.output.calm)
        return self._expected

    def _act(self, now: float, reference: list[float]) -> Array:
        controller, guard, senses, attitude = self.controller, self.guard, self.senses, self.attitude
        rates = attitude.rates
        off = attitude.roll - reference[0], attitude.pitch - reference[1]
        off_rates = rates[0] - reference[2], rates[1] - reference[3]
        if guard.sends:
            self._judge(now, reference, off, off_rates)
        elif guard.state == STANDBY:
            senses.trust_arms()
        before = guard.state
        lacking = ""
        if before == STANDBY:
            lacking = missing(self.parameters.limits, senses, self.watch, off, off_rates) or self.held_back
        share = guard.update(now, lacking, self.supported)
        if before == STANDBY and guard.state == ENGAGING:
            self._engage(now)
            reference = self.reference.row.tolist()
            off = attitude.roll - reference[0], attitude.pitch - reference[1]
        if not guard.sends:
            self.torque[:] = 0.0
            controller.reset()
            self.judge.begin()
            return self.output.none()
        if senses.lean_known or senses.drive:
            away_x, away_y = self.reference.off_station(reference, senses.ball)
            off_heading = (senses.heading - reference[8] + math.pi) % _TURN - math.pi
            if not self.output.gives_heading:
                # It goes where it will: nothing is asked for, so that nothing is taken from roll and pitch.
                off_heading = float(controller.prior[8])
            self._deviation[:] = *off, *off_rates, away_x, away_y, off_heading, rates[2] - reference[9]
        if guard.state != ENGAGING:
            self.judge.look_at_actuators(senses, reference, off, off_rates)
        if share < 1.0:
            controller.forget_moment()
        controller.correct(self._deviation, senses.lean_known, senses.drive and not senses.encoders.gap)
        return self._efforts(controller.torque(), share, reference)

    def _judge(
        self, now: float, reference: list[float], off: tuple[float, float], off_rates: tuple[float, float]
    ) -> None:
        """Stop or trip where the table says so: for what is wrong with an input, for a lean that can't be brought
        back.
        """
        self.judge.look(now, reference, off, off_rates, self.controller.estimate.tolist())
        if self.watch.deed == TRIP:
            self.guard.trip(self.watch.reason)
        elif self.watch.deed == STOP and self.guard.state != STOPPING:
            self.stop(self.watch.reason)

    def _engage(self, now: float) -> None:
        """``odom`` begins here: ball at its origin, heading zero, nothing estimated yet."""
        self.senses.engage()
        self.controller.reset()
        self.judge.use(self.body.posture(self.senses.arm_position))
        self.reference.engage(self.senses.arm_position)
        self.reference.update(-math.inf, self.senses.arm_position)

    def _efforts(self, wanted: Array, share: float, reference: list[float]) -> Array:
        """Limit the torque, turn it into efforts, and let the model go on with what was really sent."""
        output, (x, y, z) = self.output, reference[10:13]
        self.judge.sent()
        wx, wy, wz = wanted.tolist()
        encoders, tx, ty, tz = self.senses.encoders, share * (x + wx), share * (y + wy), share * (z + wz)
        effort = output.send(tx, ty, tz, self._gains.torque_limit, self.lean, encoders.moved, encoders.passed)
        if effort is None:
            self.guard.trip(f"{LEAN}: torque not a number")
            self.torque[:] = 0.0
            return output.none()
        self.torque[:] = tx, ty, tz = output.sent
        self.controller.predict(tx - x, ty - y, tz - z)
        return effort
