"""Weights, noise figures and limits change while the robot stands and moves its arms, without a step in torque."""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import cache
from typing import Any

import attrs
import numpy as np
import pytest

from ballbal_ros.balance.changeover import TORQUE_STEP, prepare
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.schedule import GainSchedule, PostureRange
from ballbal_ros.declaration import build, declarations, flatten
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.whole_body import Posture
from ballbal_ros.simulation.rehearsal import Rehearsal, plan_story
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from helpers.balancing import balance
from helpers.rehearsing import files, story
from helpers.robots import reach, shelver

HANDLED = ("weights.", "estimator.", "limits.trim_moment", "limits.trim_rate", "limits.torque", "trim", "compensation")


def with_values(values: dict[str, Any], of: BalanceParameters | None = None) -> BalanceParameters:
    return build(BalanceParameters, {**flatten(of or balance()), **values}, "balance.yaml")


def posture() -> Posture:
    return reach().body().posture(reach().first)


@cache
def reached() -> PostureRange:
    return PostureRange.of(shelver(), posture())


@attrs.define
class Changing:
    """A run whose loop gets new values at times (s); what its gains' changes add to the torque is noted per tick."""

    when: list[tuple[float, dict[str, Any]]]
    steps: list[float] = attrs.field(factory=list)
    taken: list[BalanceParameters] = attrs.field(factory=list)

    def run(self, plan: str, kind: str = "planned", seed: int = 0) -> RunResult:
        told = story(plan)
        timeline = Timeline.of(told, files().compensation)
        lean_plan = plan_story(files(), told, timeline) if kind == "planned" and told.planned else None
        rehearsal = Rehearsal(files(), told, kind, timeline, lean_plan, seed)
        loop = rehearsal.loop
        loop.tick = self._watched(loop, loop.tick)  # type: ignore[method-assign]
        return rehearsal.run()[0]

    def _watched(self, loop: BalanceLoop, tick: Callable[[Measurement], Any]) -> Callable[[Measurement], Any]:
        def watched(measured: Measurement) -> Any:
            while self.when and self.when[0][0] <= measured.stamp:
                new = with_values(self.when.pop(0)[1], loop.parameters)
                at = loop.body.posture(measured.arm_position)
                loop.change_parameters(prepare(loop.schedule.reach, loop.description, loop.parameters, new, at))
                self.taken.append(new)
            before, was_under_way = loop.controller.act, loop._gains.under_way
            effort = tick(measured)
            if was_under_way:
                added = (loop.controller.act - before) @ loop.controller.seen
                self.steps.append(float(np.abs(added).max()))
            return effort

        return watched


def test_a_change_during_reach_makes_no_step_and_costs_nothing():
    """Other weights in the middle of the arms' swing: no torque step above half a newton metre, and the ball stays."""
    undisturbed = Changing([]).run("reach")
    changing = Changing([(4.6, {"weights.lean": 0.02, "weights.torque": 14.0, "estimator.moment_walk": 0.5})])
    run = changing.run("reach")
    assert len(changing.steps) > 100
    assert max(changing.steps) <= 0.5
    assert not run.fell
    assert run.ball_travel_peak_mm <= undisturbed.ball_travel_peak_mm + 1.0


def test_a_change_in_the_middle_of_a_push_makes_no_step():
    """While a push of 25 N s is being caught feedback is large, and a change fades in more slowly."""
    changing = Changing([(4.15, {"weights.lean": 0.02, "weights.ball_position": 0.06, "trim": False})])
    run = changing.run("push")
    assert changing.steps and max(changing.steps) <= 0.5
    assert not run.fell
    assert run.ball_travel_peak_mm <= 600.0


def test_changes_that_overtake_each_other_make_no_step_and_the_last_one_is_in_force():
    """Ten changes in a second, each before the one before has come in: no step, and the last one holds."""
    rng = np.random.default_rng(3)
    when = [(4.0 + 0.1 * i, {"weights.lean": float(rng.uniform(0.01, 0.025))}) for i in range(10)]
    changing = Changing(list(when))
    run = changing.run("reach")
    assert not run.fell
    assert max(changing.steps) <= 0.5
    assert changing.taken[-1].weights.lean == when[-1][1]["weights.lean"]


def test_once_changed_the_gains_are_those_of_a_loop_made_with_the_new_values():
    """After the change the loop has the very gains that it would have been started with."""
    new = with_values({"weights.lean": 0.02, "estimator.torque_noise": 0.2})
    fresh = GainSchedule(shelver(), new, posture())
    prepared = prepare(reached(), shelver(), balance(), new, posture())
    assert prepared.schedule is not None
    for name in ("correct", "output", "act", "predict"):
        assert np.array_equal(getattr(prepared.schedule.at(posture()), name), getattr(fresh.at(posture()), name))


