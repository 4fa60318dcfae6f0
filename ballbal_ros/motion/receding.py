"""Lean plans for arms that move without a plan: made anew many times a second from what is known of the next moments.

What the arms will do is known for a preview (a delay line's content; nothing, where they are merely measured). Beyond
it they are taken to come to rest at once, smoothly. For that motion the bounded lean is found as for any plan; what
the present lean rate lacks of it the ball must make up, by a motion that brings it back to its station (see
:mod:`~ballbal_ros.motion.relief`). Many times a second this has to be quick, so the least largest travel is
found approximately: the p-norm of travel and of torque use is minimised by Newton's method, from the mean square on,
with the lean rate as equality (the norm of order ten is within a few percent of the largest value). Newton's method for
the lean starts from the plan before.
"""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import ball_to_station, made_plan, relief_limits
from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, equilibrium_lean, solve_lean
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import StartState
from ballbal_ros.motion.relief import BallBasis, BallResponse
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.motion.stopping import stop_path
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from ballbal_ros.robot.whole_body import WholeBody

_BACK, _TAIL = 1.2, 0.9
_PIECES = 20
_ORDERS = (2, 4, 6, 10, 10, 10)
# In mm: travel that counts like the whole torque limit, and what is always counted, so that nothing is left undecided.
_TORQUE_TRAVEL, _LEAST = 10.0, 0.5
# The mean square of the acceleration counts a little, as that of travel at this rate, rad/s.
_RATE, _SMOOTH = 8.0, 3e-3
_JOINED = 1e-4
_STILL = 1e-3


