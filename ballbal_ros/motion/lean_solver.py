"""Stable inversion of the balance rows: the one bounded lean for a given motion of arms, ball, heading and hand forces.

The two rows are second-order equations for the lean, those of an inverted pendulum: integrated forward they run away.
The one bounded solution is the solution of the boundary-value problem with the equilibrium lean at both ends
(Devasia, Chen and Paden 1996, IEEE TAC 41(7) 930). Collocation on a uniform grid with fourth-order differences,
Newton's method with analytic derivatives; the matrix is block-pentadiagonal with 2x2 blocks
(``scipy.linalg.solve_banded``).
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.linalg import solve_banded

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.differences import REACH, Differences
from ballbal_ros.robot.arrays import Array, apply
from ballbal_ros.robot.balance_rows import BalanceRows, OutsideMotion, UpperBodyTerms, balance_rows

_BAND = 2 * REACH + 1
_TOLERANCE = 1e-9
_MOST_ITERATIONS = 15


@attrs.frozen(eq=False)
class LeanSolution:
    """The bounded lean [N, 2], its rate and acceleration, the rows there, and the Newton matrix as bands (to be
    solved again). The acceleration is what the rows ask for, at the two ends too.
    """

    lean: Array
    lean_rate: Array
    lean_acceleration: Array
    rows: BalanceRows
    bands: Array
    iterations: int


@attrs.frozen(eq=False)
class LeanProblem:
    """What is given: the upper body's terms, the outside motion, the ball, and the grid; see :func:`solve_lean`."""

    terms: UpperBodyTerms
    outside: OutsideMotion
    differences: Differences
    ball_radius: float
    ball_apparent_mass: float
    unseen_rate: Array
    unseen_acceleration: Array

    @classmethod
    def of(
        cls, terms: UpperBodyTerms, outside: OutsideMotion, step: float, ball_radius: float, ball_apparent_mass: float
    ) -> LeanProblem:
        """The problem on a grid of this step, s, with a smooth ball motion in ``outside``."""
        none = np.zeros((len(terms), 2))
        differences = Differences.on(len(terms), step)
        return cls(terms, outside, differences, ball_radius, ball_apparent_mass, none, none)

    def with_ball(self, turn: Array, position: Array, rate: Array, acceleration: Array) -> LeanProblem:
        """The problem with this ball motion [N, 2] added; ``turn`` [N, 2, 2] turns its axes into ``base_footprint``'s.

        It may be fast or have corners. Lean and ball are differentiated by the same stencils, so that what these get
        wrong in one they get wrong in the other too, and the leans fit; what is unseen comes into the rates afterwards.
        """
        seen = apply(turn, self.differences.acceleration(position))
        unseen = self.differences.whole_rate(position) - rate
        moved = self.outside.ball_acceleration + seen
        return attrs.evolve(
            self,
            outside=attrs.evolve(self.outside, ball_acceleration=moved),
            unseen_rate=self.unseen_rate + apply(turn, unseen),
            unseen_acceleration=self.unseen_acceleration + apply(turn, acceleration) - seen,
        )

    @property
    def ball_acceleration(self) -> Array:
        """The ball's acceleration [N, 2] as it is, ``base_footprint`` axes, m/s²."""
        return self.outside.ball_acceleration + self.unseen_acceleration

    def rows(self, lean: Array) -> tuple[Array, Array, BalanceRows]:
        """Lean rate, lean acceleration and rows of a lean [N, 2] on the grid; not to be used at its two ends."""
        rate, acceleration = self.differences.rate(lean), self.differences.acceleration(lean)
        return rate, acceleration, self._rows(self.outside, lean, rate, acceleration)

    def whole_rows(self, lean: Array, near: BalanceRows) -> tuple[Array, Array, BalanceRows]:
        """Lean rate, lean acceleration and rows of a lean [N, 2] on the grid, ends too; ``near``: rows close by."""
        outside = attrs.evolve(self.outside, ball_acceleration=self.ball_acceleration)
        rate = self.differences.whole_rate(lean) - apply(answer_to_ball(near), self.unseen_rate)
        rows = self._rows(outside, lean, rate, np.zeros_like(lean))
        # The rows are linear in the acceleration.
        acceleration = -np.asarray(np.linalg.solve(rows.by_lean[..., 4:6], rows.residual[..., None]))[..., 0]
        return rate, acceleration, self._rows(outside, lean, rate, acceleration)

    def _rows(self, outside: OutsideMotion, lean: Array, rate: Array, acceleration: Array) -> BalanceRows:
        return balance_rows(self.terms, outside, lean, rate, acceleration, self.ball_radius, self.ball_apparent_mass)

    def bands(self, rows: BalanceRows) -> Array:
        """The Newton matrix of the inner rows by the nodes' leans, with the identity at both ends, in banded form."""
        nodes = len(self.terms)
        bands = np.zeros((2 * _BAND + 1, 2 * nodes))
        by_lean, by_rate, by_acceleration = rows.by_lean[..., 0:2], rows.by_lean[..., 2:4], rows.by_lean[..., 4:6]
        first, second = self.differences.first, self.differences.second
        inner = np.arange(1, nodes - 1)
        for offset in range(-REACH, REACH + 1):
            block = (
                second[:, offset + REACH, None, None] * by_acceleration + first[:, offset + REACH, None, None] * by_rate
            )
            if offset == 0:
                block = block + by_lean
            used = inner[(inner + offset >= 0) & (inner + offset < nodes)]
            for row in range(2):
                for column in range(2):
                    bands[_BAND + row - column - 2 * offset, 2 * (used + offset) + column] = block[used, row, column]
        bands[_BAND, [0, 1, -2, -1]] = 1.0
        return bands