def test_a_schedule_taken_apart_for_another_process_is_the_same_again():
    """By way of JSON and bytes, a schedule gives the same matrices to the bit."""
    one = GainSchedule(shelver(), balance(), reached())
    head, numbers = one.pack()
    again = GainSchedule.unpacked(json.loads(json.dumps(head)), numbers)
    assert again.reach == one.reach
    for name in ("correct", "output", "act", "predict"):
        assert np.array_equal(getattr(again.at(posture()), name), getattr(one.at(posture()), name))


def test_a_mix_of_schedules_is_the_mix_of_their_gains_at_each_posture():
    """A change that is overtaken goes on from where it has come to: the mixed schedule gives mixed matrices."""
    one = GainSchedule(shelver(), balance(), posture())
    other = GainSchedule(shelver(), with_values({"weights.torque": 12.0}), one.reach)
    mixed = one.mixed(other, 0.3).at(posture())
    assert np.allclose(mixed.act, 0.7 * one.at(posture()).act + 0.3 * other.at(posture()).act, rtol=1e-12, atol=1e-9)
    assert np.allclose(mixed.correct, 0.7 * one.at(posture()).correct + 0.3 * other.at(posture()).correct, rtol=1e-12)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (
            {"weights.lean": 9.0, "weights.lean_rate": 90.0, "weights.ball_position": 1e-4},
            ("weights.lean 0.012 → 9.0",),
        ),
        ({"loop.delay": 0.004}, ("loop.delay 0.002 → 0.004 s", "can't change", "anew")),
        ({"estimator.rate_noise": 5.0}, ("estimator.rate_noise 0.0024 → 5.0 rad/s",)),
    ],
)
def test_values_that_cost_the_margins_are_refused_and_named(values: dict[str, Any], words: tuple[str, ...]):
    """A change after which the loop would not keep its margins is refused in one line, with old and new value."""
    with pytest.raises(BallbalError) as caught:
        prepare(reached(), shelver(), balance(), with_values(values), posture(), "somewhere/balance.yaml")
    line = str(caught.value)
    assert line.startswith("somewhere/balance.yaml: ") and "\n" not in line
    for word in words:
        assert word in line


def test_limits_and_compensation_change_without_new_gains():
    """What is no weight needs no design, and lowering the torque limit goes by small steps."""
    new = with_values({"limits.torque": 20.0, "compensation": "none"})
    assert prepare(reached(), shelver(), balance(), new, posture()).schedule is None
    limits: list[float] = []
    loop = BalanceLoop(shelver(), balance(), reach().first, reach().loads)
    loop.change_parameters(prepare(loop.schedule.reach, shelver(), balance(), new, posture()))
    still = Measurement(
        stamp=0.0,
        imu_quat_xyzw=None,
        imu_rate=np.zeros(3),
        imu_acceleration=np.array([0.0, 0.0, 9.80665]),
        drive_angle=np.zeros(3),
        arm_position=reach().first,
    )
    for tick in range(80):
        loop.tick(attrs.evolve(still, stamp=tick * loop.period))
        limits.append(loop._gains.torque_limit)
    assert limits[-1] == 20.0
    assert np.abs(np.diff(limits)).max() <= TORQUE_STEP + 1e-12


def test_compensation_changes_without_a_jump_of_the_reference():
    """From following the arms to a fixed lean and back: the reference lean goes on from where it is."""
    loop = BalanceLoop(shelver(), balance(), reach().first, reach().loads)
    loop.reference.engage(reach().first)
    between = 0.5 * (reach().first + reach().last)
    before = loop.reference.update(0.0, between)[:2].copy()
    loop.reference.follow(False, between)
    assert np.allclose(loop.reference.update(0.002, between)[:2], before, atol=1e-12)
    loop.reference.follow(True, reach().last)
    assert np.allclose(loop.reference.update(0.004, reach().last)[:2], before, atol=1e-12)


def test_every_parameter_that_may_change_is_one_that_the_change_over_knows():
    """No runtime parameter of balance.yaml is taken in without anybody following it."""
    for declared in declarations(BalanceParameters):
        if declared.runtime:
            assert declared.name.startswith(HANDLED), declared.name


@pytest.mark.prove
def test_two_hundred_random_changes_while_it_reaches_do_not_disturb_it():
    """Over ten runs of reach 20 random changes each, half of them refused: no fall, no step above 0.5 N m."""
    rng = np.random.default_rng(11)
    refused = 0
    for seed in range(10):
        changing = Changing([])
        for at in np.sort(rng.uniform(2.0, 7.0, 20)):
            values = {
                f"weights.{n}": float(getattr(balance().weights, n) * rng.uniform(0.7, 1.4)) for n in ("lean", "torque")
            }
            if rng.random() < 0.5:
                values["weights.ball_position"] = 1e-5
                with pytest.raises(BallbalError):
                    prepare(reached(), shelver(), balance(), with_values(values), posture())
                refused += 1
            else:
                changing.when.append((float(at), values))
        run = changing.run("reach", seed=seed)
        assert not run.fell
        assert max(changing.steps) <= 0.5
        assert run.ball_travel_peak_mm <= 10.0
    assert refused > 50
