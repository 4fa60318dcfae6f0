"""What the loop senses each tick: checks first, then lean, heading, ball and arms from what is left."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.balance.answers import ARMS, DRIVE, ENCODER, HEADING, IMU, ORIENTATION, SENSES
from ballbal_ros.balance.attitude import Attitude, Triple
from ballbal_ros.balance.ball_way import BallWay
from ballbal_ros.balance.checks import ArmCheck, ImuCheck, unit_quaternion
from ballbal_ros.balance.encoders import Encoders
from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.rate_doubt import RateDoubt
from ballbal_ros.balance.tilt import TiltWitness
from ballbal_ros.balance.watch import Watch
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

_TURNED = 0.02
_SPIN_SHARE = 0.02
_BRIDGED = 10


@attrs.define
class Expected:
    """What reference and model expect at a tick: lean and rates (roll, pitch; rad, rad/s), velocity of the ball (m/s),
    turning (rad/s); and lean (rad/s²) and ball acceleration (m/s²) as they were, in ``base_footprint``. ``calm``: the
    torque is so small that the floor holds the ball's spin whatever comes of it. Filled anew each tick.
    """

    lean: tuple[float, float] = (0.0, 0.0)
    lean_rate: tuple[float, float] = (0.0, 0.0)
    velocity: tuple[float, float] = (0.0, 0.0)
    turning: float = 0.0
    calm: bool = True
    acceleration: tuple[float, float, float, float] = (0.0, 0.0, 0.0, 0.0)
    _before: tuple[float, float, float, float] = (0.0, 0.0, 0.0, 0.0)

    def fill(
        self, reference: list[float], before: list[float], prior: list[float], period: float, held: bool, calm: bool
    ) -> None:
        """From the reference row of this tick, and the deviations estimated the tick before and expected now;
        ``held``: a stand may still hold it, and nothing is known of accelerations.
        """
        self.lean = reference[0] + prior[0], reference[1] + prior[1]
        self.lean_rate = reference[2] + prior[2], reference[3] + prior[3]
        self.velocity = reference[6] + prior[6], reference[7] + prior[7]
        self.turning = reference[9] + prior[9]
        self.calm = calm
        rate, (roll, pitch, x, y) = 1.0 / period, self._before
        self._before = before[2], before[3], before[6], before[7]
        if held:
            self.acceleration = 0.0, 0.0, 0.0, 0.0
            return
        # As measured, a tick ago: what the model expects lacks every moment that nobody told of, and the accelerometer,
        # which feels it, would pull the lean away from the truth by two milliradians for each kilogram in the hands.
        self.acceleration = (
            reference[13] + rate * (before[2] - roll),
            reference[14] + rate * (before[3] - pitch),
            reference[15] + rate * (before[6] - x),
            reference[16] + rate * (before[7] - y),
        )


class Senses:
    """Attitude, ball and arms, tick by tick. ``imu``, ``drive`` and ``arms`` say whether this tick's could be used.

    ``spin_held``: the floor holds the ball's spin, so that the drive shows the heading. ``ball`` is [x, y] in
    ``odom``, m; ``moved`` and ``moved_before`` how far it came in the last two ticks, in heading axes. Without the
    IMU, lean and rates are those expected; without the drive, the ball stays where it was last seen until the
    encoders, which count on, are heard again.
    """

    def __init__(
        self, description: RobotDescription, parameters: BalanceParameters, watch: Watch, arm_position: Array
    ) -> None:
        self.period = parameters.loop.period
        self.attitude = Attitude(
            description.rotation_imu_in_base,
            np.array(description.parameters.imu.position),
            self.period,
            gyro_noise(parameters),
            parameters.attitude_time,
        )
        self._watch = watch
        self._own = parameters.attitude == "own"
        self._doubt = RateDoubt(parameters)
        self._imu = ImuCheck(description, parameters)
        self._arms = ArmCheck(description, parameters, arm_position)
        self.encoders = Encoders(description, parameters)
        self.tilt = TiltWitness(description, parameters)
        self._radius = description.parameters.ball.radius
        self._way = BallWay(self._radius, self.period, self.attitude)
        self.imu = self.drive = self.arms = False
        self.ball = self._way.ball
        self.moved = self.moved_before = (0.0, 0.0)
        self._heading_zero = 0.0
        self._drive_heading = 0.0
        self._turn = (0.0, 1.0, 0.0, 1.0)
        self.spin_held = True
        self._turning, self._rate_start = 0.0, parameters.limits.rate_start
        self._spun, self._most_spun = 0.0, parameters.limits.turning * self.period

    @property
    def arm_position(self) -> Array:
        """Arm positions [n] that can be believed."""
        return self._arms.position

    def arms_age(self, now: float) -> float:
        """Age of the newest arm data that were taken in, s."""
        return now - self._arms.believed

    @property
    def heading(self) -> float:
        """Measured heading in ``odom``, rad."""
        return self.attitude.heading - self._heading_zero

    @property
    def lean(self) -> tuple[float, float]:
        """(roll, pitch), rad."""
        return self.attitude.roll, self.attitude.pitch

    def engage(self) -> None:
        """``odom`` begins here: ball at its origin, heading zero."""
        self.ball[0] = self.ball[1] = 0.0
        self._heading_zero = self.attitude.heading

    def restart(self) -> None:
        """The clock jumped: stamps count anew."""
        self._imu.restart()
        self._arms.restart()
        self.encoders.restart()
        self.tilt.restart()

    def trust_all(self) -> None:
        """A person has seen to it: what was distrusted is believed again."""
        self._arms.restart()
        self.tilt.trust()

    def trust_arms(self) -> None:
        """Nothing hangs on the arms' positions now: believe what comes next, even after a jump."""
        self._arms.restart()

    def look_at_arms(self, measured: Measurement, now: float) -> None:
        """Take in arm data; ``now`` in s."""
        wrong = self._arms.look(measured, now)
        self.arms = not wrong
        if wrong or not self._watch.quiet:
            self._watch.see(now, ARMS, wrong)

    def look(self, measured: Measurement, now: float, expected: Expected | None, at_rest: bool) -> None:
        """Take in IMU and drive data. ``expected``: None while the loop does not run; ``at_rest``: a stand holds the
        body still.
        """
        attitude, watch = self.attitude, self._watch
        before = attitude.roll, attitude.pitch
        self._turn_by(*before)
        wrong = self._imu.look(measured, now)
        body_rate: Triple = (0.0, 0.0, 0.0)
        force: Triple | None = None
        if not wrong:
            body_rate = attitude.in_base(self._imu.rate)
            if self._imu.acceleration is not None:
                force = attitude.in_base(self._imu.acceleration)
            if not self.tilt.agrees:
                wrong = "tilt"
            elif expected is None:
                self._doubt.before = body_rate[:2]
            elif self._doubt.jumps(body_rate, expected.lean_rate, attitude.pitch, self._turn):
                wrong = "jump"
        wrong = self._doubt.quarantined(wrong)
        self.imu = not wrong
        turning = body_rate[2] if self.imu or expected is None else expected.turning
        relative = None if expected is None else self._relative(expected, turning)
        missing = self.encoders.look(measured, now, relative, self.period)
        self.drive = not missing
        turned = self._level(*self.encoders.turn) if self.drive else (0.0, 0.0, 0.0)
        self._drive_heading -= turned[2]
        if self.imu and self.drive and expected is not None and self.spin_held:
            body_rate = self._checked_turning(body_rate, turned[2], now, expected.calm)
        if self.imu:
            self._attitude(measured, now, body_rate, force, expected, at_rest)
        elif expected is not None:
            heading = attitude.heading - turned[2] if self.drive else attitude.heading + self.period * expected.turning
            if self._doubt.unseen <= _BRIDGED:
                attitude.bridge(expected.lean_rate, expected.turning)
            else:
                attitude.coast(expected.lean, expected.lean_rate, heading, expected.turning)
        self.moved_before, self.moved = self.moved, self._go(turned, before, expected)
        if self.imu and self.drive and expected is not None and force is not None:
            self.tilt.see(force, attitude.roll, attitude.pitch, attitude.rates, self.moved)
        if wrong or missing or self.encoders.one_bad or not watch.quiet:
            self.tilt.restart()
            watch.see(now, IMU, wrong)
            watch.see(now, DRIVE, missing)
            watch.see(now, SENSES, "blind" if wrong and missing else "")
            watch.see(now, ENCODER, self.encoders.one_bad)

    def _checked_turning(self, body_rate: Triple, turned: float, now: float, calm: bool) -> Triple:
        """The body's rate, with that about z from the drive where the gyro's differs from it: the floor holds the
        ball's spin.

        Not ``calm``: an actuator that gives nothing might make the others spin the ball, so that nothing new is
        learnt; unless the gyro says that the body began to turn at once, of which the drive would show something.
        """
        off, before, self._turning = self.period * body_rate[2] + turned, self._turning, body_rate[2]
        if abs(body_rate[2] - before) > self._rate_start:
            self._spun = off
        elif calm:
            self._spun += _SPIN_SHARE * (off - self._spun)
        wrong = "" if abs(self._spun) < self._most_spun else "turning"
        if wrong or not self._watch.quiet:
            self._watch.see(now, HEADING, wrong)
        return (body_rate[0], body_rate[1], -turned / self.period) if wrong else body_rate

    def pass_over(self, expected: Expected) -> None:
        """A tick at which nobody looked: go on with what is expected."""
        self._turn_by(self.attitude.roll, self.attitude.pitch)
        self.encoders.pass_over(self._relative(expected, expected.turning))
        self.attitude.bridge(expected.lean_rate, expected.turning)
        self.tilt.restart()

    @property
    def lean_known(self) -> bool:
        """Whether the lean has been measured, or no longer ago than the rates expected can bridge."""
        return self._doubt.unseen <= _BRIDGED

    def _turn_by(self, roll: float, pitch: float) -> None:
        """Keep sines and cosines of the lean at the tick's beginning."""
        self._turn = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)

    def _relative(self, expected: Expected, turning: float) -> Triple:
        """Rate of the ball relative to the body that is expected, rad/s, ``base_link``."""
        (roll_rate, pitch_rate), (vx, vy) = expected.lean_rate, expected.velocity
        x, y, z = -vy / self._radius - roll_rate, vx / self._radius - pitch_rate, -turning
        sr, cr, sp, cp = self._turn
        return cp * x - sp * z, sp * sr * x + cr * y + cp * sr * z, sp * cr * x - sr * y + cp * cr * z

    def _level(self, x: float, y: float, z: float) -> Triple:
        """A turn in ``base_link`` in the axes of ``base_footprint``."""
        sr, cr, sp, cp = self._turn
        return cp * x + sp * sr * y + sp * cr * z, cr * y - sr * z, -sp * x + cp * sr * y + cp * cr * z

    def _attitude(
        self,
        measured: Measurement,
        now: float,
        body_rate: Triple,
        force: Triple | None,
        expected: Expected | None,
        at_rest: bool,
    ) -> None:
        attitude, quat = self.attitude, measured.imu_quat_xyzw
        if not self._own:
            wrong = "missing" if quat is None else "" if unit_quaternion(quat) else "not a unit quaternion"
            if quat is not None and not wrong:
                lean = attitude.of_orientation(quat)
                if expected is not None and self._turned(lean):
                    wrong = "jump"
                else:
                    attitude.from_orientation(lean, body_rate)
                    self._drive_heading = attitude.heading
            if wrong or not self._watch.quiet:
                self._watch.see(now, ORIENTATION, wrong)
            if not wrong:
                return
        known = (0.0, 0.0, 0.0, 0.0) if expected is None else expected.acceleration
        if not (self.drive and self.spin_held):
            self._drive_heading = attitude.heading
        heading = self._drive_heading
        attitude.from_rates(body_rate, force, known, heading, at_rest)

    def _turned(self, lean: Triple) -> bool:
        """Whether the IMU's orientation turned further within a tick than the rates say."""
        attitude, period = self.attitude, self.period
        roll_rate, pitch_rate, _ = attitude.rates
        off = math.hypot(lean[0] - attitude.roll - period * roll_rate, lean[1] - attitude.pitch - period * pitch_rate)
        return not off < _TURNED

    def _go(self, turned: Triple, before: tuple[float, float], expected: Expected | None) -> tuple[float, float]:
        """Move the ball; how far, in heading axes, m. After long without the drive the way meanwhile is that
        expected.
        """
        if self.drive and not self.encoders.gap:
            return self._way.roll(turned, before[1], self.heading)
        if expected is None:
            return 0.0, 0.0
        return self._way.guess(expected.velocity, self.heading, self.drive)


def gyro_noise(parameters: BalanceParameters) -> tuple[float, float]:
    """The gyro's white noise, rad/s/√Hz, and bias walk, as the attitude reckons with them."""
    return parameters.estimator.rate_noise * math.sqrt(parameters.loop.period), parameters.estimator.rate_walk
