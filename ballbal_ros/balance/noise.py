"""What the estimators reckon with: noise of the sensors, of the drive, and of the world.

An IMU's orientation, and our own too, is its gyro integrated. So the gyro's noise n does two things: it is seen in
the rate at once, and it makes the measured lean drift away from the true one, which is drawn back far too slowly to
matter. The estimators therefore take for their state the lean *as measured*, with the drift as process noise
correlated with the rate's: per period T the lean gains T n, the ball's position (encoders and lean) r T n, and the
moment that the measured lean seems to need changes by what gravity makes of T n, as a lean off by ε and a moment are
the same to the ball.
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.linalg import lstsq

from ballbal_ros.balance.discrete import SampledPlant, kalman_gain, sampled_noise
from ballbal_ros.balance.linear_model import BALL, LEAN, LEAN_RATE, LinearModel
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array

_BALL_BY_LEAN = np.array([[0.0, 1.0], [-1.0, 0.0]])


@attrs.frozen(eq=False)
class Noise:
    """Noise of a plant with n states, k disturbances, p measurements.

    ``measured`` [p, p]: covariance of one sample. ``drift`` [n + k, p]: what a measurement's noise adds to the state
    over one period. ``process`` [n, n]: density of white noise on x'. ``walk``: density of the disturbances' rates.
    """

    measured: Array
    drift: Array
    process: Array
    walk: float


def station_noise(model: LinearModel, parameters: BalanceParameters) -> Noise:
    """Noise of [roll, pitch, roll_rate, pitch_rate, x, y] as measured, and of lean and ball."""
    given, period, radius = parameters.estimator, parameters.loop.period, model.ball_radius
    torque, moment = model.torque_matrix, model.moment_matrix
    drift = np.zeros((10, 6))
    drift[LEAN, LEAN_RATE] = np.eye(2)
    drift[BALL, LEAN_RATE] = radius * _BALL_BY_LEAN
    drift[8:, LEAN_RATE] = lstsq(moment, -model.state_matrix[:, LEAN])[0]
    return Noise(
        measured=station_measurement_noise(given.lean_noise, given.rate_noise, given.drive_noise, radius),
        drift=period * drift,
        process=(torque @ torque.T) * given.torque_noise**2 + (moment @ moment.T) * given.moment_noise**2,
        walk=given.moment_walk,
    )


def heading_noise(model: LinearModel, parameters: BalanceParameters) -> Noise:
    """Noise of [heading, heading_rate] as measured, and of the heading."""
    given = parameters.estimator
    _, torque, _ = model.heading_matrices
    drift = np.zeros((3, 2))
    drift[0, 1] = parameters.loop.period
    return Noise(
        measured=np.diag([given.heading_noise**2, given.rate_noise**2]),
        drift=drift,
        process=(torque @ torque.T) * given.yaw_torque_noise**2,
        walk=given.yaw_moment_walk,
    )


def station_measurement_noise(lean: float, rate: float, drive: float, radius: float) -> Array:
    """Covariance [6, 6] of [roll, pitch, roll_rate, pitch_rate, x, y].

    The ball's position comes from the encoders, which see it relative to the body, and the lean: x = r (relative +
    pitch), y = -r (relative + roll). So its error is that of the lean over again. Arguments: rad, rad/s, rad, m.
    """
    source = np.zeros((6, 6))
    source[:4, :4] = np.diag([lean, lean, rate, rate])
    source[4:, :2] = radius * lean * _BALL_BY_LEAN
    source[4, 4] = source[5, 5] = radius * drive
    return np.asarray(source @ source.T)


def estimator_gain(plant: SampledPlant, noise: Noise) -> Array:
    """L [n + k, p] of the steady-state filter for [x; d], d a moment that walks, with this module's noise."""
    a, _, e = plant.continuous
    n, k = e.shape
    wandering, density, predict = np.zeros((n + k, n + k)), np.zeros((n + k, n + k)), np.eye(n + k)
    wandering[:n, :n], wandering[:n, n:] = a, e
    density[:n, :n], density[n:, n:] = noise.process, noise.walk**2 * np.eye(k)
    predict[:n, :n], predict[:n, n:] = plant.transition, plant.disturbance
    output = np.hstack((plant.output, np.zeros((len(plant.output), k))))
    cross = noise.drift @ noise.measured
    process = sampled_noise(wandering, density, plant.period) + cross @ noise.drift.T
    return kalman_gain(predict, output, process, noise.measured, cross)
