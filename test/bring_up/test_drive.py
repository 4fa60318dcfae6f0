"""First power-on against the simulated drive: whatever is wrong with the wiring is told, and no torque is too large."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ballbal_ros.bring_up.hand_turns import EncoderMap, HandTurns, taken_as_described
from ballbal_ros.bring_up.moves import GREATEST_SHARE, SmallMoves, expected_response
from ballbal_ros.bring_up.verdict import Verdict, judge_moves
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import LOOK, OK, WRONG, Finding
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.wheels import with_wheels
from helpers.hung import HungDrive, Wiring, moved, turned
from helpers.robots import shelver

# A person turns the ball by hand to about a twentieth.
BY_HAND = (0.05, -0.04, 0.03)
SHARE = 0.05


def bring_up(
    wiring: Wiring, description: RobotDescription | None = None, by_hand: bool = True, **changes: float
) -> tuple[list[Finding], Verdict, HungDrive]:
    """The whole first power-on; returns what is said of the encoders, of the moves, and the drive afterwards."""
    hung = HungDrive(wiring, description, **changes)
    robot = description or shelver()
    encoders, said = turned(hung, BY_HAND).judge() if by_hand else taken_as_described(robot.drive)
    moves = SmallMoves(robot.drive, robot.parameters.ball.inertia, encoders, SHARE)
    moved(hung, moves)
    return said, judge_moves(encoders, moves, by_hand), hung


def told(found: list[Finding]) -> dict[tuple[str, str], Finding]:
    """What is not in order."""
    return {(finding.area, finding.what): finding for finding in found if finding.verdict != OK}


@pytest.mark.parametrize("wheels", [3, 4])
def test_a_drive_that_is_as_described_is_found_so(wheels: int) -> None:
    """Nothing to say with three wheels or four; the torque is right to 5 %, the delay to 2 ms, friction to 0.02 N m."""
    said, verdict, hung = bring_up(Wiring.right(with_wheels(shelver(), wheels)), with_wheels(shelver(), wheels))
    assert not told(said) and not told(verdict.findings)
    assert verdict.delay == pytest.approx(hung.parameters.drive.delay, abs=0.002)
    for finding in verdict.findings:
        factor, friction = (float(finding.found.split(word)[0].split()[-1]) for word in (" times", " N m"))
        assert factor == pytest.approx(1.0, abs=0.05) and friction == pytest.approx(0.05, abs=0.02)


def test_torque_stays_small_and_ends_at_zero() -> None:
    """No effort beyond the share of the rated one, also of an actuator that does not move; nothing at the end; the
    wheels come back to within a third of a turn.
    """
    wiring = Wiring.right()
    wiring.gain[1] = 0.0
    hung = HungDrive(wiring)
    moves = SmallMoves(shelver().drive, shelver().parameters.ball.inertia, EncoderMap.as_described(3), SHARE)
    moved(hung, moves)
    sent = np.array(hung.sent)
    assert np.abs(sent).max(axis=0) == pytest.approx([0.25, 1.0, 0.25])
    assert np.all(np.count_nonzero(sent, axis=1) <= 1)
    assert not sent[-1].any() and not moves.tick(hung.time + 1.0, hung.reading).any()
    assert np.abs(hung.reading).max() < 2.0


def test_commands_that_are_swapped_are_told() -> None:
    """Both actuators are named, each with the one that its command really drives."""
    wiring = Wiring.right()
    wiring.command = [1, 0, 2]
    said, verdict, _ = bring_up(wiring)
    found = told(verdict.findings)
    assert not told(said) and set(found) == {("actuator", "front_left"), ("actuator", "back")}
    assert "its command drives back" in found["actuator", "front_left"].found
    assert "swap front_left and back" in found["actuator", "front_left"].do


def test_encoders_that_are_swapped_are_told_and_then_reckoned_with() -> None:
    """The hand turns tell whose wheel each is on; the actuators are then judged by that, and are in order."""
    wiring = Wiring.right()
    wiring.encoder = [0, 2, 1]
    said, verdict, _ = bring_up(wiring)
    assert set(told(said)) == {("encoder", "back"), ("encoder", "front_right")}
    assert "is the one on front_right's wheel" in told(said)["encoder", "back"].found
    assert not told(verdict.findings)


def test_plugs_swapped_on_both_sides_are_told() -> None:
    """Command and encoder of two wheels exchanged look right to each other; the person's hand tells them apart."""
    wiring = Wiring.right()
    wiring.command, wiring.encoder = [1, 0, 2], [1, 0, 2]
    said, verdict, _ = bring_up(wiring)
    assert {what for _, what in told(said)} == {what for _, what in told(verdict.findings)} == {"front_left", "back"}


@pytest.mark.parametrize("side", ["effort", "encoder"])
def test_a_flipped_sign_is_told_where_it_is(side: str) -> None:
    """An effort that pushes the wrong way and an encoder that counts the wrong way are not taken for each other."""
    wiring = Wiring.right()
    (wiring.gain if side == "effort" else wiring.scale)[1] = -1.0
    said, verdict, _ = bring_up(wiring)
    here, there = (verdict.findings, said) if side == "effort" else (said, verdict.findings)
    (finding,) = told(here).values()
    assert finding.what == "back" and "the wrong way" in finding.found and "sign" in finding.do
    assert not told(there)


