"""The yardstick for streamed arms: a receding-horizon linear program that knows the arms a preview ahead, no further.

Like :mod:`helpers.least_travel`, whose linear model it has, it shares nothing with the planner but the balance rows.
Again and again it finds the ball motion of least largest travel (and, where that leaves a choice, of least travel) for
the arms as it knows them, held beyond the preview; the first piece of it is done with the arms as they truly move.
"""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.whole_body import WholeBody
from helpers.least_travel import AFTER, SCALE, STATES, WIDTH, linear, program, steps

STOP = 0.1  # s in which arms that are taken to be held come to rest, evenly
SETTLING = 0.6  # s after the arms' end in which the ball goes on being watched
CHOICE = 0.02


def receding_travel(
    body: WholeBody,
    arms: JointPath,
    preview: float,
    torque_limit: float = 40.0,
    step: float = 0.02,
    every: int = 2,
    stop: float = STOP,
) -> float:
    """The largest |x| or |y| of the ball, m, where each ``every`` steps the program is solved anew."""
    count = int(np.ceil((preview + arms.duration + SETTLING) / step / every)) * every
    times = step * np.arange(count + 1)
    # The arms begin when the preview first shows them.
    true = body.terms(*arms.sample(times - preview))
    none = np.zeros((count + 1, 2))
    ahead = steps(linear(body.description, true, (true.static_lean(), none, none))[0], step)
    state, largest = np.zeros(STATES), 0.0
    state[:2] = true.static_lean()[0]
    for first in range(0, count, every):
        known = held(arms, times[first] - preview, preview, stop, step)
        control = best_control(body, known, state, torque_limit, step)
        for k in range(every):
            state = ahead[first + k] @ np.concatenate((state, control[k], [1.0]))
            largest = max(largest, float(np.abs(state[4:6]).max()))
    return largest


def held(arms: JointPath, begin: float, preview: float, stop: float, step: float) -> tuple[Array, Array, Array]:
    """Arm positions, rates, accelerations from ``begin`` on: as they are for a preview, then evenly to rest."""
    times = step * np.arange(round((preview + stop + AFTER) / step) + 1)
    position, rate, acceleration = arms.sample(begin + np.minimum(times, preview))
    beyond = np.clip(times - preview, 0.0, stop)[:, None]
    position = position + rate * (beyond - 0.5 * beyond**2 / stop)
    slower = np.where(times[:, None] > preview + 1e-9, -rate / stop * (beyond < stop - 1e-9), acceleration)
    return position, rate * (1.0 - beyond / stop), slower


def best_control(
    body: WholeBody, known: tuple[Array, Array, Array], state: Array, torque_limit: float, step: float
) -> Array:
    """The ball accelerations [N-1, 2] of least largest travel from a state to rest in balance."""
    terms = body.terms(*known)
    static, none = terms.static_lean(), np.zeros((len(terms), 2))
    accelerated, torque = linear(body.description, terms, (static, none, none))
    step_matrices = steps(accelerated, step)
    nodes, intervals = len(static), len(step_matrices)
    motion, drive = program(step_matrices, torque)
    ball = sparse.kron(sparse.eye(nodes), np.eye(2, WIDTH, k=4))
    size, one = 2 * nodes, np.ones((2 * nodes, 1))
    each = sparse.eye(size)
    given = torque[:-1, :, 6].ravel()
    # |ball| ≤ slack ≤ the largest: the sum of the slacks decides where the largest leaves a choice.
    within = [
        [drive, None, None],
        [-drive, None, None],
        [ball, -each, None],
        [-ball, -each, None],
        [None, each, -one],
    ]
    bounds = np.full((nodes, WIDTH, 2), [-np.inf, np.inf])
    bounds[0, :STATES] = (1e3 * state)[:, None]
    bounds[-1, :STATES] = 0.0
    bounds[-1, :2] = 1e3 * static[-1][:, None]
    bounds[-1, 4:6] = -np.inf, np.inf
    free = np.concatenate((bounds.reshape(-1, 2), np.tile([0.0, np.inf], (size + 1, 1))))
    result = linprog(
        np.concatenate((np.zeros(WIDTH * nodes), np.full(size, CHOICE / size), [1.0])),
        A_ub=sparse.bmat(within).tocsr(),
        b_ub=np.concatenate((torque_limit - given, torque_limit + given, np.zeros(3 * size))),
        A_eq=sparse.hstack((motion, sparse.csr_matrix((STATES * intervals, size + 1)))).tocsr(),
        b_eq=(step_matrices[:, :, WIDTH] * SCALE[:STATES]).ravel(),
        bounds=free,
        method="highs-ipm",
    )
    if result.status != 0:
        raise RuntimeError(f"the yardstick finds no control within the torque limit: {result.message}")
    return np.asarray(result.x[: WIDTH * nodes].reshape(nodes, WIDTH)[:-1, STATES:])
