"""Balancing without the IMU for a while: lean and ball from the drive's encoders and the model alone.

The encoders see the ball relative to the body, x - r pitch and y + r roll. With the model that tells of the lean too,
as a body that leans falls, and the ball has to follow. What it cannot tell apart is a lasting moment from a lean, so
the moment is kept as it was. The filter is that of :mod:`ballbal_ros.balance.noise` without the gyro's part.
"""

from __future__ import annotations

import numpy as np

from ballbal_ros.balance.discrete import kalman_gain, sampled, sampled_noise
from ballbal_ros.balance.linear_model import linear_model
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture


def coasting_gain(posture: Posture, description: RobotDescription, parameters: BalanceParameters) -> Array:
    """L [8, 2]: x̂ = x̄ + L ([x - r pitch, y + r roll] measured less expected), x as in the linear model."""
    model, loop, given = linear_model(posture, description), parameters.loop, parameters.estimator
    radius = model.ball_radius
    seen = np.zeros((2, 8))
    seen[0, 4] = seen[1, 5] = 1.0
    seen[0, 1], seen[1, 0] = -radius, radius
    torque, moment = model.torque_matrix, model.moment_matrix
    plant = sampled(model.state_matrix, torque, moment, seen, loop.period, loop.delay)
    density = (torque @ torque.T) * given.torque_noise**2 + (moment @ moment.T) * given.moment_noise**2
    noise = sampled_noise(model.state_matrix, density, loop.period)
    measured = (radius * given.drive_noise) ** 2 * np.eye(2)
    return read_only(kalman_gain(plant.transition, seen, noise, measured, what="the coasting filter"))
