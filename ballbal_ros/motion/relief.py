"""The ball motion of least excursion that lets a lean plan begin (and end) where the robot is.

The bounded lean begins long before the arms move. With less lead-in, or from a state that is not at rest, its first
rate is not the robot's. Then the ball has to move a little: among all ball motions within a window that carry the
robot from its state onto the bounded lean, and bring the ball back, this finds the one with the least largest travel,
within the drive's torque and the floor's friction. Everything is linear about the present solution, so the lean's
answer to the ball comes from the planner's own Newton matrix. Small mismatches are met by least squares, larger ones by
linear programming (HiGHS).
"""

from __future__ import annotations

import attrs
import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.optimize import linprog

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, answer_to_ball, solve_bands
from ballbal_ros.robot.arrays import Array, apply, skew
from ballbal_ros.robot.attitude import rotation_lean

_KNOT = 0.04
_FEW_PIECES, _MOST_PIECES = 8, 32
_DEGREE = 5
_END_WINDOW = 0.8
_SMALL = 3e-4
# Least squares weigh an acceleration like the travel that goes with it at this rate, rad/s.
_RATE = 8.0
# What the linear program gives in travel, mm, to save the whole torque limit.
_TORQUE_PRICE = 1.0
# Shares of a limit by which a motion may be beyond it before the program hears of it.
_BEYOND = 0.01


@attrs.frozen(eq=False)
class ReliefLimits:
    """What the ball motion may ask of drive and floor.

    ``demands`` [K, 3]: share of each limit that one newton metre of drive torque about x, y, z takes. The first two are
    for the torque about x and y themselves.
    """

    demands: Array

    @classmethod
    def of(cls, torque: float, grip: float, torsion: float, efforts: Array) -> ReliefLimits:
        """From the torque about x or y, the floor's horizontal force times the ball's radius, its spin moment, all N m,
        and the share [n, 3] of each actuator's limit.
        """
        level, slant = np.eye(2, 3), np.array([[1.0, 1.0, 0.0], [1.0, -1.0, 0.0]]) / np.sqrt(2.0)
        spin = np.array([[0.0, 0.0, 1.0 / max(torsion, 1e-3)]])
        # The force is the torque by the ball's radius; an octagon stands for its circle.
        return cls(np.concatenate((level / min(torque, grip), slant / grip, spin, efforts)))


