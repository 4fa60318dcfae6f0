"""How long planning and kinematics take, beside what they are measured against (`make bench`)."""

import timeit
from collections.abc import Callable

import numpy as np
import pinocchio as pin
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.lean_solver import LeanProblem, equilibrium_lean, solve_lean
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.robot.balance_rows import OutsideMotion
from helpers.boundary_value import bounded_lean
from helpers.robots import compensation, reach, shelver

LEAD_IN, LENGTH, STEP = 1.6, 4.0, 0.01


def best(call: Callable[[], object], repeat: int, number: int = 1) -> float:
    """The shortest time of one call, s: what the machine's other work adds is left out."""
    return min(timeit.repeat(call, number=number, repeat=repeat)) / number


@pytest.mark.parametrize(("lead_in", "most"), [(1.6, 0.060), (0.5, 0.150), (0.2, 0.150), (0.0, 0.150)])
def test_a_plan_is_quickly_made(benchmark: BenchmarkFixture, lead_in: float, most: float):
    """`reach` on a 10 ms grid with 12 arm joints is planned in 60 ms with full lead-in, in 150 ms with a short one."""
    body, request = reach().body(), PlanRequest(reach().path(), lead_in)
    plan = benchmark(lambda: plan_lean(body, request, compensation()))
    assert len(plan.times) >= 241
    assert benchmark.stats.stats.min < most


def solved_by_newton() -> np.ndarray:
    """The bounded lean as the planner finds it: terms, equilibria, banded Newton; no ball motion."""
    body, times = reach().body(), STEP * np.arange(round(LENGTH / STEP) + 1)
    terms = body.terms(*reach().path().sample(times - LEAD_IN))
    radius, outside = shelver().parameters.ball.radius, OutsideMotion.at_rest(len(times))
    problem = LeanProblem.of(terms, outside, STEP, radius, shelver().ball_apparent_mass)
    ends = [equilibrium_lean(problem, node, terms.static_lean()[node]) for node in (0, -1)]
    return solve_lean(problem, *ends).lean


def test_the_planner_is_many_times_faster_than_scipys_solver(benchmark: BenchmarkFixture):
    """plan_lean takes less than a fifteenth of solve_bvp on the same equations; the leans agree to 0.01°.

    solve_bvp has Pinocchio's recursion for the equations, starts on the planner's grid, and has a tolerance that makes
    it about as accurate as the planner.
    """
    nodes = round(LENGTH / STEP) + 1

    def reference() -> Callable[[np.ndarray], np.ndarray]:
        return bounded_lean(shelver(), reach().loads, reach().path(), LEAD_IN, LENGTH, nodes)

    lean = reference()(STEP * np.arange(nodes))[:2].T
    assert np.degrees(np.abs(lean - solved_by_newton()).max()) < 0.01
    slow = best(reference, repeat=3)
    body, request = reach().body(), PlanRequest(reach().path(), LEAD_IN)
    benchmark(lambda: plan_lean(body, request, compensation()))
    ratio = slow / benchmark.stats.stats.min
    benchmark.extra_info.update(solve_bvp_seconds=slow, times_faster=ratio)
    assert ratio >= 15.0


def test_a_kinematics_update_costs_little_over_pinocchio(benchmark: BenchmarkFixture):
    """Mass, mass centre and inertia of a posture take at most twice the bare call of ccrba, which has them all."""
    body = reach().body()
    model = shelver().model.copy()
    data, q, v = model.createData(), pin.neutral(model), np.zeros(model.nv)
    positions = np.random.default_rng(1).uniform(-1.0, 1.0, size=(50, shelver().joint_count))

    def bare() -> None:
        for position in positions:
            q[7:] = position
            pin.ccrba(model, data, q, v)

    def ours() -> None:
        for position in positions:
            body.posture(position)

    benchmark(ours)
    plain = best(bare, repeat=20)
    benchmark.extra_info.update(bare_microseconds=1e6 * plain / 50, ratio=benchmark.stats.stats.min / plain)
    assert benchmark.stats.stats.min <= 2.0 * plain
