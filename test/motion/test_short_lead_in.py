"""With less lead-in than it wants, the planner comes near the least ball travel that any controller could reach."""

import pytest

from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import PlanRequest
from helpers.least_travel import least_travel
from helpers.robots import compensation, reach


def planned_travel(lead_in: float) -> float:
    """The planned ball travel of `reach`, m, within every limit."""
    made = plan_lean(reach().body(), PlanRequest(reach().path(), lead_in), compensation())
    made.refuse_beyond_limits("reach")
    (travel,) = (use.value for use in made.uses if use.name == "ball travel")
    return 1e-3 * travel


@pytest.mark.parametrize("lead_in", [0.0, 0.2, 0.5])
def test_the_planned_travel_is_near_the_least_possible(lead_in: float):
    """The planned travel is at most 1.25 times the least possible with 40 N m, and not below it.

    Below the bound (but for its linearisation) it would be no motion of this robot.
    """
    bound = least_travel(reach().body(), reach().path(), lead_in)
    assert 0.97 * bound < planned_travel(lead_in) < 1.25 * bound


def test_more_lead_in_takes_less_travel():
    """Each bit of lead-in saves ball travel, down to nothing that would be seen over the sensors' noise."""
    travels = [planned_travel(lead_in) for lead_in in (0.0, 0.1, 0.2, 0.35, 0.5, 0.75, 1.0, 1.6)]
    assert travels == sorted(travels, reverse=True)
    assert travels[-1] < 5e-4


def test_the_bound_falls_with_lead_in_and_with_torque():
    """The yardstick itself: more lead-in or more torque never asks for more travel."""
    body, path = reach().body(), reach().path()
    bounds = [least_travel(body, path, lead_in, step=0.025) for lead_in in (0.0, 0.25, 1.0)]
    assert bounds == sorted(bounds, reverse=True)
    assert bounds[2] < 0.1 * bounds[0]
    assert least_travel(body, path, 0.0, torque_limit=25.0, step=0.025) > 1.005 * bounds[0]
