"""The bounded lean by SciPy's boundary-value solver and Pinocchio's full recursion: the reference for the planner.

The equations are the planner's (the moment about the contact comes from gravity alone), put together here from
`pinocchio.rnea` and `pinocchio.crba` at each point of the mesh; nothing of the package but the robot's numbers is used.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import pinocchio as pin
from scipy.integrate import solve_bvp

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from helpers.balance_check import loaded_model


class BalanceEquation:
    """The lean's acceleration from arms, lean and lean rate, with the ball and the heading at rest."""

    def __init__(self, description: RobotDescription, loads: Sequence[Load]) -> None:
        self.model = loaded_model(description, loads)
        self.data = self.model.createData()
        self.radius = description.parameters.ball.radius

    def acceleration(self, arm: tuple[Array, Array, Array], lean: Array, rate: Array) -> Array:
        """Lean acceleration [2], rad/s², that makes row_roll - r row_y and row_pitch + r row_x vanish."""
        (s_roll, s_pitch), (c_roll, c_pitch) = np.sin(lean), np.cos(lean)
        rotation = np.array(
            [
                [c_pitch, s_pitch * s_roll, s_pitch * c_roll],
                [0.0, c_roll, -s_roll],
                [-s_pitch, c_pitch * s_roll, c_pitch * c_roll],
            ]
        )
        axes = np.array([[1.0, 0.0], [0.0, c_roll], [0.0, -s_roll]])
        turning = rate[0] * rate[1] * np.array([0.0, -s_roll, -c_roll])
        place, still = np.concatenate((np.zeros(3), pin.Quaternion(rotation).coeffs())), np.zeros(3)
        q = np.concatenate((place, arm[0]))
        v = np.concatenate((still, axes @ rate, arm[1]))
        wrench = pin.rnea(self.model, self.data, q, v, np.concatenate((still, turning, arm[2])))[:6].copy()
        matrix = np.array(pin.crba(self.model, self.data, q)[:6, :6])
        matrix = np.triu(matrix) + np.triu(matrix, 1).T
        return -np.linalg.solve(self.rows(rotation, matrix[:, 3:] @ axes), self.rows(rotation, wrench))

    def rows(self, rotation: Array, wrench: Array) -> Array:
        """The two rows of wrenches [6, …] on the body, in base_link."""
        force, torque = rotation @ wrench[:3], rotation @ wrench[3:]
        return np.stack((torque[0] - self.radius * force[1], torque[1] + self.radius * force[0]))


def bounded_lean(
    description: RobotDescription,
    loads: Sequence[Load],
    arms: JointPath,
    lead_in: float,
    length: float,
    nodes: int = 101,
    tolerance: float = 1e-6,
) -> Callable[[Array], Array]:
    """Lean and lean rate [4, M] as a function of time [M], with the mass centre above the ball at both ends.

    `nodes` of the first mesh over `length` s; `tolerance` relative, on the residual.
    """
    equation = BalanceEquation(description, loads)

    def motion(times: Array, state: Array) -> Array:
        arm = arms.sample(times - lead_in)
        out = np.empty_like(state)
        out[:2] = state[2:]
        for k in range(len(times)):
            each = arm[0][k], arm[1][k], arm[2][k]
            out[2:, k] = equation.acceleration(each, state[:2, k], state[2:, k])
        return out

    times = np.linspace(0.0, length, nodes)
    q = pin.neutral(equation.model)
    static = np.empty((nodes, 2))
    for k, q[7:] in enumerate(arms.sample(times - lead_in)[0]):
        x, y, z = pin.centerOfMass(equation.model, equation.data, q)
        static[k] = np.arctan2(y, z), np.arctan2(-x, np.hypot(y, z))

    def ends(first: Array, last: Array) -> Array:
        return np.concatenate((first[:2] - static[0], last[:2] - static[-1]))

    guess = np.concatenate((static.T, np.zeros((2, nodes))))
    solution = solve_bvp(motion, ends, times, guess, tol=tolerance, max_nodes=20 * nodes)
    if not solution.success:
        raise RuntimeError(solution.message)
    return solution.sol
