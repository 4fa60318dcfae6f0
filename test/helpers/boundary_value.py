"""The planner's equations solved by SciPy's collocation instead: the reference for the bounded lean."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.integrate import solve_bvp

from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import BalanceRows, OutsideMotion, UpperBodyTerms, balance_rows
from ballbal_ros.robot.whole_body import WholeBody


def rows_at(body: WholeBody, terms: UpperBodyTerms, lean: Array, rate: Array) -> BalanceRows:
    """The rows of leans and rates [N, 2] with the ball at rest and no lean acceleration yet."""
    description = body.description
    rest = OutsideMotion.at_rest(len(terms))
    radius = description.parameters.ball.radius
    return balance_rows(terms, rest, lean, rate, np.zeros_like(lean), radius, description.ball_apparent_mass)


def bounded_lean(
    body: WholeBody, arms: JointPath, lead_in: float, length: float, nodes: int = 101, tolerance: float = 1e-6
) -> Callable[[Array], Array]:
    """Lean and lean rate [4, M] as a function of time [M], with the static lean at both ends and the ball at rest.

    `nodes` of the first mesh over `length` s; `tolerance` relative, on the residual.
    """

    def motion(times: Array, state: Array) -> Array:
        rows = rows_at(body, body.terms(*arms.sample(times - lead_in)), state[:2].T, state[2:].T)
        # The rows are linear in the lean acceleration.
        acceleration = -np.linalg.solve(rows.by_lean[..., 4:6], rows.residual[..., None])[..., 0]
        return np.concatenate((state[2:], acceleration.T))

    times = np.linspace(0.0, length, nodes)
    static = body.terms(*arms.sample(times - lead_in)).static_lean()

    def ends(first: Array, last: Array) -> Array:
        return np.concatenate((first[:2] - static[0], last[:2] - static[-1]))

    guess = np.concatenate((static.T, np.zeros((2, len(times)))))
    solution = solve_bvp(motion, ends, times, guess, tol=tolerance, max_nodes=20 * nodes)
    if not solution.success:
        raise RuntimeError(solution.message)
    return solution.sol
