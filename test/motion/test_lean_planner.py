"""The lean planner against SciPy's boundary-value solver, Pinocchio's momentum, statics, and symmetries."""

from collections.abc import Callable

import attrs
import numpy as np
import pytest
from numpy.typing import NDArray

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.lean_solver import LeanProblem, equilibrium_lean, solve_lean
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import BallMotion, HandWrench, PlanRequest, StartState
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY, OutsideMotion, UpperBodyTerms
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from helpers.balance_check import unbalanced_moment
from helpers.boundary_value import bounded_lean
from helpers.robots import compensation, posture, reach, shelver

TIMES = np.linspace(0.0, 3.0, 301)


def planner(**settings: float) -> CompensationParameters:
    """The demo robot's planner with other settings."""
    return attrs.evolve(compensation(), planner=attrs.evolve(compensation().planner, **settings))


def plan(lead_in: float, parameters: CompensationParameters | None = None, **request: object) -> LeanPlan:
    """A plan for `reach`."""
    asked = PlanRequest(arms=reach().path(), lead_in=lead_in, **request)
    return plan_lean(reach().body(), asked, parameters or compensation())


def still_arms() -> ArmPath:
    return ArmPath.still(reach().first, 0.5)


def smooth_step(times: NDArray[np.float64], duration: float) -> tuple[NDArray[np.float64], ...]:
    """From 0 to 1 and its two derivatives [N]."""
    s = np.clip(times / duration, 0.0, 1.0)
    return (
        10 * s**3 - 15 * s**4 + 6 * s**5,
        (30 * s**2 - 60 * s**3 + 30 * s**4) / duration,
        (60 * s - 180 * s**2 + 120 * s**3) / duration**2,
    )


def test_the_bounded_lean_is_that_of_scipys_solver():
    """With ample lead-in the plan agrees with scipy.integrate.solve_bvp on the same equations to 0.01 degree."""
    ours = plan(3.0, planner(tail=3.0))
    reference = bounded_lean(shelver(), reach().loads, reach().path(), 3.0, ours.duration)(ours.times)
    assert np.degrees(np.abs(reference[:2].T - ours.lean).max()) < 0.01
    assert np.degrees(np.abs(reference[2:].T - ours.lean_rate).max()) < 0.1
    assert np.degrees(np.abs(ours.lean[:, 1]).max()) > 5.0
    assert np.abs(ours.ball).max() < 1e-4


@pytest.mark.parametrize("lead_in", [0.0, 0.2, 0.5, 1.6])
def test_gravity_gives_the_moment_that_the_planned_motion_needs(lead_in: float):
    """Weighed by Pinocchio between the plan's nodes, lean, arms and ball change their momentum as gravity does.

    Without the lean the arms would ask for some 60 N m; where their jerk begins at once a node's share of it is left.
    """
    at, missing = unbalanced_moment(shelver(), reach().loads, reach().path(), plan(lead_in))
    assert np.abs(missing).max() < 1.0
    assert np.sqrt(np.mean(missing**2)) < 0.1
    assert np.abs(missing.sum(axis=0) * (at[1] - at[0])).max() < 0.02


def test_gravity_gives_the_moment_on_a_ball_that_rolls_and_turns():
    """The same holds for a ball that rolls one metre to the front left while heading and arms turn."""
    step = np.stack(smooth_step(TIMES, 2.5))
    goal = np.array([1.0, 0.4, 1.0])
    ball = BallMotion(TIMES + 1.6, *(each[:, None] * goal for each in step))
    made = plan(2.0, ball=ball)
    np.testing.assert_allclose(made.ball[-1], goal[:2], atol=1e-3)
    assert made.heading[-1] == pytest.approx(1.0)
    assert np.abs(made.ball[160 : 160 + len(TIMES)] - ball.position[:, :2]).max() < 1e-3
    at, missing = unbalanced_moment(shelver(), reach().loads, reach().path(), made)
    assert np.abs(missing).max() < 1.0
    assert np.abs(missing.sum(axis=0) * (at[1] - at[0])).max() < 0.03
    # It leans towards where it is to go, and back to stop there (common practice, no source).
    assert made.lean[180:260, 1].mean() > made.lean[300:400, 1].mean() + 0.03


