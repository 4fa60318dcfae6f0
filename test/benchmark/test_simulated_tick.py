"""What one tick of the simulated robot costs, beside the bare steps of MuJoCo that it needs."""

import time

import mujoco
import numpy as np
from pytest_benchmark.fixture import BenchmarkFixture

from helpers.robots import reach
from helpers.simulated import robot

TICKS = 100


def test_tick_costs_a_few_bare_steps(benchmark: BenchmarkFixture) -> None:
    """With drive, servo, floor and sensors, in Python, a tick costs less than eight times its bare physics steps."""
    simulated = robot()
    simulated.support = False
    simulated.command_arms(reach().path(), 0.0)
    # In balance: arms alone make it fall within a second, which is not what is to be timed.
    start = simulated.data.qpos.copy()
    effort = np.zeros(3)

    def ticks() -> None:
        for _ in range(TICKS):
            simulated.step(effort)
        simulated.data.qpos[:], simulated.data.qvel[:] = start, 0.0
        mujoco.mj_step1(simulated.world.model, simulated.data)

    bare = robot()
    bare.support = False
    model, data = bare.world.model, bare.data

    def steps() -> None:
        for _ in range(TICKS):
            mujoco.mj_step(model, data, nstep=2)

    best = {"ticks": np.inf, "steps": np.inf}
    for _ in range(30):
        for name, run in (("ticks", ticks), ("steps", steps)):
            begin = time.perf_counter()
            run()
            best[name] = min(best[name], time.perf_counter() - begin)
        data.qpos[:], data.qvel[:] = start, 0.0
    benchmark.extra_info["tick_us"] = 1e6 * best["ticks"] / TICKS
    benchmark.extra_info["ratio_to_bare_steps"] = best["ticks"] / best["steps"]
    benchmark.pedantic(ticks, rounds=5)
    assert not simulated.fell
    assert best["ticks"] < 8.0 * best["steps"]
