"""Which lean plans the loop takes up, and which it refuses."""

from __future__ import annotations

from functools import cache

import attrs
import numpy as np
import pytest

from ballbal_ros.balance.acceptance import check_plan
from ballbal_ros.balance.goal import Goal
from ballbal_ros.balance.guard import BALANCING, STANDBY, STOPPING, TRIPPED
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import load
from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import CONFIG, compensation, reach, shelver


def loop(state: str = BALANCING) -> BalanceLoop:
    """The demo robot's loop at the start of `reach`, as if it had come to a state."""
    parameters = load(BalanceParameters, CONFIG / "shelver" / "balance.yaml")
    made = BalanceLoop(shelver(), parameters, reach().first, reach().loads)
    made.reference.update(0.0, reach().first)
    made.guard.state = state
    return made


@cache
def plan() -> LeanPlan:
    """The lean plan of `reach`."""
    body = WholeBody(shelver(), reach().loads)
    return plan_lean(body, PlanRequest(reach().path(), lead_in=1.0), compensation())


@pytest.mark.parametrize("state", [BALANCING, STOPPING])
def test_a_plan_to_come_is_taken_while_it_balances(state: str) -> None:
    """Balancing, or in a controlled stop (whose arms stop by a plan too), a plan that fits is taken up."""
    check_plan(plan(), 2.0, 1.9, loop(state))


@pytest.mark.parametrize(
    ("words", "state", "now", "changed"),
    [
        ("came while the balance is standby", STANDBY, 0.0, {}),
        ("came while the balance is tripped", TRIPPED, 0.0, {}),
        ("starts at 2.000 s, and it is 2.100 s", BALANCING, 2.1, {}),
        ("limits.lean", BALANCING, 0.0, {"lean": plan().lean + 0.5}),
        ("turns with 2.5 rad/s; limits.heading_rate is 1", BALANCING, 0.0, {"heading_rate": plan().heading_rate - 2.5}),
        ("limits.drive_torque", BALANCING, 0.0, {"torque": plan().torque + 100.0}),
        ("rad from where the lean will be", BALANCING, 0.0, {"lean": plan().lean + 0.1}),
    ],
)
def test_a_plan_that_it_cannot_follow_is_refused(
    words: str, state: str, now: float, changed: dict[str, np.ndarray]
) -> None:
    """Not balancing, too late, too far, too strong, or starting elsewhere: refused in one line that says which."""
    with pytest.raises(PlanRefused, match=words):
        check_plan(attrs.evolve(plan(), **changed), 2.0, now, loop(state))


def test_a_goal_is_approached_and_reached() -> None:
    """A point that moves by the commanded velocity comes to the goal and its heading, and stops there."""
    goal, station, heading, fastest = Goal(1.0, -0.5, 2.0), np.zeros(2), 0.3, 0.0
    for _ in range(3000):
        vx, vy, turning = goal.velocity((station[0], station[1]), heading)
        sin, cos = np.sin(heading), np.cos(heading)
        station = station + 0.01 * np.array([cos * vx - sin * vy, sin * vx + cos * vy])
        heading += 0.01 * turning
        fastest = max(fastest, float(np.hypot(vx, vy)))
    assert (vx, vy, turning) == (0.0, 0.0, 0.0)
    assert np.hypot(*(station - [1.0, -0.5])) < 0.006 and abs(heading - 2.0) < 0.011
    assert fastest == pytest.approx(0.4)