@attrs.frozen(eq=False)
class HeldPath:
    """A path that is known until ``known``, s (which may be past), and then comes to rest smoothly in ``stop`` s."""

    path: JointPath
    known: float
    stop: float
    _rest: JointPath

    @classmethod
    def of(cls, path: JointPath, known: float, stop: float, low: Array, high: Array) -> HeldPath:
        """Hold a path beyond ``known``, s, within the joints' limits [n]."""
        position, rate, acceleration = (values[0] for values in path.sample(np.array([known])))
        return cls(path, known, stop, stop_path(position, rate, acceleration, stop, low, high))

    @property
    def duration(self) -> float:
        """Until it rests, s."""
        return max(0.0, self.known + self.stop)

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [N, n] at times [N], s."""
        before, after = self.path.sample(np.minimum(times, self.known)), self._rest.sample(times - self.known)
        later = (times > self.known)[:, None]
        position, rate, acceleration = (np.where(later, b, a) for a, b in zip(before, after, strict=True))
        return position, rate, acceleration


class RecedingPlanner:
    """Makes lean plans one after the other, each from where the one before will be. Pure; keeps a warm start.

    ``step``: the grid's, s; plans should follow each other by a multiple of it.
    """

    def __init__(self, body: WholeBody, parameters: CompensationParameters, step: float = 0.02) -> None:
        self.body, self.parameters, self.step = body, parameters, step
        self._lean: Array | None = None
        self._before = 0.0

    def plan(self, start: StartState, arms: HeldPath, now: float) -> LeanPlan:
        """The lean plan from ``now``, s, on; ``arms`` and plan are timed from there.

        Raises :class:`~ballbal_ros.errors.PlanError` where no bounded lean can be found. Lean, lean rate, ball and ball
        rate begin as ``start`` has them.
        """
        description = self.body.description
        nodes = int(np.ceil((arms.duration + _BACK + _TAIL) / self.step - 1e-9)) + 1
        times: Array = self.step * np.arange(nodes, dtype=float)
        terms = self.body.terms(*arms.sample(times))
        radius, apparent_mass = description.parameters.ball.radius, description.ball_apparent_mass
        turn = np.broadcast_to(np.eye(2), (nodes, 2, 2))
        window = min(arms.duration + _BACK, float(times[-1]) - 0.2)
        ball = ball_to_station(start, times, window)
        still = LeanProblem.of(terms, OutsideMotion.at_rest(nodes), self.step, radius, apparent_mass)
        problem = still.with_ball(turn, *ball)
        end = equilibrium_lean(problem, nodes - 1, terms.static_lean()[-1])
        solution = solve_lean(problem, start.lean, end, self._guess(times, now))
        basis = BallBasis.on(self.step, nodes, window, window / _PIECES, begins_at_rest=False)
        limits = relief_limits(description, self.parameters, terms).demands[:2]
        for attempt in range(3):
            lacking = start.lean_rate - solution.lean_rate[0]
            if np.abs(lacking).max() < _JOINED:
                break
            response = BallResponse.of(basis, problem, solution, turn)
            weights = self._weights(response, ball[0], lacking, limits, problem, solution, turn, attempt == 0)
            added = response.motion(weights)
            more = added.position, added.rate, added.acceleration
            ball = [array + part for array, part in zip(ball, more, strict=True)]
            problem = still.with_ball(turn, *ball)
            solution = solve_lean(problem, start.lean, end, solution.lean + response.lean @ weights)
        self._lean, self._before = solution.lean, now
        none = [np.zeros((nodes, 3)) for _ in range(3)]
        plan = made_plan(description, self.parameters, 0.0, times, (problem, solution), ball, none)
        plan = attrs.evolve(plan, ball=plan.ball - plan.ball[0])
        # Nothing moves beyond the window: the rest has only kept the lean bounded.
        return plan.until(window + self.step)

    def _guess(self, times: Array, now: float) -> Array | None:
        """The plan before, carried on; None where there is none that reaches here."""
        before, since = self._lean, now - self._before
        if before is None or not 0.0 <= since < 0.5 * times[-1]:
            return None
        own = self.step * np.arange(len(before))
        return np.stack([np.interp(times + since, own, column) for column in before.T], axis=1)

    def _weights(
        self,
        response: BallResponse,
        present: Array,
        lacking: Array,
        limits: Array,
        problem: LeanProblem,
        solution: LeanSolution,
        turn: Array,
        whole: bool,
    ) -> Array:
        """The weights [2m] of the ball motions that make up for the lean rates [2] lacking at the start.

        ``whole``: with the least largest travel, from scratch; otherwise a small correction, in the mean square.
        """
        basis = response.basis
        if not whole:
            return response.least_squares(lacking, slice(0, 2))
        # At the first node the ball has not moved yet, but it is driven.
        moving = np.arange(int(basis.moving()[-1]) + 1)
        size = 2 * basis.count
        axes: Array = np.asarray(np.kron(np.eye(2), basis.position[moving]), dtype=np.float64)
        travel = 1e3 * axes, 1e3 * present[moving].T.ravel()
        torque = (
            (limits @ response.torque(problem, solution, turn)[moving]).reshape(-1, size),
            (solution.rows.torque[moving] @ limits.T).ravel(),
        )
        also = np.kron(np.eye(2), _SMOOTH * 1e3 / _RATE**2 * basis.acceleration[moving])
        return least_norm(travel, torque, also.T @ also, (response.rate[0], lacking))


def least_norm(
    travel: tuple[Array, Array], torque: tuple[Array, Array], also: Array, equal: tuple[Array, Array]
) -> Array:
    """The weights w [m] of about the least largest travel, mm, with shares of the torque limit up to about one.

    ``travel`` and ``torque``: rows [N, m] and what there is without w [N]; ``equal``: rows [2, m] and what they must
    give [2]. w' ``also`` w [m, m] is added to the mean square. The order of the norm rises step by step; each step is
    Newton's for its order, and in each the whole torque limit counts as much as the largest travel does.
    """
    size, ties = len(also), len(equal[1])
    left = np.zeros((size + ties, size + ties))
    left[size:, :size], left[:size, size:] = equal[0], equal[0].T
    weights = np.zeros(size)
    for order in _ORDERS:
        value, share = travel[1] + travel[0] @ weights, torque[1] + torque[0] @ weights
        counts = max(_TORQUE_TRAVEL, float(np.abs(value).max()))
        rows, values = np.concatenate((travel[0], counts * torque[0])), np.concatenate((value, counts * share))
        top = max(float(np.abs(values).max()), 1e-6)
        weighed = rows * ((np.abs(values) / top) ** (order - 2) + _LEAST / top)[:, None]
        left[:size, :size] = (order - 1) * (weighed.T @ rows) + also
        right = np.concatenate((-(weighed.T @ values) - also @ weights, equal[1] - equal[0] @ weights))
        weights = weights + np.linalg.solve(left, right)[:size]
    return weights


def lean_kick(body: WholeBody, position: Array, rate: Array, lean: Array) -> Array:
    """The change of lean rate [2], rad/s, that comes with one of the arms' rates [n] at a position [n] and lean [2].

    The moment about the contact stays what it was, so the momentum about it does: M φ' + H(q') = const.
    """
    if np.abs(rate).max() < _STILL:
        return np.zeros(2)
    at = body.terms(position[None], rate[None], np.zeros((1, len(rate))))
    radius, apparent_mass = body.description.parameters.ball.radius, body.description.ball_apparent_mass
    none, rotation = np.zeros((1, 2)), rotation_lean(lean)
    rows = balance_rows(at, OutsideMotion.at_rest(1), lean[None], none, none, radius, apparent_mass)
    turning, going = rotation @ at.angular[0], rotation @ at.moment_rate[0]
    momentum = np.array([turning[0] - radius * going[1], turning[1] + radius * going[0]])
    return np.asarray(-np.linalg.solve(rows.by_lean[0, :, 4:6], momentum))
