"""The yardstick for short lead-ins: the least largest ball travel that any controller could reach, by linear programming.

It shares nothing with the planner but the balance rows (which are tested against Pinocchio): the lean's equation is
linearised along the arm motion (about the static lean, then about the lean found), put into discrete time by matrix
exponentials, and all states and inputs are unknowns of one sparse program. The whole motion is known from the start, the drive's torque is the one limit.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import expm
from scipy.optimize import linprog
from scipy.sparse import coo_matrix

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array, apply
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, UpperBodyTerms, balance_rows
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import WholeBody

# One node's unknowns: lean (2), lean rate (2), ball (2), ball rate (2), ball acceleration until the next node (2).
WIDTH, STATES = 10, 8
ROUNDS = 2
AFTER = 2.0  # s from the arms' end to where the robot must stand in balance again


def least_travel(body: WholeBody, arms: JointPath, lead_in: float, torque_limit: float = 40.0, step: float = 0.02) -> float:
    """The least largest |x| or |y|, in m, of the ball over all controls within the torque limit (N m)."""
    times = step * np.arange(round((lead_in + arms.duration + AFTER) / step) + 1)
    terms = body.terms(*arms.sample(times - lead_in))
    static, none = terms.static_lean(), np.zeros((len(times), 2))
    about, travel = (static, none, none), np.inf
    for _ in range(ROUNDS):
        accelerated, torque = linear(body.description, terms, about)
        travel, states = solve(steps(accelerated, step), torque, static, torque_limit)
        lean, rate = states[:, :2], states[:, 2:4]
        known = np.concatenate((states[:, :4], states[:, 8:10], np.ones((len(times), 1))), axis=1)
        about = lean, rate, np.einsum("nij,nj->ni", accelerated, known)
    return travel


def linear(
    description: RobotDescription, terms: UpperBodyTerms, about: tuple[Array, Array, Array]
) -> tuple[Array, Array]:
    """Lean acceleration, and drive torque about x and y, as [N, 2, 7] of lean, lean rate, ball acceleration and one."""
    at = balance_rows(
        terms,
        OutsideMotion.at_rest(len(terms)),
        *about,
        description.parameters.ball.radius,
        description.ball_apparent_mass,
    )
    known = np.concatenate(about, axis=1)
    constant = at.residual - np.einsum("nij,nj->ni", at.by_lean, known)
    rows = np.concatenate((at.by_lean[:, :, :4], at.by_ball_acceleration, constant[..., None]), axis=2)
    accelerated = -np.linalg.solve(at.by_lean[:, :, 4:6], rows)
    by_lean = at.wrench_by_lean[:, 3:5]
    torque = by_lean[:, :, 4:6] @ accelerated
    torque[:, :, :4] += by_lean[:, :, :4]
    lever = apply(rotation_lean(about[0]), terms.moment)[:, 2]
    torque[:, 0, 5] -= lever
    torque[:, 1, 4] += lever
    torque[:, :, 6] += at.torque[:, :2] - np.einsum("nij,nj->ni", by_lean, known)
    return accelerated, torque


def steps(accelerated: Array, step: float) -> Array:
    """[N-1, 8, 11]: the next node's state from this node's unknowns and one; the lean's equation as it is half-way."""
    middle = 0.5 * (accelerated[:-1] + accelerated[1:])
    system = np.zeros((len(middle), 11, 11))
    system[:, 0:2, 2:4] = system[:, 4:6, 6:8] = system[:, 6:8, 8:10] = np.eye(2)
    system[:, 2:4, 0:4], system[:, 2:4, 8:11] = middle[:, :, :4], middle[:, :, 4:7]
    return np.stack([expm(matrix * step)[:STATES] for matrix in system])


def solve(step: Array, torque: Array, static: Array, torque_limit: float) -> tuple[float, Array]:
    """The least bound on |x| and |y|, m, from rest in balance to rest in balance, and the nodes' unknowns [N, 10]."""
    nodes = len(static)
    count = WIDTH * nodes + 1
    scale = np.array([1e3] * STATES + [1.0] * 2)  # lean and ball in mrad and mm, so that the program is well scaled
    rows, columns, values, right = [], [], [], []

    def add(row: int, column: int, value: float) -> None:
        if value != 0.0:
            rows.append(row), columns.append(column), values.append(value)

    for k in range(nodes - 1):
        for i in range(STATES):
            row = len(right)
            add(row, WIDTH * (k + 1) + i, 1.0)
            for j in range(WIDTH):
                add(row, WIDTH * k + j, -step[k, i, j] * scale[i] / scale[j])
            right.append(step[k, i, 10] * scale[i])
    equal = coo_matrix((values, (rows, columns)), shape=(len(right), count)).tocsr(), np.array(right)
    rows, columns, values, right = [], [], [], []
    used = [0, 1, 2, 3, 8, 9]
    for k in range(nodes - 1):
        for axis in range(2):
            for sign in (1.0, -1.0):
                for j, column in enumerate(used):
                    add(len(right), WIDTH * k + column, sign * torque[k, axis, j] / scale[column])
                right.append(torque_limit - sign * torque[k, axis, 6])
                add(len(right), WIDTH * k + 4 + axis, sign)
                add(len(right), count - 1, -1.0)
                right.append(0.0)
    within = coo_matrix((values, (rows, columns)), shape=(len(right), count)).tocsr(), np.array(right)
    bounds = np.full((count, 2), [-np.inf, np.inf])
    for node in (0, nodes - 1):
        bounds[WIDTH * node : WIDTH * node + STATES] = 0.0
        bounds[WIDTH * node : WIDTH * node + 2] = 1e3 * static[node][:, None]
    # Where the ball stands in the end is free.
    bounds[WIDTH * (nodes - 1) + 4 : WIDTH * (nodes - 1) + 6] = -np.inf, np.inf
    cost = np.zeros(count)
    cost[-1] = 1.0
    result = linprog(cost, A_ub=within[0], b_ub=within[1], A_eq=equal[0], b_eq=equal[1], bounds=bounds, method="highs-ipm")
    if result.status != 0:
        raise RuntimeError(f"no control within the torque limit keeps the robot up: {result.message}")
    return 1e-3 * float(result.fun), result.x[:-1].reshape(nodes, WIDTH) / scale
