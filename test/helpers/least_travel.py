"""The yardstick for short lead-ins: the least largest ball travel that any controller could reach.

It is a linear program, and shares nothing with the planner but the balance rows (which are tested against Pinocchio):
the lean's equation is linearised about the static lean along the arm motion and put into discrete time by matrix
exponentials; all states and inputs are unknowns of one sparse program. The whole motion is known from the start, the
drive's torque is the one limit. Linearised again about the lean found, the bound changes by less than two percent.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy import sparse
from scipy.linalg import expm
from scipy.optimize import linprog

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array, apply
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, UpperBodyTerms, balance_rows
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import WholeBody

# One node's unknowns: lean (2), lean rate (2), ball (2), ball rate (2), ball acceleration until the next node (2).
WIDTH, STATES = 10, 8
# Lean and ball in mrad and mm, so that the program is well scaled.
SCALE = np.array([1e3] * STATES + [1.0] * 2)
AFTER = 2.0  # s from the arms' end to where the robot must stand in balance again


def least_travel(
    body: WholeBody, arms: JointPath, lead_in: float, torque_limit: float = 40.0, step: float = 0.02
) -> float:
    """The least largest |x| or |y|, in m, of the ball over all controls within the torque limit (N m)."""
    times = step * np.arange(round((lead_in + arms.duration + AFTER) / step) + 1)
    terms = body.terms(*arms.sample(times - lead_in))
    static, none = terms.static_lean(), np.zeros((len(times), 2))
    accelerated, torque = linear(body.description, terms, (static, none, none))
    return solve(steps(accelerated, step), torque, static, torque_limit)


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


def program(step: Array, torque: Array) -> tuple[Any, Any]:
    """Sparse matrices on all nodes' unknowns, scaled by :data:`SCALE`: the motion from node to node, the torque."""
    intervals, nodes = len(step), len(step) + 1
    advanced = step[:, :, :WIDTH] * SCALE[:STATES, None] / SCALE
    driven = np.zeros((intervals, 2, WIDTH))
    driven[:, :, [0, 1, 2, 3, 8, 9]] = torque[:-1, :, :6]
    here = sparse.kron(sparse.eye(intervals, nodes), np.eye(WIDTH))
    onward = sparse.kron(sparse.eye(intervals, nodes, k=1), np.eye(STATES, WIDTH))
    return onward - sparse.block_diag(advanced) @ here, sparse.block_diag(driven / SCALE) @ here


def solve(step: Array, torque: Array, static: Array, torque_limit: float) -> float:
    """The least bound on |x| and |y|, m, from rest in balance to rest in balance."""
    nodes, intervals = len(static), len(step)
    motion, drive = program(step, torque)
    used = sparse.eye(intervals, nodes)
    ball = sparse.kron(used, np.eye(2, WIDTH, k=4))
    given, one = torque[:-1, :, 6].ravel(), np.ones((2 * intervals, 1))
    within = [[drive, None], [-drive, None], [ball, -one], [-ball, -one]]
    bounds = np.full((nodes, WIDTH, 2), [-np.inf, np.inf])
    for node in (0, -1):
        bounds[node, :STATES] = 0.0
        bounds[node, :2] = 1e3 * static[node][:, None]
    bounds[-1, 4:6] = -np.inf, np.inf  # where the ball stands in the end is free
    result = linprog(
        np.append(np.zeros(WIDTH * nodes), 1.0),
        A_ub=sparse.bmat(within).tocsr(),
        b_ub=np.concatenate((torque_limit - given, torque_limit + given, np.zeros(4 * intervals))),
        A_eq=sparse.hstack((motion, sparse.csr_matrix((STATES * intervals, 1)))).tocsr(),
        b_eq=(step[:, :, WIDTH] * SCALE[:STATES]).ravel(),
        bounds=np.concatenate((bounds.reshape(-1, 2), [[0.0, np.inf]])),
        method="highs-ipm",
    )
    if result.status != 0:
        raise RuntimeError(f"the yardstick finds no control within the torque limit: {result.message}")
    return 1e-3 * float(result.fun)