@pytest.mark.parametrize("factor", [0.5, 1.6])
def test_a_wrong_torque_constant_is_measured(factor: float) -> None:
    """The factor is told to 5 %, and what to multiply the torque constant by."""
    wiring = Wiring.right()
    wiring.gain[2] = factor
    _, verdict, _ = bring_up(wiring)
    (finding,) = told(verdict.findings).values()
    assert finding.what == "front_right" and "torque constant" in finding.do
    assert float(finding.do.rsplit("by ", 1)[1]) == pytest.approx(factor, rel=0.05)


def test_a_wrong_encoder_scale_is_measured_and_not_taken_for_a_torque_constant() -> None:
    """An encoder that counts twice is told with its factor; its actuator is in order."""
    wiring = Wiring.right()
    wiring.scale[0] = 2.0
    said, verdict, _ = bring_up(wiring)
    (finding,) = told(said).values()
    assert finding.what == "front_left" and finding.verdict == WRONG
    assert float(finding.found.split("counts ")[1].split(" times")[0]) == pytest.approx(2.0, rel=0.06)
    assert not told(verdict.findings)


def test_an_encoder_that_is_coarser_than_described_is_told() -> None:
    """Its step is measured: 2 mrad where robot.yaml says 48 µrad."""
    wiring = Wiring.right()
    wiring.step[0] = 2e-3
    _, verdict, _ = bring_up(wiring)
    (finding,) = told(verdict.findings).values()
    assert finding.verdict == LOOK and "steps of 0.002 rad" in finding.found and "encoder_step to 0.002" in finding.do


def test_a_dead_actuator_is_told_with_what_was_tried() -> None:
    """It is given the whole share before it is called dead."""
    wiring = Wiring.right()
    wiring.gain[2] = 0.0
    _, verdict, _ = bring_up(wiring)
    (finding,) = told(verdict.findings).values()
    assert finding.what == "front_right" and finding.found == "moves nothing, up to 1 N m" and "fuse" in finding.do


def test_a_dead_encoder_is_told_before_any_torque() -> None:
    """The hand turns tell; its actuator is not called dead, but can't be told."""
    wiring = Wiring.right()
    wiring.scale[0] = 0.0
    said, verdict, _ = bring_up(wiring)
    assert "counts nothing" in told(said)["encoder", "front_left"].found
    assert "can't be told" in told(verdict.findings)["actuator", "front_left"].found
    assert len(told(verdict.findings)) == 1


def test_without_hand_turns_it_says_what_it_can_not_know() -> None:
    """A sign may then be the encoder's or the effort's, and the line says so."""
    wiring = Wiring.right()
    wiring.scale[1] = -1.0
    said, verdict, _ = bring_up(wiring, by_hand=False)
    assert "taken as described" in told(said)["encoder", "all"].found
    assert "or its encoder counts so" in told(verdict.findings)["actuator", "back"].found


def test_all_off_by_one_factor_may_be_the_balls_inertia() -> None:
    """One factor for all is told apart from one actuator's."""
    wiring = Wiring.right()
    wiring.gain[:] = 0.7
    _, verdict, _ = bring_up(wiring, **{"drive.delay": 0.008})
    assert "ball.inertia" in told(verdict.findings)["drive", "all alike"].do
    assert verdict.delay == pytest.approx(0.008, abs=0.002)


def test_an_angle_that_wraps_around_is_told() -> None:
    """The loop takes angles that never jump: a driver that counts within one turn is refused."""
    turns = HandTurns(shelver().drive)
    for k in range(400):
        angle = 0.04 * k
        turns.see(np.array([angle, math.fmod(angle, 2.0 * math.pi), angle]))
    for _ in range(3):
        turns.done()
    assert "wraps around" in told(turns.judge()[1])["encoder", "back"].found


def test_a_drive_that_runs_away_is_stopped() -> None:
    """Ten times the torque, or a drive that takes an effort for a rate: it ends with one line, and zero torque."""
    wiring = Wiring.right()
    wiring.gain[0] = 40.0
    hung = HungDrive(wiring)
    moves = SmallMoves(shelver().drive, shelver().parameters.ball.inertia, EncoderMap.as_described(3), SHARE)
    with pytest.raises(BallbalError, match="is the drive in torque mode"):
        moved(hung, moves)


@pytest.mark.parametrize("share", [0.0, -0.1, 2.0 * GREATEST_SHARE, math.nan])
def test_a_share_that_is_not_small_is_refused(share: float) -> None:
    """No more than a small share of the rated torque can be asked for."""
    with pytest.raises(BallbalError, match="--share"):
        SmallMoves(shelver().drive, 0.03, EncoderMap.as_described(3), share)


def test_angles_that_are_no_numbers_end_it() -> None:
    """NaN from an encoder is refused in one line."""
    moves = SmallMoves(shelver().drive, 0.03, EncoderMap.as_described(3), SHARE)
    with pytest.raises(BallbalError, match="drive_states"):
        moves.tick(0.0, np.array([0.0, math.nan, 0.0]))


def test_the_expected_response_is_newtons_second_law() -> None:
    """A N m on an actuator gives the ball the acceleration J⁻¹ Rᵀ e, by finite differences of the simulated drive."""
    description = shelver()
    expected = expected_response(description.drive, description.parameters.ball.inertia)
    hung = HungDrive(Wiring.right(), **{"drive.delay": 0.0})
    hung.wiring.step = np.full(3, 1e-12)
    push = np.array([2.0, 0.0, 0.0])
    for _ in range(40):
        hung.go_on(push)
    before = hung.rate.copy()
    hung.go_on(push)
    found = description.drive.rate_map @ (hung.rate - before) / 0.002
    friction = 0.05 * np.sign(description.drive.rate_map @ hung.rate)
    assert found == pytest.approx(expected @ (push - friction), rel=0.02, abs=0.5)
