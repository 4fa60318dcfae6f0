"""How long a lean plan for streamed arms takes to make (`make bench`)."""

import timeit

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import PlanRequest, StartState
from ballbal_ros.motion.receding import HeldPath, RecedingPlanner
from ballbal_ros.motion.stopping import Later
from helpers.robots import compensation, reach, shelver


@pytest.mark.parametrize("delay", [0.0, 0.2, 0.5])
def test_a_streamed_plan_is_made_at_more_than_twenty_hertz(benchmark: BenchmarkFixture, delay: float):
    """In the middle of `reach`, warm-started: within 50 ms, and in at most half of the time that a plan with as short
    a lead-in takes which is made but once.
    """
    body, low, high = reach().body(), shelver().position_low, shelver().position_high
    lean = np.array(body.posture(reach().first).equilibrium_lean)
    planner, still = RecedingPlanner(body, compensation()), StartState(lean, *np.zeros((3, 2)))
    first = planner.plan(still, HeldPath.of(reach().path(), delay, 0.2, low, high), 0.0)
    lean, lean_rate, ball, ball_rate = first.at(0.04)
    start = StartState(lean, lean_rate, ball, ball_rate)
    path = HeldPath.of(Later(reach().path(), 0.04), delay, 0.2, low, high)
    benchmark(lambda: planner.plan(start, path, 0.04))
    whole = PlanRequest(reach().path(), delay)
    once = timeit.repeat(lambda: plan_lean(body, whole, compensation()), number=1, repeat=5)
    ratio = benchmark.stats.stats.min / min(once)
    benchmark.extra_info.update(ratio=ratio, per_second=1.0 / benchmark.stats.stats.median)
    assert benchmark.stats.stats.min < 0.05
    assert ratio <= 0.5
