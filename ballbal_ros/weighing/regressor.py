"""What the balance rows say of the masses: the moment about the contact, linear in the links' inertial parameters.

The floor gives the ball no roll or pitch moment, so at every instant (balance_rows.py)

    roll:  N_x - r (F_y + M_b a_y) = outside moment     pitch:  N_y + r (F_x + M_b a_x) = outside moment

F and N, force and moment on the body at the ball's centre, are linear in the ten inertial parameters of each moving
segment (Pinocchio's joint torque regressor of the free-flyer, whose sixfold base rows they are). At rest what is left
is r × weight: the sum of all first moments, seen along the vertical, is zero. The IMU shows the lean with its own
mounting tilt: R_body = R_shown Tᵀ.
"""

from __future__ import annotations

import attrs
import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import body_rates, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription


@attrs.frozen(eq=False)
class Motion:
    """How the robot moved, at N samples: the lean that the IMU shows [N, 2] with its rates and accelerations, heading
    rate and acceleration [N], direction in which the ball rolls (length 0 to 1, smoothed as the rest), acceleration
    and jerk of the ball [N, 2] in ``base_footprint``, arms [N, n].
    """

    lean: Array
    lean_rate: Array
    lean_acceleration: Array
    heading_rate: Array
    heading_acceleration: Array
    rolling: Array
    ball_acceleration: Array
    ball_jerk: Array
    arm_position: Array
    arm_rate: Array
    arm_acceleration: Array

    def __len__(self) -> int:
        return len(self.lean)

    @classmethod
    def at_rest(cls, lean: Array, arm_position: Array) -> Motion:
        """Rest at leans [N, 2] and arm positions [N, n]."""
        pair, one, arms = np.zeros_like(lean), np.zeros(len(lean)), np.zeros_like(arm_position)
        return cls(lean, pair, pair, one, one, pair, pair, pair, arm_position, arms, arms)

    def at(self, samples: NDArray[np.int64]) -> Motion:
        """These samples of it."""
        return Motion(**{field.name: getattr(self, field.name)[samples] for field in attrs.fields(Motion)})

    def joined(self, other: Motion) -> Motion:
        """The samples of both."""
        names = [field.name for field in attrs.fields(Motion)]
        return Motion(**{name: np.concatenate((getattr(self, name), getattr(other, name))) for name in names})


@attrs.frozen(eq=False)
class Rows:
    """The balance rows of N samples: ``by_dynamic`` [N, 2, 10 segments] times the inertial parameters, plus ``known``
    [N, 2] (the ball's own), plus ``rolling`` [N, 2] times the coefficient of rolling resistance, plus ``late`` [N, 2]
    times the time, s, by which the drive's angles are later than the IMU's data; N m.
    """

    by_dynamic: Array
    known: Array
    rolling: Array
    late: Array

    def residual(self, dynamic: Array, resistance: float = 0.0, late: float = 0.0) -> Array:
        """The outside moment [N, 2] that is left, (roll, pitch)."""
        return np.asarray(self.by_dynamic @ dynamic + self.known + resistance * self.rolling + late * self.late)


def shown_to_true(lean: Array, imu_tilt: Array) -> Array:
    """The body's lean [N, 2] from the one shown by an IMU that is tilted by (roll, pitch) in the body, rad."""
    rotation = rotation_lean(lean) @ rotation_lean(imu_tilt).T
    pitch = np.arcsin(np.clip(-rotation[:, 2, 0], -1.0, 1.0))
    return np.stack((np.arctan2(rotation[:, 2, 1], rotation[:, 2, 2]), pitch), axis=-1)


def balance_regressor(description: RobotDescription, motion: Motion, imu_tilt: Array) -> Rows:
    """The rows of a motion, with the IMU mounted ``imu_tilt`` [2] otherwise than the description says."""
    model, radius = description.model, description.parameters.ball.radius
    data, samples = model.createData(), len(motion)
    lean = shown_to_true(motion.lean, imu_tilt)
    rotation = rotation_lean(lean)
    turning = motion.heading_rate, motion.heading_acceleration
    rates = body_rates(lean, motion.lean_rate, motion.lean_acceleration, *turning)
    q, v, a = pin.neutral(model), np.zeros(model.nv), np.zeros(model.nv)
    by = np.empty((samples, 2, 10 * (model.njoints - 1)))
    for k in range(samples):
        q[3:7] = pin.Quaternion(rotation[k]).coeffs()
        q[7:], v[6:], a[6:] = motion.arm_position[k], motion.arm_rate[k], motion.arm_acceleration[k]
        v[3:6], a[3:6] = rates.rate[k], rates.acceleration[k]
        a[:2], a[2] = motion.ball_acceleration[k], 0.0
        a[:3] = rotation[k].T @ a[:3]
        wrench = pin.computeJointTorqueRegressor(model, data, q, v, a)[:6]
        by[k, 0] = rotation[k, 0] @ wrench[3:] - radius * (rotation[k, 1] @ wrench[:3])
        by[k, 1] = rotation[k, 1] @ wrench[3:] + radius * (rotation[k, 0] @ wrench[:3])
    apparent = radius * description.ball_apparent_mass
    known = np.stack((-apparent * motion.ball_acceleration[:, 1], apparent * motion.ball_acceleration[:, 0]), axis=-1)
    weight = (pin.computeTotalMass(model) + description.parameters.ball.mass) * GRAVITY
    along = weight * radius * motion.rolling
    # To a per cent, which is enough for what a lag of milliseconds does.
    lever = radius * (weight / GRAVITY) + apparent + pin.centerOfMass(model, data, q)[2] * pin.computeTotalMass(model)
    late = lever * motion.ball_jerk
    return Rows(by, known, *(np.stack((-each[:, 1], each[:, 0]), axis=-1) for each in (along, late)))
