"""The simulated sensors: an IMU with an IMU's errors, encoders with their steps, and the age of what they say."""

from __future__ import annotations

import math
from collections.abc import Iterator

import attrs
import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.parameters import SimulatedImuParameters, SimulationParameters

_BLOCK = 1000

Quaternion = tuple[float, float, float, float]


@attrs.define(eq=False)
class Sample:
    """What is true at the instant that the sensors look. (Not frozen, which costs time in the loop; nobody changes it.)

    ``imu``: rate (3 numbers, rad/s), mean specific force since the last sample (3, m/s²), both in IMU axes, and
    quaternion wxyz (4) of the IMU in ``odom``. ``drive_angle`` (rad, one for each actuator) and ``arm_position`` [n]
    in rad.
    """

    imu: list[float]
    drive_angle: list[float]
    arm_position: Array


class AttitudeFilter:
    """A complementary attitude filter, as IMUs have: the gyro integrated, pulled to where the specific force points.

    q' = q/2 ⊗ (ω + (a/|a| × v)/T), with v the filter's vertical in IMU axes and T its time constant (Mahony, Hamel
    and Pflimlin 2008, IEEE TAC 53(5) 1203, written down from memory; proportional term alone). Under a lasting
    acceleration it tilts by the angle between specific force and vertical; the heading is the gyro's integral.
    """

    def __init__(self, quat_wxyz: Quaternion, time_constant: float, period: float) -> None:
        self._quat, self._pull, self._half = quat_wxyz, 1.0 / time_constant, 0.5 * period
        self._last: tuple[float, float, float] | None = None

    def update(self, gx: float, gy: float, gz: float, ax: float, ay: float, az: float) -> Quaternion:
        """The orientation (wxyz) after a period in which the rate went from the last to this (rad/s, three numbers)."""
        w, x, y, z = self._quat
        last = self._last or (gx, gy, gz)
        self._last = (gx, gy, gz)
        pull = self._pull / math.sqrt(ax * ax + ay * ay + az * az + 1e-12)
        vx, vy, vz = 2.0 * (x * z - w * y), 2.0 * (y * z + w * x), 1.0 - 2.0 * (x * x + y * y)
        half = self._half
        hx = half * (0.5 * (gx + last[0]) + pull * (ay * vz - az * vy))
        hy = half * (0.5 * (gy + last[1]) + pull * (az * vx - ax * vz))
        hz = half * (0.5 * (gz + last[2]) + pull * (ax * vy - ay * vx))
        self._quat = _turned(w, x, y, z, hx, hy, hz)
        return self._quat


def _turned(w: float, x: float, y: float, z: float, hx: float, hy: float, hz: float) -> Quaternion:
    """The quaternion wxyz, turned about its own axes by the small rotation vector 2 (hx, hy, hz), of unit length."""
    nw, nx = w - x * hx - y * hy - z * hz, x + w * hx + y * hz - z * hy
    ny, nz = y + w * hy + z * hx - x * hz, z + w * hz + x * hy - y * hx
    scale = 1.0 / math.sqrt(nw * nw + nx * nx + ny * ny + nz * nz)
    return nw * scale, nx * scale, ny * scale, nz * scale


class ImuErrors:
    """The random part of the IMU, drawn in blocks: one row for each tick.

    A white density s gives samples of standard deviation s sqrt(rate), a random walk of density s steps of s /
    sqrt(rate).
    """

    def __init__(self, parameters: SimulatedImuParameters, rate: float, generator: np.random.Generator) -> None:
        self._parameters, self._rate, self._generator = parameters, rate, generator
        self._bias = parameters.gyro_bias * generator.standard_normal(3)
        self.start_bias = tuple(self._bias.tolist())

    def rows(self) -> Iterator[list[float]]:
        """For each tick: what to add to rate (3) and specific force (3), and half a small turn of orientation (3)."""
        p, root = self._parameters, math.sqrt(self._rate)
        scale = np.repeat([p.gyro_noise * root, p.accelerometer_noise * root, 0.5 * p.attitude_noise], 3)
        while True:
            normal = self._generator.standard_normal((_BLOCK, 12))
            bias = self._bias + np.cumsum(p.gyro_walk / root * normal[:, 9:], axis=0)
            self._bias = bias[-1]
            added = normal[:, :9] * scale
            added[:, :3] += bias
            yield from added.tolist()


class SimulatedSensors:
    """Makes a measurement of a true sample, with the errors of the sensors.

    At the start the robot has stood still on its stand: the attitude filter is right then, and knows the gyro's bias
    of then.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: SimulationParameters,
        generator: np.random.Generator,
        start: Sample,
    ) -> None:
        imu, self._rate = parameters.imu, parameters.loop_rate
        errors = ImuErrors(imu, self._rate, generator)
        self._rows, self._known_bias = errors.rows(), errors.start_bias
        w, x, y, z = start.imu[6:10]
        self._filter: AttitudeFilter | None = None
        if imu.attitude == "filter":
            self._filter = AttitudeFilter((w, x, y, z), imu.attitude_time, 1.0 / self._rate)
        self._counts = [(max(step, 1e-12), 1.0 / max(step, 1e-12)) for step in description.drive.encoder_step.tolist()]
        self._arm_step = max(parameters.arm_encoder_step, 1e-12)
        self._arm_counts = 1.0 / self._arm_step
        self._last_angle = self._angle = self._counted(start.drive_angle)

    def _counted(self, angle: list[float]) -> Array:
        return np.array([step * round(value * counts) for value, (step, counts) in zip(angle, self._counts)])

    def measure(self, stamp: float, sample: Sample) -> Measurement:
        """The measurement of the tick at ``stamp`` (s); to be called once a tick."""
        gx, gy, gz, ax, ay, az, w, x, y, z = sample.imu
        dgx, dgy, dgz, dax, day, daz, hx, hy, hz = next(self._rows)
        gx, gy, gz, ax, ay, az = gx + dgx, gy + dgy, gz + dgz, ax + dax, ay + day, az + daz
        if self._filter is not None:
            bx, by, bz = self._known_bias
            w, x, y, z = self._filter.update(gx - bx, gy - by, gz - bz, ax, ay, az)
        w, x, y, z = _turned(w, x, y, z, hx, hy, hz)
        self._last_angle, self._angle = self._angle, self._counted(sample.drive_angle)
        arm = np.rint(sample.arm_position * self._arm_counts)
        arm *= self._arm_step
        imu = np.array((gx, gy, gz, ax, ay, az))
        return Measurement(stamp, (x, y, z, w), imu[:3], imu[3:], self._angle, arm)

    @property
    def drive_rate(self) -> Array:
        """Rates [actuators], rad/s: difference quotient of the last two measured angles, as a drive gives it."""
        return (self._angle - self._last_angle) * self._rate
