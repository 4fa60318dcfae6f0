"""A lean plan weighed by Pinocchio: does its motion change the angular momentum as gravity and the floor can?"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pinocchio as pin

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_heading, rotation_lean
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load

GRAVITY = np.array([0.0, 0.0, -9.80665])


def loaded_model(description: RobotDescription, loads: Sequence[Load]) -> pin.Model:
    """Pinocchio's model with these loads in the hands."""
    model = description.model.copy()
    for load in loads:
        frame = model.frames[model.getFrameId(load.hand)]
        joint = frame.parentJoint if hasattr(frame, "parentJoint") else frame.parent
        held = pin.Inertia(load.mass, load.center.copy(), load.inertia.copy())
        model.inertias[joint] = model.inertias[joint] + frame.placement.act(held)
    return model


def unbalanced_moment(
    description: RobotDescription, loads: Sequence[Load], arms: JointPath, plan: LeanPlan, period: float = 0.0025
) -> tuple[Array, Array]:
    """Times [M] and moments [M, 2] about x and y, N m, that somebody else would have to give for the plan to happen.

    About a fixed floor point, L' = moment of gravity + contact point × floor force, floor force = p' - weight. Angular
    momentum L and momentum p are Pinocchio's for the tree, at what the plan's table says between its nodes, and the
    rolling ball's; their rates are finite differences. Nothing of the planner or of the balance rows is in it.
    """
    table = plan.table(period)
    times = period * np.arange(len(table))
    position, rate, _ = arms.sample(times - plan.lead_in)
    model, ball = loaded_model(description, loads), description.parameters.ball
    data = model.createData()
    turning, going, gravity = (np.zeros((len(table), 3)) for _ in range(3))
    for k, row in enumerate(table):
        heading, place, velocity = rotation_heading(row[8]), np.append(row[4:6], ball.radius), np.append(row[6:8], 0.0)
        rotation, pitched = heading @ rotation_lean(row[:2]), rotation_lean(np.array([0.0, row[1]]))
        spin = heading @ (row[2] * pitched[:, 0] + np.array([0.0, row[3], row[9]]))
        q = np.concatenate((place, pin.Quaternion(rotation).coeffs(), position[k]))
        v = np.concatenate((rotation.T @ velocity, rotation.T @ spin, rate[k]))
        pin.computeCentroidalMomentum(model, data, q, v)
        center, mass = np.array(data.com[0]), pin.computeTotalMass(model)
        roll = np.array([-velocity[1], velocity[0], 0.0]) / ball.radius
        turning[k] = data.hg.angular + np.cross(center, data.hg.linear)
        turning[k] += ball.inertia * roll + ball.mass * np.cross(place, velocity)
        going[k] = data.hg.linear + ball.mass * velocity
        gravity[k] = np.cross(mass * center + ball.mass * place, GRAVITY)
    weight = (mass + ball.mass) * GRAVITY
    force = (going[2:] - going[:-2]) / (2.0 * period) - weight
    contact = np.concatenate((table[1:-1, 4:6], np.zeros((len(table) - 2, 1))), axis=1)
    missing = (turning[2:] - turning[:-2]) / (2.0 * period) - gravity[1:-1] - np.cross(contact, force)
    return times[1:-1], missing[:, :2]
