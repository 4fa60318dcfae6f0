"""A lean plan's table goes through its nodes and is smooth; its uses say what floor and drive really have to give."""

import attrs
import numpy as np
import pytest

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_plan import REFERENCE_WIDTH, LeanPlan, Prediction, Use, predicted_uses
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import BallMotion, PlanRequest
from ballbal_ros.robot.balance_rows import GRAVITY
from helpers.robots import compensation, reach, shelver

LEAN, LEAN_RATE, BALL, BALL_RATE = slice(0, 2), slice(2, 4), slice(4, 6), slice(6, 8)
TORQUE, LEAN_ACCELERATION, BALL_ACCELERATION = slice(10, 13), slice(13, 15), slice(15, 17)


@pytest.fixture(scope="module")
def plan() -> LeanPlan:
    """`reach` with a short lead-in, so that the ball moves too, while the heading turns a little."""
    times = np.linspace(0.0, 1.6, 161)
    s = times[:, None] / 1.6 * [0.0, 0.0, 1.0]
    turned = 0.2 * s**3 * (10 - 15 * s + 6 * s**2)
    turning = 6.0 * s**2 * (1 - s) ** 2 / 1.6
    ball = BallMotion(times, turned, turning, 12.0 * s * (1 - s) * (1 - 2 * s) / 1.6**2)
    return plan_lean(reach().body(), PlanRequest(reach().path(), 0.3, ball=ball), compensation())


def test_the_table_goes_through_the_nodes(plan: LeanPlan):
    """At the grid's own times the table has the plan's values, rates, torques and accelerations."""
    table = plan.table(float(plan.times[1]))
    assert table.shape == (len(plan.times), REFERENCE_WIDTH)
    for columns, values in (
        (LEAN, plan.lean),
        (LEAN_RATE, plan.lean_rate),
        (BALL, plan.ball),
        (BALL_RATE, plan.ball_rate),
        (TORQUE, plan.torque),
        (LEAN_ACCELERATION, plan.lean_acceleration),
        (BALL_ACCELERATION, plan.ball_acceleration),
    ):
        np.testing.assert_allclose(table[:, columns], values, atol=1e-10)
    np.testing.assert_allclose(table[:, 8], plan.heading, atol=1e-12)
    np.testing.assert_allclose(table[:, 9], plan.heading_rate, atol=1e-12)


def test_between_the_nodes_the_table_is_twice_differentiable(plan: LeanPlan):
    """Rates are the positions' derivatives everywhere, and change by accelerations like those of the nodes."""
    period = 1e-4
    table = plan.table(period)
    for value, rate, at_nodes in (
        (LEAN, LEAN_RATE, plan.lean_acceleration),
        (BALL, BALL_RATE, plan.ball_acceleration),
        (slice(8, 9), slice(9, 10), plan.heading_acceleration[:, None]),
    ):
        middle = 0.5 * (table[1:, rate] + table[:-1, rate])
        np.testing.assert_allclose(np.diff(table[:, value], axis=0) / period, middle, atol=1e-5)
        acceleration = np.diff(table[:, rate], axis=0) / period
        every = round(float(plan.times[1]) / period)
        np.testing.assert_allclose(acceleration[::every], at_nodes[:-1], atol=0.02 * np.abs(at_nodes).max() + 0.02)


@pytest.mark.parametrize("period", [0.002, 0.003, 0.007])
def test_the_table_covers_the_plan_at_any_period(plan: LeanPlan, period: float):
    """At any loop period the table has a row for each tick within the plan, and agrees with a finer one."""
    table, fine = plan.table(period), plan.table(0.001)
    assert len(table) == int(plan.duration / period + 1e-9) + 1
    np.testing.assert_allclose(table, fine[:: round(period * 1000)][: len(table)], atol=1e-9)


def test_torque_can_be_read_ahead(plan: LeanPlan):
    """With `torque_ahead` the torque alone is that of a later time, and stays what it is past the end."""
    now, ahead = plan.table(0.002), plan.table(0.002, torque_ahead=0.006)
    np.testing.assert_allclose(ahead[:-3, TORQUE], now[3:, TORQUE], atol=1e-9)
    np.testing.assert_allclose(ahead[-3:, TORQUE], np.tile(plan.torque[-1], (3, 1)), atol=1e-9)
    np.testing.assert_array_equal(np.delete(ahead, TORQUE, axis=1), np.delete(now, TORQUE, axis=1))


