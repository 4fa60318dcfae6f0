"""The ball motion of least excursion that lets a lean plan begin (and end) where the robot is.

The bounded lean begins long before the arms move. With less lead-in, or from a state that is not at rest, its first rate is not the
robot's. Then the ball has to move a little: among all ball motions within a window that carry the robot from its
state onto the bounded lean, and bring the ball back, this finds the one with the least largest travel, within the drive's torque and
the floor's friction. Everything is linear about the present solution, so the lean's answer to the ball comes from the
planner's own Newton matrix. Small mismatches are met by the least-square acceleration, larger ones by linear programming (HiGHS).
"""

from __future__ import annotations

from typing import NamedTuple

import attrs
import numpy as np
from scipy.interpolate import BSpline
from scipy.optimize import linprog
from scipy.sparse import csr_matrix

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, solve_bands
from ballbal_ros.robot.arrays import Array

_KNOT = 0.04
_END_WINDOW = 0.8
_SMALL = 1e-3


class ReliefLimits(NamedTuple):
    """What the ball motion may use: drive torque about x and y, N m, and horizontal force on the floor, N."""

    torque: float
    grip: float


@attrs.frozen(eq=False)
class BallBasis:
    """Ball motions on the grid [N, m] for one axis, zero outside the windows: position, rate, acceleration."""

    position: Array
    rate: Array
    acceleration: Array

    @classmethod
    def on(cls, times: Array, start_window: float, end_window: float) -> BallBasis:
        """Cubic B-splines that begin at rest at 0 and end at rest, without acceleration, after the window; likewise before the end."""
        parts = []
        for low, high, drop_first, drop_last in (
            (0.0, start_window, 2, 3),
            (times[-1] - end_window, times[-1], 3, 3),
        ):
            pieces = int(round((high - low) / _KNOT))
            inner = np.linspace(low, high, pieces + 1)
            knots = np.concatenate(([low] * 3, inner, [high] * 3))
            count = len(knots) - 4
            spline = BSpline(knots, np.eye(count)[:, drop_first : count - drop_last], 3)
            inside = ((times >= low) & (times <= high))[:, None]
            clipped = np.clip(times, low, high)
            parts.append([spline.derivative(k)(clipped) * inside if k else spline(clipped) * inside for k in range(3)])
        return cls(*(np.concatenate([part[k] for part in parts], axis=1) for k in range(3)))


@attrs.frozen(eq=False)
class BallRelief:
    """A ball motion [N, 2] in the plan's axes to be added to the given one: position, rate, acceleration."""

    position: Array
    rate: Array
    acceleration: Array


def ball_relief(
    problem: LeanProblem,
    solution: LeanSolution,
    turn: Array,
    mismatch_start: Array,
    mismatch_end: Array,
    start_window: float,
    limits: ReliefLimits,
    present: Array,
) -> BallRelief:
    """The ball motion that takes these lean-rate mismatches [2] (rad/s) at the plan's start and end away.

    ``turn`` [N, 2, 2] turns plan axes into ``base_footprint`` axes; ``present`` [N, 2] is the ball motion that the solution
    already has beyond the given one, m. Raises :class:`PlanRefused` where no ball motion within the limits does it.
    """
    step = problem.differences.step
    times = np.arange(len(problem.terms)) * step
    start_window = min(start_window, float(times[-1]))
    basis = BallBasis.on(times, start_window, min(_END_WINDOW, float(times[-1])))
    count = basis.position.shape[1]
    pushed = np.zeros((len(times), 2, 2 * count))
    pushed[:, 0, :count] = pushed[:, 1, count:] = basis.acceleration
    in_footprint = turn @ pushed
    rows = solution.rows.by_ball_acceleration @ in_footprint
    rows[[0, -1]] = 0.0
    answer = solve_bands(solution.bands, -rows.reshape(-1, 2 * count)).reshape(-1, 2, 2 * count)
    rate_map = np.concatenate(
        (problem.differences.start_rate(answer), -problem.differences.start_rate(answer[::-1])), axis=0
    )
    wanted = -np.concatenate((mismatch_start, mismatch_end))
    weights, *_ = np.linalg.lstsq(rate_map, wanted, rcond=None)
    if np.abs(basis.position @ weights.reshape(2, -1).T).max() > _SMALL:
        moving = np.flatnonzero(np.any(basis.acceleration != 0.0, axis=1))
        moving = moving[(moving > 0) & (moving < len(times) - 1)]
        torque, grip = _demands(problem, solution, answer, in_footprint, moving)
        weights = _least_travel(basis, present, rate_map, wanted, torque, grip, limits, moving)
    x, y = weights[:count], weights[count:]
    return BallRelief(*(np.stack((m @ x, m @ y), axis=-1) for m in (basis.position, basis.rate, basis.acceleration)))


