"""Arms that swing on and on: the loop and the simulated robot in-process, for as long as wanted."""

from __future__ import annotations

import gc
import math

import attrs
import numpy as np

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.motion.spline import ArmPath, FollowedPath, path_through_waypoints
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.robot import SimulatedRobot
from helpers.rehearsing import files, story
from helpers.resident import resident
from helpers.robots import reach

_SETTLED = 3.0


@attrs.frozen
class Soaked:
    """What came of it: whether it fell, distance of the ball from its place at each rest (mm), memory gained (MB)."""

    fell: bool
    rests: list[float]
    grown: float


def _swing(first: np.ndarray, last: np.ndarray) -> tuple[ArmPath, LeanPlan, float]:
    robot, what = files(), story("reach")
    path = path_through_waypoints([0.0, reach().duration], np.stack((first, last)))
    arm, lead_in = robot.description.parameters.arm, robot.compensation.planner.lead_in
    request = PlanRequest(arms=FollowedPath.of(path, arm.servo, arm.servo_bandwidth), lead_in=lead_in)
    return path, plan_lean(WholeBody(robot.description, what.start_loads), request, robot.compensation), lead_in


def soak(span: float, warm_up: float, seed: int = 0) -> Soaked:
    """Swing the arms of `reach` forth and back for ``span`` s of simulated time; memory counts from ``warm_up`` s."""
    robot, what = files(), story("reach")
    forth, back = _swing(reach().first, reach().last), _swing(reach().last, reach().first)
    world = SimulatedRobot(robot.description, robot.simulation, reach().first, what.start_loads, seed, None)
    loop = BalanceLoop(robot.description, robot.balance, reach().first, what.start_loads)
    loop.supported = True
    next_swing, swings, before = _SETTLED, 0, 0.0
    station = np.zeros(2)
    rests: list[float] = []
    for tick in range(round(span / loop.period)):
        now = tick * loop.period
        if now >= next_swing:
            here = world.ball_position[:2].copy()
            station = here if not swings else station
            rests.append(1e3 * math.hypot(*(here - station)))
            path, plan, lead_in = back if swings % 2 else forth
            start = now + 0.1
            loop.add_plan(start, plan)
            world.command_arms(path, start + lead_in)
            next_swing, swings = start + plan.duration + 0.1, swings + 1
        if tick == round(warm_up / loop.period):
            gc.collect()
            before = resident()
        effort = loop.tick(world.measurement())
        if world.support and loop.guard.state == BALANCING:
            world.support = loop.supported = False
        world.step(effort)
        if world.fell:
            break
    gc.collect()
    return Soaked(world.fell, rests, resident() - before)