def answer_to_ball(rows: BalanceRows) -> Array:
    """The lean's acceleration [N, 2, 2] that goes with the ball's at once, rad/m."""
    return -np.asarray(np.linalg.solve(rows.by_lean[..., 4:6], rows.by_ball_acceleration))


def solve_bands(bands: Array, right: Array) -> Array:
    """Solve the Newton matrix for right-hand sides [2N] or [2N, m]."""
    return np.asarray(solve_banded((_BAND, _BAND), bands, right, check_finite=False))


def equilibrium_lean(problem: LeanProblem, node: int, guess: Array) -> Array:
    """The lean [2] at which one node's rows vanish with nothing accelerating: where gravity and hand forces balance."""
    at = problem.terms.at(np.array([node]))
    zero = np.zeros((1, 2))
    rest = attrs.evolve(
        OutsideMotion.at_rest(1),
        hand_force=problem.outside.hand_force[[node]],
        hand_moment=problem.outside.hand_moment[[node]],
        couple=None if problem.outside.couple is None else problem.outside.couple[[node]],
    )
    still = attrs.evolve(
        at,
        moment_rate=zero @ np.zeros((2, 3)),
        moment_acceleration=zero @ np.zeros((2, 3)),
        angular=zero @ np.zeros((2, 3)),
        angular_rate=zero @ np.zeros((2, 3)),
    )
    lean = guess.reshape(1, 2)
    for _ in range(_MOST_ITERATIONS):
        rows = balance_rows(still, rest, lean, zero, zero, problem.ball_radius, problem.ball_apparent_mass)
        step = np.linalg.solve(rows.by_lean[0, :, :2], rows.residual[0])
        lean = lean - step
        if np.abs(step).max() < 1e-12:
            break
    return np.asarray(lean[0])


def solve_lean(problem: LeanProblem, start_lean: Array, end_lean: Array, guess: Array | None = None) -> LeanSolution:
    """The lean that makes both rows vanish at every inner node, with these leans [2] at the first and last node.

    Raises :class:`PlanError` where Newton's method does not converge (a motion far beyond what the robot can do).
    """
    lean = problem.terms.static_lean() if guess is None else guess.copy()
    lean[0], lean[-1] = start_lean, end_lean
    for iteration in range(1, _MOST_ITERATIONS + 1):
        rate, acceleration, rows = problem.rows(lean)
        bands = problem.bands(rows)
        residual = rows.residual.copy()
        residual[[0, -1]] = 0.0
        step = solve_bands(bands, residual.reshape(-1)).reshape(-1, 2)
        if not np.all(np.isfinite(step)) or np.abs(lean - step).max() > 1.5:
            break
        lean = lean - step
        if np.abs(step).max() < _TOLERANCE**0.5:
            # Newton's method is quadratic: the step after this one would be below the tolerance.
            rate, acceleration, rows = problem.whole_rows(lean, rows)
            return LeanSolution(lean, rate, acceleration, rows, problem.bands(rows), iteration)
    raise PlanError("plan", "no bounded lean can be found for this motion", "make it slower or smaller")
