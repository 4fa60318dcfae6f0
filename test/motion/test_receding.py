"""Lean plans made anew many times a second: they join, they are near the least travel, and rest needs none."""

from __future__ import annotations

import attrs
import numpy as np
import pytest

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.plan_request import StartState
from ballbal_ros.motion.receding import HeldPath, RecedingPlanner, lean_kick, least_norm
from ballbal_ros.motion.stopping import Later
from ballbal_ros.motion.stream import ArmStream, StreamCompensation
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from helpers.least_travel import least_travel
from helpers.robots import compensation, reach, shelver

PARAMETERS = attrs.evolve(compensation(), stream=attrs.evolve(compensation().stream, latency=0.0))
INTERVAL = PARAMETERS.stream.interval


def rest() -> StartState:
    """At rest in balance at `reach`'s start."""
    lean = np.array(reach().body().posture(reach().first).equilibrium_lean)
    return StartState(lean, np.zeros(2), np.zeros(2), np.zeros(2))


def held(known: float, stop: float = 0.1) -> HeldPath:
    return HeldPath.of(reach().path(), known, stop, shelver().position_low, shelver().position_high)


def streamed(delay: float, until: float) -> list[tuple[float, LeanPlan]]:
    """Starts, s, and plans while `reach` is streamed; its arms begin at `delay`."""
    made = StreamCompensation(shelver(), PARAMETERS)
    for load in reach().loads:
        made.set_load(load)
    plans = []
    for now in np.arange(0.0, until, 0.01).tolist():
        position, rate, _ = reach().path().sample(np.array([now]))
        made.stream.take(now + delay, position[0], rate[0])
        if round(now / 0.01) % round(INTERVAL / 0.01) == 0:
            plan = made.next(now)
            if plan is not None:
                plans.append(plan)
    return plans


def test_beyond_what_is_known_the_arms_come_to_rest() -> None:
    """The path is as it was before, goes on without a step in position, rate or acceleration, and rests at its end."""
    path = held(0.4, 0.2)
    near = path.sample(np.array([0.4 - 1e-6, 0.4 + 1e-6]))
    assert all(np.abs(values[1] - values[0]).max() < 1e-3 for values in near)
    assert np.allclose(path.sample(np.array([0.2]))[0], reach().path().sample(np.array([0.2]))[0])
    assert path.duration == pytest.approx(0.6)
    assert np.abs(path.sample(np.array([0.7]))[1]).max() == 0.0


def test_a_plan_begins_where_it_is_told_to() -> None:
    """Lean, lean rate, ball and ball rate are those given, also in the middle of a motion, and the ball comes home."""
    first = RecedingPlanner(reach().body(), PARAMETERS).plan(rest(), held(0.4), 0.0)
    lean, lean_rate, ball, ball_rate = first.at(0.3)
    start = StartState(lean, lean_rate, ball, ball_rate)
    low, high = shelver().position_low, shelver().position_high
    rest_of_it = HeldPath.of(Later(held(0.4), 0.3), 0.1, 0.1, low, high)
    then = RecedingPlanner(reach().body(), PARAMETERS).plan(start, rest_of_it, 0.3)
    assert np.abs(then.lean[0] - lean).max() < 1e-9
    assert np.abs(then.lean_rate[0] - lean_rate).max() < 2e-4
    assert np.abs(then.ball_rate[0] - ball_rate).max() < 1e-9
    assert np.abs(then.ball[-1] + ball).max() < 1e-6
    assert np.abs(then.ball_rate[-1]).max() < 1e-6


