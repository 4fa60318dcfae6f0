"""Faults on purpose end as the table of answers says, and nothing that may not be sent is sent."""

from __future__ import annotations

from functools import cache

import attrs
import pytest

from ballbal_ros.balance.answer_table import ANSWERS
from ballbal_ros.balance.answers import STOP
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.drive import Drive
from ballbal_ros.simulation.fault_campaign import asked_kinds, run_campaign
from ballbal_ros.simulation.fault_kinds import FELL, HELD, KINDS, RELEASED, STOPPED, UNNOTICED
from ballbal_ros.simulation.fault_trial import FaultTrial, Trial
from ballbal_ros.simulation.faults import Fault, Slip
from ballbal_ros.simulation.rehearsal import RobotFiles, plan_story
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.wheels import with_wheels
from helpers.rehearsing import files, story
from helpers.robots import shelver

ARMS_MOVE = 4.3


@cache
def robot(wheels: int) -> RobotFiles:
    return attrs.evolve(files(), description=with_wheels(files().description, wheels))


def tried(wheels: int = 3, stand: bool = False, **fault: float | str) -> Trial:
    """One fault during `reach`, while the arms move."""
    what, of = story("reach"), robot(wheels)
    timeline = Timeline.of(what, of.compensation)
    given = Fault(**{"start": ARMS_MOVE, **fault})
    return FaultTrial(of, what, timeline, plan_story(of, what, timeline), given, 0, stand).run()


def held_to_the_table(trials: list[Trial]) -> None:
    assert [f"{t.kind} {t.fault}: {t.why}" for t in trials if not t.ok] == []
    assert sum(t.wrong_commands for t in trials) == 0
    for trial in trials:
        kind = KINDS[trial.kind]
        if trial.outcome == FELL:
            assert ANSWERS[kind.row].falls or (kind.three_may_fall and trial.wheels == 3)


def test_a_small_campaign_over_all_kinds_ends_as_the_table_says():
    """One of each kind: none that may be survived falls, and no command is sent that may not be."""
    held_to_the_table(list(run_campaign(files(), story("reach"), len(KINDS), seed=5)))


@pytest.mark.prove
def test_the_campaign_ends_as_the_table_says():
    """2000 seeded trials over all kinds, with drives of three and four wheels."""
    held_to_the_table(list(run_campaign(files(), story("reach"), 2000, seed=1, wheels=(3, 4))))


@pytest.mark.parametrize("silent", [0.02, 0.05, 0.1, 0.3])
def test_an_imu_that_falls_silent_is_answered_as_the_table_says(silent: float):
    """Coast; up to 50 ms cost no more than 10 mm; from 0.1 s on a controlled stop, and it stands through all of it."""
    trial = tried(kind="imu silent", duration=silent)
    stops = ANSWERS["imu", "silent"].deed(silent - 0.002) == STOP
    assert trial.outcome == (STOPPED if stops else HELD) and trial.wrong_commands == 0
    assert trial.ball_travel_mm <= (10.0 if silent <= 0.05 else 50.0)


@pytest.mark.parametrize("size", [-1.0, 1.0])
def test_a_gyro_that_turns_at_once_is_not_believed(size: float):
    """Of a step about z the drive would show something: it is left out however hard the drive works just then."""
    trial = tried(wheels=4, kind="gyro step", start=4.208, duration=60.0, size=size, which=8)
    assert trial.outcome in (HELD, STOPPED) and trial.wrong_commands == 0
    assert trial.ball_travel_mm <= 20.0


def test_a_wheel_that_slides_makes_no_step_in_torque():
    """Two wheels that are left, at their limits while the body leans: still no step beyond `limits.torque_rate`."""
    trial = tried(kind="wheel slides", start=3.262, duration=1.0, size=0.3, which=5)
    assert trial.worst_effort_nm > 10.0 and trial.wrong_commands == 0


@pytest.mark.parametrize("which", [0, 1, 2])
def test_with_three_wheels_a_dead_one_costs_the_heading_and_nothing_else(which: int):
    """The two that are left keep roll and pitch; it stops, and lets go when a stand takes hold."""
    trial = tried(kind="actuator dead", duration=60.0, which=which, stand=True)
    assert trial.outcome in (STOPPED, RELEASED)
    assert trial.outcome == RELEASED or "without a spare" in trial.reason
    assert trial.ball_travel_mm <= 30.0 and trial.wrong_commands == 0


@pytest.mark.parametrize("which", [0, 3])
def test_with_four_wheels_it_goes_on_without_one(which: int):
    """The other three do its work, heading and all: nothing is stopped."""
    trial = tried(4, kind="actuator dead", duration=60.0, which=which)
    assert trial.outcome in (UNNOTICED, HELD) and trial.ball_travel_mm <= 10.0


def test_a_campaign_is_repeatable():
    """Two with one seed are the same to the last digit."""
    first, again = (list(run_campaign(files(), story("reach"), 2, 7, ("imu noise",), workers=n)) for n in (1, 2))
    assert first == again


def test_an_unknown_kind_is_refused_with_the_nearest_known():
    """One line that says which is meant."""
    with pytest.raises(BallbalError, match="did you mean imu silent"):
        asked_kinds(["imu silnt"])


def test_a_wheel_that_bears_its_effort_does_not_slide():
    """Up to what the contact bears all effort reaches the ball; beyond it the rest spins the rotor up."""
    slip = Slip(shelver().drive.effort_limit, shelver().drive.rate_limit, [0.002] * 3)
    assert slip.go_on(0, 1.9, 2.0, 0.002) == (1.9, 0.0)
    passed, slid = slip.go_on(0, 3.0, 2.0, 0.002)
    assert passed == 2.0 and slid == pytest.approx(0.002 * 0.002 * 1.0 / 0.002)


def test_another_number_of_wheels_makes_a_drive_of_the_same_kind():
    """Four wheels stand where they should, and power is the same on both sides."""
    four = with_wheels(shelver(), 4).drive
    assert isinstance(four, Drive) and len(four.names) == 4
    assert with_wheels(shelver(), 3) is shelver()
