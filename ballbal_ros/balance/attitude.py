"""Lean, heading and their rates from the IMU: from its own orientation, or by our acceleration-aware estimate."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pinocchio as pin

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.balance_rows import GRAVITY

Triple = tuple[float, float, float]

_SETTLING = 1.0
_FAR = 0.02
_FIRST_BIAS = 3e-3
_FIRST_ANGLE = 0.1


class _Trust:
    """Gains of a Kalman filter for one angle and its gyro's bias, from knowing nothing on: the same for roll, pitch,
    heading.

    ``rate_density`` rad/s/√Hz is the gyro's white noise, ``rate_walk`` rad/s²/√Hz its bias walk; the angle measured
    beside it is
    given the noise at which the filter's time constant, in the end, is ``time_constant`` s.
    """

    def __init__(self, period: float, rate_density: float, rate_walk: float, time_constant: float) -> None:
        self._period = period
        self.reckon_with(rate_density, rate_walk, time_constant)
        self.restart()

    def reckon_with(self, rate_density: float, rate_walk: float, time_constant: float) -> None:
        """Take other noise figures; what is known stays, and the gains go to their new values by themselves."""
        self._density = rate_density
        self._angle_growth, self._bias_growth = rate_density**2 * self._period, rate_walk**2 * self._period
        self._noise = (rate_density * time_constant) ** 2 / self._period

    def restart(self) -> None:
        """Know nothing."""
        self._angle, self._cross, self._bias = _FIRST_ANGLE**2, 0.0, _FIRST_BIAS**2
        self.on_angle = self.on_bias = 0.0

    def know_angle(self) -> None:
        """The angle is known as well as the filter knows it in the end; the bias is not."""
        self._angle, self._cross, self._bias = self._density**2 * self._period, 0.0, _FIRST_BIAS**2

    def know_bias(self, resting_time: float) -> None:
        """The bias has been averaged over ``resting_time`` s of a body at rest."""
        self._cross, self._bias = 0.0, self._density**2 / resting_time

    def step(self) -> None:
        """The gains ``on_angle`` and ``on_bias`` (1/s) of the next tick."""
        period = self._period
        angle = self._angle + period * (period * self._bias - 2.0 * self._cross) + self._angle_growth
        cross = self._cross - period * self._bias
        bias = self._bias + self._bias_growth
        self.on_angle, self.on_bias = angle / (angle + self._noise), cross / (angle + self._noise)
        self._bias = bias - self.on_bias * cross
        self._cross = (1.0 - self.on_angle) * cross
        self._angle = (1.0 - self.on_angle) * angle


class Attitude:
    """(roll, pitch, heading) and (roll, pitch, heading) rates of the body, tick by tick.

    From the IMU's orientation where that is wanted. Otherwise the gyro is integrated, and drawn towards the vertical
    that the
    accelerometer shows **after the acceleration that the loop itself knows of has been taken out**: an attitude
    filter that takes
    apparent for true gravity leans with every acceleration. Gyro biases are found on the way; the heading's from the
    drive, as the
    floor holds the ball's spin.
    """

    def __init__(
        self,
        rotation_imu_in_base: Array,
        imu_position: Array,
        period: float,
        noise: tuple[float, float],
        time_constant: float,
    ) -> None:
        """``noise``: the gyro's white noise (rad/s/√Hz) and bias walk (rad/s²/√Hz); ``time_constant`` in s."""
        self._rotation = tuple(tuple(row) for row in rotation_imu_in_base.tolist())
        self._position = tuple(float(v) for v in imu_position)
        self._period = period
        self._trust = _Trust(period, noise[0], noise[1], time_constant)
        self._base_in_imu = _quat_from_matrix(rotation_imu_in_base.T)
        self.roll = self.pitch = self.heading = 0.0
        self.rates = (0.0, 0.0, 0.0)
        self._bias_roll = self._bias_pitch = self._bias_heading = 0.0
        self._age = 0.0
        self._rested = 0
        self._followed = False

    def in_base(self, vector: Sequence[float]) -> Triple:
        """A vector (3 numbers) in IMU axes, in those of ``base_link``. (Plain numbers: so few are faster without
        arrays.)
        """
        x, y, z = vector
        (xx, xy, xz), (yx, yy, yz), (zx, zy, zz) = self._rotation
        return xx * x + xy * y + xz * z, yx * x + yy * y + yz * z, zx * x + zy * y + zz * z

    def reckon_with(self, noise: tuple[float, float], time_constant: float) -> None:
        """Take other noise figures (as in the constructor) while it runs; the estimate stays."""
        self._trust.reckon_with(*noise, time_constant)

    @property
    def settled(self) -> bool:
        """Whether our own estimate has seen enough of a robot at rest; at once where the IMU's orientation is taken."""
        return self._age >= _SETTLING - 1e-9

    def restart(self) -> None:
        """Begin anew: the next acceleration is taken for gravity, biases for zero."""
        self._age, self._rested = 0.0, 0
        self._trust.restart()
        self._bias_roll = self._bias_pitch = self._bias_heading = 0.0
        self.heading = 0.0

    def of_orientation(self, quat_xyzw: tuple[float, float, float, float]) -> Triple:
        """(roll, pitch, heading) of the body, rad, from the IMU's own orientation, a unit quaternion of the IMU in
        ``odom``.
        """
        x, y, z, w = quat_xyzw
        a, b, c, d = self._base_in_imu
        return lean_and_heading_from_quat_xyzw(
            w * a + x * d + y * c - z * b,
            w * b - x * c + y * d + z * a,
            w * c + x * b - y * a + z * d,
            w * d - x * a - y * b - z * c,
        )

    def from_orientation(self, lean_and_heading: Triple, body_rate: Triple) -> None:
        """Take (roll, pitch, heading), rad, as the IMU has them, and the body's rate (3 numbers), rad/s, in
        ``base_link``.
        """
        self.roll, self.pitch, self.heading = lean_and_heading
        self._set_rates(body_rate, 0.0, 0.0, 0.0)
        self._age, self._followed = _SETTLING, True

    def bridge(self, lean_rate: tuple[float, float], turning: float) -> None:
        """Nothing was measured at this tick: go on with the rates that are expected, rad/s."""
        period = self._period
        self.roll += period * lean_rate[0]
        self.pitch += period * lean_rate[1]
        self.heading += period * turning
        self.rates = (*lean_rate, turning)

    def coast(self, lean: tuple[float, float], lean_rate: tuple[float, float], heading: float, turning: float) -> None:
        """Nothing was measured: take lean, heading (rad) and their rates (rad/s) as they are expected to be."""
        self.roll, self.pitch = lean
        self.heading = heading
        self.rates = (*lean_rate, turning)

    def _set_rates(self, body_rate: Triple, bias_roll: float, bias_pitch: float, bias_heading: float) -> None:
        wx, wy, wz = body_rate
        sr, cr = math.sin(self.roll), math.cos(self.roll)
        turning = sr * wy + cr * wz
        self.rates = (
            wx + math.tan(self.pitch) * turning - bias_roll,
            cr * wy - sr * wz - bias_pitch,
            turning / math.cos(self.pitch) - bias_heading,
        )

    def from_rates(
        self,
        body_rate: Triple,
        specific_force: Triple | None,
        known: tuple[float, float, float, float],
        heading_from_drive: float,
        at_rest: bool = False,
    ) -> None:
        """Our own estimate from rate, rad/s, and the accelerometer's specific force, m/s², None where there is none,
        both in ``base_link``.

        ``at_rest``: a stand holds the body still, so that what the gyro shows is its bias. ``known``: the (roll,
        pitch) acceleration, rad/s², and the ball's (x, y) acceleration, m/s², in ``base_footprint``, as the loop knows
        them. ``heading_from_drive``: minus the ball's spin relative to the body, summed up, rad.
        """
        old = self.rates
        sr, cr, sp, cp = math.sin(self.roll), math.cos(self.roll), math.sin(self.pitch), math.cos(self.pitch)
        if self._followed:
            self._trust.know_angle()
            self._bias_roll = self._bias_pitch = self._bias_heading = 0.0
            self._followed = False
        if self._age == 0.0:
            if specific_force is None:
                return
            fx, fy, fz = specific_force
            self.roll, self.pitch = math.atan2(fy, fz), math.atan2(-fx, math.hypot(fy, fz))
            self._set_rates(body_rate, self._bias_roll, self._bias_pitch, self._bias_heading)
            self.heading, self._age = heading_from_drive, self._period
            return
        self._age += self._period
        trust = self._trust
        if at_rest:
            self._rest(body_rate)
        trust.step()
        gx = gy = gz = 0.0
        if specific_force is not None:
            ax, ay, az = self._motion(known, old, sr, cr, sp, cp)
            fx, fy, fz = specific_force
            gx, gy, gz = fx - ax, fy - ay, fz - az
        self._set_rates(body_rate, self._bias_roll, self._bias_pitch, self._bias_heading)
        half = 0.5 * self._period
        self.roll += half * (old[0] + self.rates[0])
        self.pitch += half * (old[1] + self.rates[1])
        self.heading += half * (old[2] + self.rates[2])
        if 0.5 * GRAVITY < math.sqrt(gx * gx + gy * gy + gz * gz) < 1.5 * GRAVITY:
            # A push is an acceleration that nobody knows of: it may pull the estimate a little, not away.
            off_roll = max(-_FAR, min(_FAR, math.atan2(gy, gz) - self.roll))
            off_pitch = max(-_FAR, min(_FAR, math.atan2(-gx, math.hypot(gy, gz)) - self.pitch))
            self.roll += trust.on_angle * off_roll
            self.pitch += trust.on_angle * off_pitch
            self._bias_roll += trust.on_bias * off_roll
            self._bias_pitch += trust.on_bias * off_pitch
        off_heading = heading_from_drive - self.heading
        self.heading += trust.on_angle * off_heading
        self._bias_heading += trust.on_bias * off_heading

    def _rest(self, body_rate: Triple) -> None:
        """Average the rates of a body at rest into the biases."""
        self._rested += 1
        self._set_rates(body_rate, self._bias_roll, self._bias_pitch, self._bias_heading)
        share = 1.0 / self._rested
        self._bias_roll += share * self.rates[0]
        self._bias_pitch += share * self.rates[1]
        self._bias_heading += share * self.rates[2]
        self._trust.know_bias(self._rested * self._period)

    def _motion(
        self,
        known: tuple[float, float, float, float],
        rates: tuple[float, float, float],
        sr: float,
        cr: float,
        sp: float,
        cp: float,
    ) -> tuple[float, float, float]:
        """Acceleration of the IMU in ``base_link`` from what the loop knows: the ball's, and α×p + ω×(ω×p)."""
        roll_acceleration, pitch_acceleration, ball_x, ball_y = known
        px, py, pz = self._position
        v_r, v_p, v_h = rates
        wx, wy, wz = v_r - v_h * sp, v_p * cr + v_h * cp * sr, -v_p * sr + v_h * cp * cr
        ux = roll_acceleration
        uy, uz = pitch_acceleration * cr, -pitch_acceleration * sr
        dot = wx * px + wy * py + wz * pz
        square = wx * wx + wy * wy + wz * wz
        bx = cp * ball_x
        by = sp * sr * ball_x + cr * ball_y
        bz = sp * cr * ball_x - sr * ball_y
        return (
            bx + uy * pz - uz * py + wx * dot - px * square,
            by + uz * px - ux * pz + wy * dot - py * square,
            bz + ux * py - uy * px + wz * dot - pz * square,
        )


def _quat_from_matrix(rotation: Array) -> tuple[float, float, float, float]:
    """Unit quaternion (x, y, z, w) of a rotation matrix."""
    x, y, z, w = pin.Quaternion(np.array(rotation)).coeffs().tolist()
    return x, y, z, w