@attrs.frozen(eq=False)
class BallBasis:
    """Ball motions on the grid [N, m] for one axis, zero outside a window: position, rate, acceleration.

    Quintic B-splines with a knot at every ``stride``-th node: the torque that they ask for is smooth.
    """

    position: Array
    rate: Array
    acceleration: Array
    stride: int

    @classmethod
    def on(
        cls,
        step: float,
        nodes: int,
        window: float,
        knot: float,
        *,
        at_end: bool = False,
        begins_at_rest: bool = True,
    ) -> BallBasis:
        """Splines with a knot about every ``knot`` s of a window, s, that begins at the first node or ends at the last.

        They are at rest at both ends of it; unless ``begins_at_rest``, the first may begin with an acceleration.
        ``step`` is that of the grid, s.
        """
        stride = max(4 if begins_at_rest else 2, min(round(knot / step), (nodes - 1) // 6))
        pieces = max(6, min(round(window / (stride * step)), (nodes - 1) // stride))
        # In grid steps from the window's first node.
        inner = stride * np.arange(pieces + 1, dtype=float)
        knots = np.concatenate((inner[[0] * _DEGREE], inner, inner[[-1] * _DEGREE]))
        # Without the first and last three there is no position, rate or acceleration at the ends.
        used = np.eye(pieces + _DEGREE)[:, 3 if begins_at_rest else 2 : -3]
        spline = BSpline(knots, used, _DEGREE)
        first = nodes - 1 - stride * pieces if at_end else 0
        values = np.zeros((3, nodes, used.shape[1]))
        at = np.arange(stride * pieces + 1, dtype=float)
        for order in range(3):
            derivative = spline.derivative(order) if order else spline
            values[order, first : first + len(at)] = derivative(at) / step**order
        return cls(values[0], values[1], values[2], stride)

    @property
    def count(self) -> int:
        """How many motions there are."""
        return int(self.position.shape[1])

    def moving(self) -> NDArray[np.int64]:
        """The nodes of the window."""
        return np.flatnonzero(np.any(self.position != 0.0, axis=1))


@attrs.frozen(eq=False)
class BallRelief:
    """A ball motion [N, 2] in the plan's axes to be added to the given one: position, rate, acceleration."""

    position: Array
    rate: Array
    acceleration: Array


@attrs.frozen(eq=False)
class BallResponse:
    """What a basis' motions along both axes do: lean and lean rate [N, 2, 2m]."""

    basis: BallBasis
    lean: Array
    rate: Array

    @classmethod
    def of(cls, basis: BallBasis, problem: LeanProblem, solution: LeanSolution, turn: Array) -> BallResponse:
        """Response about the present solution; ``turn`` [N, 2, 2] from plan axes into ``base_footprint`` axes."""
        differences, rows = problem.differences, solution.rows
        seen = rows.by_ball_acceleration @ _along_both_axes(turn, differences.acceleration(basis.position))
        seen[[0, -1]] = 0.0
        lean = solve_bands(solution.bands, -seen.reshape(len(turn) * 2, -1)).reshape(seen.shape)
        unseen = _along_both_axes(turn, differences.whole_rate(basis.position) - basis.rate)
        rate = differences.whole_rate(lean) - answer_to_ball(rows) @ unseen
        return cls(basis, lean, rate)

    @property
    def end_rates(self) -> Array:
        """The lean rates at start and end [4, 2m]."""
        return np.concatenate((self.rate[0], self.rate[-1]))

    def torque(self, problem: LeanProblem, solution: LeanSolution, turn: Array) -> Array:
        """The drive torque [N, 3, 2m]."""
        rows = solution.rows
        push = _along_both_axes(turn, self.basis.acceleration)
        lean = np.concatenate((self.lean, self.rate), axis=1)
        forced = rows.by_ball_acceleration @ push + rows.by_lean[:, :, :4] @ lean
        acceleration = -np.linalg.solve(rows.by_lean[..., 4:6], forced)
        torque = rows.wrench_by_lean[:, 3:] @ np.concatenate((lean, acceleration), axis=1)
        moment = apply(rotation_lean(solution.lean), problem.terms.moment)
        torque += skew(moment)[:, :, :2] @ push
        return np.asarray(torque)

    def least_squares(self, wanted: Array, rows: slice) -> Array:
        """The weights [2m] of least travel and acceleration, in the mean, that give these lean rates."""
        measure = np.concatenate((self.basis.acceleration / _RATE**2, self.basis.position))
        root = np.kron(np.eye(2), np.linalg.cholesky(measure.T @ measure).T)
        scaled = np.linalg.solve(root.T, self.end_rates[rows].T).T
        best, *_ = np.linalg.lstsq(scaled, wanted, rcond=None)
        return np.asarray(np.linalg.solve(root, best))

    def motion(self, weights: Array) -> BallRelief:
        """The ball motion of these weights [2m]."""
        x, y = weights.reshape(2, -1)
        basis = self.basis
        return BallRelief(
            *(np.stack((part @ x, part @ y), axis=-1) for part in (basis.position, basis.rate, basis.acceleration))
        )


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

    ``turn`` [N, 2, 2] turns plan axes into ``base_footprint`` axes; ``present`` [N, 2] is the ball motion that the
    solution already has beyond the given one, m. Raises :class:`PlanRefused` where no ball motion within the limits
    does it.
    """
    step, nodes = problem.differences.step, len(problem.terms)

    def response(window: float, knot: float, at_end: bool) -> BallResponse:
        """What the lean makes of unit ball motions within ``window`` s of one end, with knots every ``knot`` s."""
        return BallResponse.of(BallBasis.on(step, nodes, window, knot, at_end=at_end), problem, solution, turn)

    first = response(start_window, start_window / _FEW_PIECES, at_end=False)
    weights = first.least_squares(-mismatch_start, slice(0, 2))
    begin = first.motion(weights)
    if np.hypot(*begin.position.T).max() > _SMALL:
        first = response(start_window, max(_KNOT, start_window / _MOST_PIECES), at_end=False)
        torque = first.torque(problem, solution, turn), solution.rows.torque
        weights = _least_travel(first, present, -mismatch_start, torque, limits.demands)
        begin = first.motion(weights)
    last = response(_END_WINDOW, _END_WINDOW / _FEW_PIECES, at_end=True)
    end = last.motion(last.least_squares(-mismatch_end - first.end_rates[2:] @ weights, slice(2, 4)))
    return BallRelief(begin.position + end.position, begin.rate + end.rate, begin.acceleration + end.acceleration)


def _along_both_axes(turn: Array, motion: Array) -> Array:
    """One-axis motions [N, m] as motions [N, 2, 2m] along both plan axes, turned into ``base_footprint`` axes."""
    return np.concatenate((turn[:, :, :1] * motion[:, None], turn[:, :, 1:] * motion[:, None]), axis=2)


def _least_travel(
    response: BallResponse, present: Array, wanted: Array, torque: tuple[Array, Array], demands: Array
) -> Array:
    """The weights [2m] of least largest travel with these lean rates [2] at the start, by linear programming.

    ``torque`` [N, 3, 2m] and [N, 3] of the motions and of the present solution, N m, within ``demands`` [K, 3]. Of
    these the program first hears of the first two at every other node, and of what else a solution goes beyond.
    """
    moving = response.basis.moving()
    taken, share = torque[1][moving] @ demands.T, demands @ torque[0][moving]
    # What the given motion takes by itself is not the relief's to mend.
    allowed = np.maximum(1.0, np.abs(taken))
    used = np.zeros(taken.shape, bool)
    used[::2, :2] = True
    while True:
        shares = [(share[on, k], taken[on, k], allowed[on, k]) for k, on in enumerate(used.T) if on.any()]
        weights = _least_travel_within(response, present, wanted, shares)
        beyond = (np.abs(taken + share @ weights) > allowed + _BEYOND) & ~used
        if not beyond.any():
            return weights
        used |= beyond
        used[1:] |= beyond[:-1]
        used[:-1] |= beyond[1:]


def _least_travel_within(
    response: BallResponse, present: Array, wanted: Array, shares: list[tuple[Array, Array, Array]]
) -> Array:
    """The weights [2m] of least largest travel with |taken + share @ weights| ≤ allowed for each of ``shares``.

    A little of the first two, which are those of the drive torque about x and y, is in the cost too. In mm, mrad/s and
    shares of the limits, so that the program is well scaled.
    """
    basis, m = response.basis, 2 * response.basis.count
    # The travel is smoother than the torque.
    seen = basis.moving()[:: basis.stride // 2]
    axes, across = np.kron(np.eye(2), basis.position[seen]), np.repeat(np.eye(2, 4), len(seen), axis=0)
    blocks = [(axes, 1e3 * present[seen].T.ravel(), across, np.zeros(2 * len(seen)))]
    for k, (share, taken, allowed) in enumerate(shares):
        slack = np.tile(np.eye(5, 4)[min(2 + k, 4)], (len(share), 1))
        blocks.append((1e-3 * share, taken, slack, allowed if k > 1 else 0.0 * allowed))
    signed = [(sign, *block) for block in blocks for sign in (1.0, -1.0)]
    bounds: list[tuple[float | None, float | None]] = [(None, None)] * m + [(0.0, None)] * 2
    bounds += [(0.0, float(allowed.max())) for _, _, allowed in shares[:2]]
    result = linprog(
        np.concatenate((np.zeros(m), [1.0, 1.0, _TORQUE_PRICE, _TORQUE_PRICE])),
        A_ub=np.concatenate([np.hstack((sign * rows, -slack)) for sign, rows, _, slack, _ in signed]),
        b_ub=np.concatenate([bound - sign * now for sign, _, now, _, bound in signed]),
        A_eq=np.hstack((response.rate[0], np.zeros((2, 4)))),
        b_eq=1e3 * wanted,
        bounds=bounds,
        method="highs",
    )
    if result.status != 0 or result.x is None:
        raise PlanRefused(
            "plan",
            "no ball motion within the drive's torque and the floor's friction lets it begin this soon",
            "give it more lead-in",
        )
    return np.asarray(1e-3 * result.x[:m])
