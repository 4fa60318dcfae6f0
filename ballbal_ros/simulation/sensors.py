"""The simulated sensors: an IMU with an IMU's errors, encoders with their steps, and the age of what they say."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation import compiled
from ballbal_ros.simulation.parameters import SimulatedImuParameters, SimulationParameters

_BLOCK = 1000

Quaternion = tuple[float, float, float, float]


class AttitudeFilter:
    """A complementary attitude filter, as IMUs have: the gyro integrated, pulled to where the specific force points.

    q' = q/2 ⊗ (ω + (a/|a| × v)/T), with v the filter's vertical in IMU axes and T its time constant (Mahony, Hamel
    and Pflimlin 2008, IEEE TAC 53(5) 1203, written down from memory; proportional term alone). Under a lasting
    acceleration it tilts by the angle between specific force and vertical; the heading is the gyro's integral.
    """

    def __init__(self, quat_wxyz: Quaternion, time_constant: float, period: float) -> None:
        # What `compiled` takes.
        self.state = np.array([*quat_wxyz, *[math.nan] * 3], float)
        self.filtering = np.array([1.0 / time_constant, 0.5 * period])

    def update(self, rate: Array, force: Array) -> Quaternion:
        """The orientation (wxyz) after a period in which the rate [3] went from the last to this, rad/s; specific
        force [3], m/s².
        """
        compiled.filter_attitude(self.state, *self.filtering, rate, np.zeros(3), force)
        w, x, y, z = self.state[:4].tolist()
        return w, x, y, z


class ImuErrors:
    """The random part of the IMU, drawn in blocks: one row for each tick.

    A white density s gives samples of standard deviation s sqrt(rate), a random walk of density s steps of s /
    sqrt(rate).
    """

    def __init__(self, parameters: SimulatedImuParameters, rate: float, generator: np.random.Generator) -> None:
        self._parameters, self._rate, self._generator = parameters, rate, generator
        self._bias = parameters.gyro_bias * generator.standard_normal(3)
        self.start_bias = self._bias.copy()

    def rows(self) -> Iterator[Array]:
        """For each tick: what to add to rate (3) and specific force (3), and half a small turn of orientation (3)."""
        p, root = self._parameters, math.sqrt(self._rate)
        scale = np.repeat([p.gyro_noise * root, p.accelerometer_noise * root, 0.5 * p.attitude_noise], 3)
        while True:
            normal = self._generator.standard_normal((_BLOCK, 12))
            bias = self._bias + np.cumsum(p.gyro_walk / root * normal[:, 9:], axis=0)
            self._bias = bias[-1]
            added = normal[:, :9] * scale
            added[:, :3] += bias
            yield from added


class SimulatedSensors:
    """Makes a measurement of a true sample, with the errors of the sensors.

    A sample [10 + actuators + arm joints] is what is true at the instant that they look: rate (3, rad/s) and mean
    specific force since the last sample (3, m/s²) in IMU axes, quaternion wxyz of the IMU in ``odom``, angles of the
    actuators and positions of the arms, rad.

    At the start the robot has stood still on its stand: the attitude filter is right then, and knows the gyro's bias
    of then.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: SimulationParameters,
        generator: np.random.Generator,
        start: Array,
    ) -> None:
        imu, self._rate = parameters.imu, parameters.loop_rate
        errors = ImuErrors(imu, self._rate, generator)
        self._rows, self._known_bias = errors.rows(), errors.start_bias
        w, x, y, z = start[6:10].tolist()
        turning = AttitudeFilter((w, x, y, z), imu.attitude_time, 1.0 / self._rate)
        self._attitude = turning.state
        self._filtering = turning.filtering if imu.attitude == "filter" else np.zeros(2)
        steps = [*description.drive.encoder_step.tolist()]
        self._arms = 10 + len(steps)
        steps += [parameters.arm_encoder_step] * (len(start) - self._arms)
        self._steps = np.maximum(steps, 1e-12)
        self._last_angle = self._angle = self._steps[: self._arms - 10] * np.rint(
            start[10 : self._arms] / self._steps[: self._arms - 10]
        )

    def measure(self, stamp: float, sample: Array) -> Measurement:
        """The measurement of the tick at ``stamp`` (s); to be called once a tick."""
        told, arms = np.empty(len(sample)), self._arms
        compiled.sense(sample, next(self._rows), self._attitude, self._filtering, self._known_bias, self._steps, told)
        w, x, y, z = told[6:10].tolist()
        self._last_angle, self._angle = self._angle, told[10:arms]
        return Measurement(stamp, (x, y, z, w), told[:3], told[3:6], self._angle, told[arms:])

    @property
    def drive_rate(self) -> Array:
        """Rates [actuators], rad/s: difference quotient of the last two measured angles, as a drive gives it."""
        return (self._angle - self._last_angle) * self._rate
