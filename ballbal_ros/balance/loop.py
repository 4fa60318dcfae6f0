"""The balance loop: one tick from a measurement to actuator efforts. The node and the rehearsal run this very class."""

from __future__ import annotations

import math
from collections.abc import Iterable

import attrs
import numpy as np

from ballbal_ros.balance.attitude import Attitude
from ballbal_ros.balance.changeover import ChangeOver, PreparedChange
from ballbal_ros.balance.controller import MEASURED, STATES, Controller
from ballbal_ros.balance.guard import BALANCING, ENGAGING, STANDBY, STOPPING, Guard
from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.reference import Reference
from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody

_RESCHEDULE = 10
_TURN = 2.0 * math.pi


@attrs.frozen
class BallEstimate:
    """Where the loop thinks the ball is: x, y (m), heading (rad) in ``odom``; vx, vy (m/s) in ``base_footprint``;
    heading rate (rad/s).
    """

    x: float
    y: float
    heading: float
    vx: float
    vy: float
    heading_rate: float


class BalanceLoop:
    """Keeps the robot on its ball. Not thread-safe; one :meth:`tick` a period, then read what is wanted.

    ``odom`` begins where it engages, with heading zero.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: BalanceParameters,
        arm_position: Array,
        loads: Iterable[Load] = (),
    ):
        self.description, self.parameters = description, parameters
        self.body = WholeBody(description, loads)
        self.period = parameters.loop.period
        self.guard = Guard(parameters)
        posture = self.body.posture(arm_position)
        schedule = GainSchedule(description, parameters, posture)
        self.controller = Controller(
            schedule.at(posture), parameters.limits.trim_rate * self.period, parameters.limits.trim_moment
        )
        self._gains = ChangeOver(schedule, parameters, description.parameters.limits.drive_torque)
        self._change: PreparedChange | None = None
        self._ticks = 0
        ahead = parameters.loop.delay + 0.5 * self.period
        self.reference = Reference(self.body, self.period, ahead, parameters.compensation != "none")
        self.attitude = Attitude(
            description.rotation_imu_in_base,
            np.array(description.parameters.imu.position),
            self.period,
            _gyro_noise(parameters),
            parameters.attitude_time,
        )
        self.supported = False
        self._own = parameters.attitude == "own"
        self._load_changes: list[tuple[float, Load]] = []
        drive = description.drive
        self._radius = description.parameters.ball.radius
        self._spin_map = np.ascontiguousarray(drive.spin_map)
        self._effort_map = np.ascontiguousarray(drive.effort_map)
        self._effort_limits = tuple(drive.effort_limit.tolist())
        self._zero = np.zeros(len(drive.names))
        self._deviation = np.zeros(MEASURED)
        self._in_base = np.zeros(3)
        self._last_angle: Array | None = None
        self._arm = np.array(arm_position, float)
        self._last_lean = (0.0, 0.0)
        self._ball = [0.0, 0.0]
        self._heading_zero = 0.0
        self._drive_heading = 0.0
        self.torque = np.zeros(3)

    @property
    def lean(self) -> tuple[float, float]:
        """Measured (roll, pitch), rad."""
        return self.attitude.roll, self.attitude.pitch

    @property
    def heading(self) -> float:
        """Measured heading in ``odom``, rad."""
        return self.attitude.heading - self._heading_zero

    @property
    def outside_moment(self) -> tuple[float, float, float]:
        """Estimated outside moment about the contact (roll, pitch) and about z, N m: what the trim leans against."""
        roll, pitch, yaw = self.controller.estimate[STATES:].tolist()
        return roll, pitch, yaw

    @property
    def ball(self) -> BallEstimate:
        """Estimate of ball and heading in ``odom``."""
        deviation, row = self.controller.estimate, self.reference.row
        return BallEstimate(
            self._ball[0],
            self._ball[1],
            self.heading,
            float(deviation[6] + row[6]),
            float(deviation[7] + row[7]),
            float(deviation[9] + row[9]),
        )

    def add_plan(self, stamp: float, plan: LeanPlan) -> None:
        """Follow a lean plan from its stamp, s, on."""
        self.reference.add_plan(stamp, plan)

    def set_load(self, load: Load, stamp: float = -math.inf) -> None:
        """Take a load into the mass model, at once or from a stamp to come on, s."""
        self._load_changes = sorted([*self._load_changes, (stamp, load)], key=lambda change: change[0])

    def stop(self, reason: str) -> None:
        """Controlled stop: no new motion, ball to rest, and torque off once a stand holds the robot."""
        self.guard.stop(reason)
        self.reference.set_velocity(0.0, 0.0, 0.0)

    @property
    def schedule(self) -> GainSchedule:
        """The gains in force: what a change is prepared with, see :func:`ballbal_ros.balance.changeover.prepare`."""
        return self._gains.schedule

    def change_parameters(self, change: PreparedChange) -> None:
        """Go over to a prepared change, from the next tick on and without a step in torque. Any thread may call it."""
        self._change = change

    def _take_over(self) -> None:
        change, self._change = self._change, None
        if change is not None:
            self.parameters = change.parameters
            self._gains.begin(change)
            self.attitude.reckon_with(_gyro_noise(change.parameters), change.parameters.attitude_time)
            self.reference.follow(change.parameters.compensation != "none", self._arm)

    def tick(self, measured: Measurement) -> Array:
        """Actuator efforts [n], N m, that answer this measurement; zeros unless the guard lets torque out. Never
        NaN.
        """
        while self._load_changes and self._load_changes[0][0] <= measured.stamp + 1e-9:
            self.body.set_load(self._load_changes.pop(0)[1])
        fit = measured.finite
        if fit:
            self._sense(measured)
        if self._change is not None:
            self._take_over()
        self._ticks += 1
        posture = self.body.posture(self._arm) if self._ticks % _RESCHEDULE == 0 else None
        if posture is not None or self._gains.under_way:
            self._gains.tick(self.controller, posture)
        row = self.reference.update(measured.stamp, measured.arm_position if fit else self._arm)
        if fit:
            self._arm = measured.arm_position
        return self._act(measured.stamp, row, fit)

    def _sense(self, measured: Measurement) -> None:
        """Attitude, and the ball's way since the last tick."""
        attitude, angle = self.attitude, measured.drive_angle
        last, self._last_angle = self._last_angle, angle.copy()
        x, y, z = (0.0, 0.0, 0.0) if last is None else (self._spin_map @ (angle - last)).tolist()
        roll, pitch = self._last_lean
        sr, cr, sp, cp = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)
        turn_x, turn_y, turn_z = (
            cp * x + sp * sr * y + sp * cr * z,
            cr * y - sr * z,
            -sp * x + cp * sr * y + cp * cr * z,
        )
        self._drive_heading -= turn_z
        if self._own and measured.imu_acceleration is not None:
            at_rest = self.supported and self.guard.state == STANDBY
            attitude.from_rates(
                measured.imu_rate, measured.imu_acceleration, self._known_acceleration(), self._drive_heading, at_rest
            )
        elif measured.imu_quat_xyzw is not None:
            attitude.from_orientation(measured.imu_quat_xyzw, measured.imu_rate)
        self._last_lean = attitude.roll, attitude.pitch
        if last is None:
            return
        ahead = self._radius * (turn_y + attitude.pitch - pitch)
        aside = -self._radius * (turn_x + (attitude.roll - roll) * cp)
        heading = self.heading
        sin, cos = math.sin(heading), math.cos(heading)
        self._ball[0] += cos * ahead - sin * aside
        self._ball[1] += sin * ahead + cos * aside

    def _known_acceleration(self) -> tuple[float, float, float, float]:
        """(roll, pitch, ball x, ball y) acceleration at this tick, as reference and model have it; none while a stand
        may hold it.
        """
        if self.guard.state not in (BALANCING, STOPPING):
            return 0.0, 0.0, 0.0, 0.0
        controller, row = self.controller, self.reference.row
        change = ((controller.prior[2:8] - controller.estimate[2:8]) / self.period).tolist()
        roll, pitch, x, y = row[13:17].tolist()
        return roll + change[0], pitch + change[1], x + change[4], y + change[5]

    def _act(self, stamp: float, row: Array, fit: bool) -> Array:
        controller, guard, attitude = self.controller, self.guard, self.attitude
        reference = row.tolist()
        rates = attitude.rates
        off_roll, off_pitch = attitude.roll - reference[0], attitude.pitch - reference[1]
        off_rates = rates[0] - reference[2], rates[1] - reference[3]
        before = guard.state
        share = guard.update(
            stamp, math.hypot(off_roll, off_pitch), math.hypot(*off_rates), fit and attitude.settled, self.supported
        )
        if guard.state == ENGAGING and before == STANDBY:
            self._engage()
            off_roll, off_pitch = attitude.roll - self.reference.row[0], attitude.pitch - self.reference.row[1]
        if guard.state not in (ENGAGING, BALANCING, STOPPING):
            self.torque[:] = 0.0
            controller.reset()
            return self._zero.copy()
        if fit:
            away_x, away_y = self._off_station(reference)
            off_heading = (self.heading - reference[8] + math.pi) % _TURN - math.pi
            self._deviation[:] = (
                off_roll,
                off_pitch,
                off_rates[0],
                off_rates[1],
                away_x,
                away_y,
                off_heading,
                rates[2] - reference[9],
            )
        if guard.state == ENGAGING:
            controller.forget_moment()
        controller.correct(self._deviation if fit else None)
        return self._efforts(controller.torque(), share, reference)

    def _off_station(self, reference: list[float]) -> tuple[float, float]:
        """Distance of the ball from where it is meant to be, in heading axes, m."""
        frame, station = self.reference.frame_heading, self.reference.station
        sin, cos = math.sin(frame), math.cos(frame)
        x = self._ball[0] - station[0] - cos * reference[4] + sin * reference[5]
        y = self._ball[1] - station[1] - sin * reference[4] - cos * reference[5]
        sin, cos = math.sin(reference[8]), math.cos(reference[8])
        return cos * x + sin * y, cos * y - sin * x

    def _engage(self) -> None:
        """``odom`` begins here: ball at its origin, heading zero, nothing estimated yet."""
        self._ball[0] = self._ball[1] = 0.0
        self._heading_zero = self.attitude.heading
        self.controller.reset()
        self.reference.engage(self._arm)
        self.reference.update(-math.inf, self._arm)

    def _efforts(self, wanted: Array, share: float, reference: list[float]) -> Array:
        """Limit the torque, turn it into efforts, and let the model go on with what was really sent."""
        limit = self._gains.torque_limit
        ahead = reference[10:13]
        tx, ty, tz = (share * (a + b) for a, b in zip(ahead, wanted.tolist()))
        if not math.isfinite(tx + ty + tz):
            self.guard.trip("the torque it worked out is not a number")
            self.torque[:] = 0.0
            return self._zero.copy()
        size = math.hypot(tx, ty)
        if size > limit:
            tx, ty = tx * limit / size, ty * limit / size
        tz = max(-limit, min(limit, tz))
        effort, sent = self._shared_out(tx, ty, tz)
        self.torque[:] = sent
        self.controller.predict(np.array((sent[0] - ahead[0], sent[1] - ahead[1], sent[2] - ahead[2])))
        return effort

    def _shared_out(self, tx: float, ty: float, tz: float) -> tuple[Array, tuple[float, float, float]]:
        """Efforts for a torque in ``base_footprint`` axes, within every actuator's limit (the heading gives way
        first), and what they give.
        """
        roll, pitch = self._last_lean
        sr, cr, sp, cp = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)
        base = self._in_base
        base[:] = cp * tx - sp * tz, sp * sr * tx + cr * ty + cp * sr * tz, sp * cr * tx - sr * ty + cp * cr * tz
        effort = self._effort_map @ base
        over = max(abs(e) / limit for e, limit in zip(effort.tolist(), self._effort_limits))
        if over <= 1.0:
            return effort, (tx, ty, tz)
        if tz != 0.0:
            return self._shared_out(tx, ty, 0.0)
        return effort / over, (tx / over, ty / over, 0.0)


def _gyro_noise(parameters: BalanceParameters) -> tuple[float, float]:
    """The gyro's white noise, rad/s/√Hz, and bias walk."""
    return parameters.estimator.rate_noise * math.sqrt(parameters.loop.period), parameters.estimator.rate_walk