def _demands(
    problem: LeanProblem, solution: LeanSolution, answer: Array, push: Array, used: Array
) -> tuple[tuple[Array, Array], tuple[Array, Array]]:
    """Drive torque about x, y, and grip on the floor along x, y, at the used nodes: present values [K, 2] and maps [K, 2, m]."""
    rows, differences = solution.rows, problem.differences
    stacked = np.concatenate((answer, differences.rate(answer), differences.acceleration(answer)), axis=1)[used]
    torque = rows.wrench_by_lean[used, 3:5] @ stacked
    lever = problem.terms.moment[used, 2]
    torque[:, 0] -= lever[:, None] * push[used, 1]
    torque[:, 1] += lever[:, None] * push[used, 0]
    r = problem.ball_radius
    now = rows.torque[used, :2]
    grip_now = np.stack((-now[:, 1] / r, now[:, 0] / r), axis=-1)
    grip = np.stack((-torque[:, 1] / r, torque[:, 0] / r), axis=1)
    return (now, torque), (grip_now, grip)


def _least_travel(
    basis: BallBasis,
    present: Array,
    rate_map: Array,
    wanted: Array,
    torque: tuple[Array, Array],
    grip: tuple[Array, Array],
    limits: ReliefLimits,
    used: Array,
) -> Array:
    """The weights [m] of least largest travel, by linear programming; a little of the drive's effort is in the cost too.

    In mm, mrad/s and shares of the limits, so that the program is well scaled.
    """
    count = basis.position.shape[1]
    m, ones, none = 2 * count, np.ones((len(used), 1)), np.zeros((len(used), 1))
    left: list[Array] = []
    right: list[Array] = []
    for axis in range(2):
        travel = np.zeros((len(used), m))
        travel[:, axis * count : (axis + 1) * count] = basis.position[used]
        share = [(1e-3 * response[:, axis] / limit, now[:, axis] / limit) for (now, response), limit in zip((torque, grip), limits)]
        bounds = [(travel, 1e3 * present[used, axis], axis)] + [(each, at, 2 + axis) for each, at in share]
        for response, at, bound in bounds:
            for sign in (1.0, -1.0):
                slack = [none] * 4
                slack[bound] = -ones
                left.append(np.hstack((sign * response, *slack)))
                right.append(-sign * at)
    result = linprog(
        np.concatenate((np.zeros(m), [1.0, 1.0, 0.05, 0.05])),
        A_ub=csr_matrix(np.vstack(left)),
        b_ub=np.concatenate(right),
        A_eq=np.hstack((rate_map, np.zeros((4, 4)))),
        b_eq=1e3 * wanted,
        bounds=[(None, None)] * m + [(0.0, None)] * 2 + [(0.0, 1.0)] * 2,
        method="highs",
    )
    if result.status != 0:
        raise PlanRefused(
            "plan", "no ball motion within the drive's torque and the floor's friction lets it begin this soon", "give it more lead-in"
        )
    return np.asarray(1e-3 * result.x[:m])