def test_the_uses_are_the_peaks_of_the_plan(plan: LeanPlan):
    """Peak lean, torque, travel and speed are the largest of the plan's own values, against the robot's limits."""
    uses = {use.name: use for use in plan.uses}
    assert uses["peak lean"].value == pytest.approx(np.degrees(np.hypot(*plan.lean.T).max()))
    assert uses["peak lean"].limit == pytest.approx(np.degrees(shelver().parameters.limits.lean))
    assert uses["drive torque"].value == pytest.approx(np.abs(plan.torque[:, :2]).max())
    assert uses["ball travel"].value == pytest.approx(1e3 * np.hypot(*plan.ball.T).max())
    assert uses["ball speed"].value == pytest.approx(np.hypot(*plan.ball_rate.T).max())
    assert all(use.ok for use in plan.uses)
    assert uses["torsion use"].value > 0.01


def still(samples: int, **changes: np.ndarray) -> Prediction:
    """A robot that stands upright and still on its ball."""
    mass = reach().body().mass
    none = np.zeros((samples, 2))
    stands = Prediction(
        np.zeros((samples, 3)), np.tile([0.0, 0.0, mass * GRAVITY], (samples, 1)), none, none, none, none
    )
    return attrs.evolve(stands, **changes)


def uses_of(prediction: Prediction) -> dict[str, float]:
    return {use.name: use.value for use in predicted_uses(prediction, shelver(), compensation().acceptance)}


def test_floor_and_drive_give_what_the_motion_takes():
    """Friction use is the force on body and ball over friction times weight; efforts are the drive's."""
    rng, mass, ball = np.random.default_rng(3), reach().body().mass, shelver().parameters.ball
    push, acceleration, torque, lean = rng.normal(size=(4, 5, 2))
    force = np.column_stack((30.0 * push, np.full(5, mass * GRAVITY)))
    torque = np.column_stack((20.0 * torque, np.zeros(5)))
    uses = uses_of(still(5, force=force, ball_acceleration=acceleration, torque=torque))
    sideways = np.hypot(*(force[:, :2] + ball.mass * acceleration).T)
    weight = (mass + ball.mass) * GRAVITY
    assert uses["friction use"] == pytest.approx(sideways.max() / (shelver().parameters.floor.friction * weight))
    effort = [np.abs(shelver().drive.effort(each) / shelver().drive.effort_limit).max() for each in torque]
    assert uses["actuator effort use"] == pytest.approx(max(effort))
    # A torque about the body's own leaning axis takes the same efforts as it does upright.
    tilted = np.array([[0.0, 0.3]])
    about_body = np.array([[np.cos(0.3) * 10.0, 0.0, -np.sin(0.3) * 10.0]])
    leant, upright = still(1, lean=tilted, torque=about_body), still(1, torque=np.array([[10.0, 0.0, 0.0]]))
    assert uses_of(leant)["actuator effort use"] == pytest.approx(uses_of(upright)["actuator effort use"])


def test_torsion_is_the_spin_torque_over_what_the_floor_bears():
    """Torsion use is |torque about z| over the floor's torsion times its load."""
    load = (reach().body().mass + shelver().parameters.ball.mass) * GRAVITY
    bears = shelver().parameters.floor.torsion * load
    torque = np.array([[0.0, 0.0, -0.5 * bears]])
    assert uses_of(still(1, torque=torque))["torsion use"] == pytest.approx(0.5)


def test_a_plan_beyond_its_limits_is_refused_for_the_worst_of_them(plan: LeanPlan):
    """A plan is refused by its worst use, with value, unit and limit in one line; NaN is beyond any limit."""
    uses = (
        Use("peak lean", 12.0, 20.0, "deg"),
        Use("drive torque", 50.0, 32.0, "N m"),
        Use("friction use", 0.8, 0.75, ""),
    )
    with pytest.raises(PlanRefused, match=r"^reach: would need drive torque 50 N m; its limit is 32 N m: .*lead-in$"):
        attrs.evolve(plan, uses=uses).refuse_beyond_limits("reach")
    attrs.evolve(plan, uses=uses[:1]).refuse_beyond_limits("reach")
    with pytest.raises(PlanRefused, match="peak lean nan deg"):
        attrs.evolve(plan, uses=(Use("peak lean", float("nan"), 20.0, "deg"),)).refuse_beyond_limits("reach")