def test_plans_begin_and_end_at_rest_in_equilibrium():
    """A plan begins and ends at rest, with the mass centre above the ball, and the ball at its station."""
    for lead_in in (0.1, 1.6):
        made = plan(lead_in)
        for end, position in ((0, reach().first), (-1, reach().last)):
            lean = reach().body().posture(position).equilibrium_lean
            np.testing.assert_allclose(made.lean[end], lean, atol=1e-9)
            np.testing.assert_allclose(made.lean_rate[end], 0.0, atol=2e-5)
            np.testing.assert_allclose(made.ball[end], 0.0, atol=1e-12)
            np.testing.assert_allclose(made.ball_rate[end], 0.0, atol=1e-12)


def mirrored(terms: UpperBodyTerms) -> UpperBodyTerms:
    """The terms of the robot's mirror image in the x-z plane."""
    vector, pseudo = np.array([1.0, -1.0, 1.0]), np.array([-1.0, 1.0, -1.0])
    matrix = np.outer(vector, vector)
    return attrs.evolve(
        terms,
        moment=terms.moment * vector,
        moment_rate=terms.moment_rate * vector,
        moment_acceleration=terms.moment_acceleration * vector,
        inertia=terms.inertia * matrix,
        inertia_rate=terms.inertia_rate * matrix,
        angular=terms.angular * pseudo,
        angular_rate=terms.angular_rate * pseudo,
    )


def test_a_mirror_image_leans_in_the_mirror():
    """The bounded lean of the mirror image of a one-armed motion has the same pitch and the opposite roll."""
    times = np.arange(0.0, 4.0, 0.01)
    last = posture({"left_shoulder_pitch": -1.2, "left_shoulder_roll": 0.4}, reach().first)
    arms = ArmPath.through(np.array([0.0, 0.8]), np.stack((reach().first, last)), *np.zeros((2, 2, 12)))
    terms = reach().body().terms(*arms.sample(times - 1.6))
    leans = []
    for each in (terms, mirrored(terms)):
        given = OutsideMotion.at_rest(len(times))
        problem = LeanProblem.of(each, given, 0.01, shelver().parameters.ball.radius, shelver().ball_apparent_mass)
        ends = (equilibrium_lean(problem, node, each.static_lean()[node]) for node in (0, -1))
        leans.append(solve_lean(problem, *ends).lean)
    assert np.ptp(leans[0][:, 0]) > 0.01
    np.testing.assert_allclose(leans[1], leans[0] * np.array([-1.0, 1.0]), atol=1e-10)


@pytest.mark.parametrize("heading", [0.7, -2.0, 3.1])
def test_the_heading_does_not_matter(heading: float):
    """With the heading turned by any angle the plan is the same, and says that heading."""
    turned = np.tile([0.0, 0.0, heading], (2, 1))
    ball = BallMotion(np.array([0.0, 1.0]), turned, 0.0 * turned, 0.0 * turned)
    ours, there = plan(0.2), plan(0.2, ball=ball)
    for name in ("lean", "lean_rate", "ball", "torque"):
        np.testing.assert_allclose(getattr(there, name), getattr(ours, name), atol=1e-9, err_msg=name)
    np.testing.assert_allclose(there.heading, heading)


@pytest.mark.parametrize("lead_in", [0.0, 0.6])
def test_a_plan_begins_where_the_robot_is(lead_in: float):
    """From a state that moves, lean, ball and their rates begin there, and the plan ends at the station."""
    rest = np.array(reach().body().posture(reach().first).equilibrium_lean)
    start = StartState(
        lean=rest + [0.01, -0.015],
        lean_rate=np.array([-0.03, 0.06]),
        ball=np.array([0.02, -0.01]),
        ball_rate=np.array([-0.05, 0.04]),
    )
    made = plan(lead_in, start=start)
    np.testing.assert_allclose(made.lean[0], start.lean, atol=1e-12)
    np.testing.assert_allclose(made.lean_rate[0], start.lean_rate, atol=2e-5)
    np.testing.assert_allclose(made.ball[0], start.ball, atol=1e-12)
    np.testing.assert_allclose(made.ball_rate[0], start.ball_rate, atol=1e-12)
    np.testing.assert_allclose(made.ball[-1], 0.0, atol=1e-12)
    at, missing = unbalanced_moment(shelver(), reach().loads, reach().path(), made)
    assert np.abs(missing).max() < 1.5
    assert np.abs(missing.sum(axis=0) * (at[1] - at[0])).max() < 0.03