@pytest.mark.parametrize("lead_in", [0.0, 0.2, 0.5])
def test_with_all_known_it_is_near_the_least_travel(lead_in: float) -> None:
    """The whole of `reach` in the preview: at most 1.35 times the least that any controller could do, torque within
    what plans may use of it.
    """

    class Begun:
        duration = lead_in + reach().duration

        def sample(self, times: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
            return reach().path().sample(times - lead_in)

    low, high = shelver().position_low, shelver().position_high
    path = HeldPath.of(Begun(), Begun.duration, 0.1, low, high)
    plan = RecedingPlanner(reach().body(), PARAMETERS).plan(rest(), path, 0.0)
    assert np.abs(plan.ball).max() <= 1.35 * least_travel(reach().body(), reach().path(), lead_in)
    limit = PARAMETERS.acceptance.torque_use * shelver().parameters.limits.drive_torque
    assert np.abs(plan.torque[:, :2]).max() <= 1.05 * limit


def test_plans_join_without_a_step() -> None:
    """With a preview longer than the interval each plan begins with lean, rates and ball of the one before."""
    plans = streamed(0.2, 0.8)
    assert len(plans) >= 0.8 / INTERVAL - 2
    for (start, before), (then, plan) in zip(plans[:-1], plans[1:], strict=True):
        lean, lean_rate, _, ball_rate = before.at(then - start)
        assert np.abs(plan.lean[0] - lean).max() < 1e-6
        assert np.abs(plan.lean_rate[0] - lean_rate).max() < 2e-3
        assert np.abs(plan.ball_rate[0] - ball_rate).max() < 1e-6
        assert np.abs(plan.ball[0]).max() == 0.0


def test_arms_at_rest_need_no_new_plan() -> None:
    """Once the stream rests where the plan in force has the arms, that plan is left to bring the ball home."""
    plans = streamed(0.2, 1.6)
    assert plans[-1][0] <= 0.2 + reach().duration + 2.0 * INTERVAL
    assert np.abs(plans[-1][1].ball_rate[-1]).max() < 1e-6


def test_the_kick_of_the_arms_keeps_the_momentum_about_the_contact() -> None:
    """The rows' moment with the arms and the lean accelerated so that nothing outside acts is zero: arms' acceleration
    times time is their change of rate, the lean's likewise.
    """
    body, change = reach().body(), np.linspace(-1.0, 1.0, shelver().joint_count)
    lean, still = np.array(body.posture(reach().first).equilibrium_lean), np.zeros_like(change)
    kick, radius = lean_kick(body, reach().first, change, lean), shelver().parameters.ball.radius
    terms = body.terms(*(values[None] for values in (reach().first, still, 1e4 * change)))
    rows = balance_rows(
        terms, OutsideMotion.at_rest(1), lean[None], np.zeros((1, 2)), 1e4 * kick[None], radius,
        shelver().ball_apparent_mass,
    )  # fmt: skip
    assert np.isfinite(rotation_lean(lean)).all()
    assert np.abs(rows.residual).max() < 1e-3 * np.abs(rows.by_lean[0, :, 4:6] @ kick).max() * 1e4


def test_the_norm_is_near_the_largest_value() -> None:
    """On random problems the largest value is within 15 % of the least possible, which a linear program finds."""
    from scipy.optimize import linprog

    random = np.random.default_rng(0)
    for _ in range(5):
        rows, taken = random.normal(size=(60, 8)), 30.0 * random.normal(size=60)
        equal, wanted = random.normal(size=(2, 8)), random.normal(size=2)
        nothing = np.zeros((1, 8)), np.zeros(1)
        found = least_norm((rows, taken), nothing, np.zeros((8, 8)), (equal, wanted))
        assert equal @ found == pytest.approx(wanted)
        one = np.ones((60, 1))
        best = linprog(
            np.append(np.zeros(8), 1.0),
            A_ub=np.block([[rows, -one], [-rows, -one]]), b_ub=np.concatenate((-taken, taken)),
            A_eq=np.hstack((equal, np.zeros((2, 1)))), b_eq=wanted, bounds=(None, None), method="highs",
        ).fun  # fmt: skip
        assert np.abs(taken + rows @ found).max() <= 1.15 * best


def test_a_stream_takes_samples_in_their_order() -> None:
    """A sample that is not later than the last is not taken, and rates that nobody told of come from the neighbours."""
    stream = ArmStream(shelver())
    for k in range(6):
        assert stream.take(0.01 * k, np.full(shelver().joint_count, 0.02 * k))
    assert not stream.take(0.03, np.zeros(shelver().joint_count))
    path = stream.path(0.0)
    assert path.duration == pytest.approx(0.05)
    assert np.allclose(path.sample(np.array([0.025]))[1], 2.0)