def test_a_load_that_is_announced_is_leant_for_before_it_comes():
    """Before an announced load comes the lean is on its way; long before and after, it is the equilibrium's."""
    body, load = WholeBody(shelver()), Load("left_hand", 1.5, [0.0, 0.0, -0.05])
    stretched = posture({"left_shoulder_pitch": -1.4})
    request = PlanRequest(ArmPath.still(stretched, 0.5), 0.0, loads=[(2.0, load)])
    made = plan_lean(body, request, planner(tail=2.5))
    without = np.array(body.posture(stretched).equilibrium_lean)
    laden = np.array(WholeBody(shelver(), [load]).posture(stretched).equilibrium_lean)
    np.testing.assert_allclose(made.lean[[0, -1]], [without, laden], atol=1e-8)
    # By the symmetry of the bounded solution about a step it is half-way when the load comes.
    half = (made.lean[200, 1] - without[1]) / (laden[1] - without[1])
    assert half == pytest.approx(0.5, abs=0.1)
    assert body.loads == {}
    assert plan_lean(body, PlanRequest(ArmPath.still(stretched, 0.5), 0.0), compensation()).lean[-1] == pytest.approx(
        without
    )


def test_a_steady_pull_is_leant_against_as_statics_says():
    """Under a steady pull and twist on a hand the plan ends where gravity's moment about the contact balances them."""
    force, moment = np.array([[0.0] * 3, [-18.0, 7.0, 4.0]]), np.array([[0.0] * 3, [0.5, -1.0, 2.0]])
    wrench = HandWrench("left_hand", np.array([1.5, 2.0]), force, moment)
    made = plan_lean(reach().body(), PlanRequest(still_arms(), 0.0, wrenches=[wrench]), planner(tail=2.5))
    rotation, contact = rotation_lean(made.lean[-1]), np.array([0.0, 0.0, -shelver().parameters.ball.radius])
    body = reach().body()
    center = rotation @ body.center_of_mass(reach().first)
    hand = rotation @ body.hand_position("left_hand", reach().first)
    about = (
        np.cross(center - contact, [0.0, 0.0, -body.mass * GRAVITY]) + np.cross(hand - contact, force[1]) + moment[1]
    )
    np.testing.assert_allclose(about[:2], 0.0, atol=1e-6)
    assert np.abs(made.lean[-1] - made.lean[0]).max() > 0.02
    assert np.abs(made.ball).max() < 0.002


def test_the_feedforward_at_rest_holds_the_lean():
    """In equilibrium, the mass centre above the ball, the drive gives no torque about x and y."""
    made = plan(1.6)
    np.testing.assert_allclose(made.torque[[0, -1], :2], 0.0, atol=0.05)


def impossible() -> list[Callable[[], LeanPlan]]:
    thrown = attrs.evolve(reach(), duration=0.02)
    return [
        lambda: plan_lean(reach().body(), PlanRequest(thrown.path(), 1.0), compensation()),
        lambda: plan(0.3, start=StartState(np.array([0.0, 0.5]), np.array([0.0, 3.0]), np.zeros(2), np.zeros(2))),
    ]


@pytest.mark.parametrize("make", impossible(), ids=["thrown arms", "falling start"])
def test_the_impossible_is_refused_in_one_line(make: Callable[[], LeanPlan]):
    """A motion or a start far beyond what the robot can do is refused in one line that says why."""
    with pytest.raises(PlanError) as caught:
        make().refuse_beyond_limits("plan")
    assert "\n" not in str(caught.value)
    assert "; " in str(caught.value)
