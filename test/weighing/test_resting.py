"""A second of a robot that is never quite at rest, read by one window."""

from __future__ import annotations

import numpy as np
import pytest

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.weighing.hand_load import HandWeighing
from ballbal_ros.weighing.resting import resting
from helpers.rehearsing import files, story

TIMES = np.linspace(4.0, 5.0, 51)
ARMS = story("reach").posture


def looks(lean: Array, ball: Array, velocity: Array | None = None) -> Array:
    return np.column_stack((TIMES, lean, ball, np.zeros((len(TIMES), 2)) if velocity is None else velocity))


def test_a_constant_acceleration_is_found_whatever_the_heading():
    """x = x0 + v t + a t²/2 gives a within 0.2 %, of ball and lean; the ball's in ``base_footprint``."""
    s = TIMES[:, None] - 4.0
    ball = np.array([1.0, -2.0]) + 0.003 * s + 0.5 * np.array([0.01, 0.02]) * s**2
    lean = np.array([0.01, -0.02]) + 0.5 * np.array([-0.003, 0.004]) * s**2
    reading = resting(ARMS, looks(lean, ball), 0.5 * np.pi)
    assert reading.ball_acceleration == pytest.approx([0.02, -0.01], rel=2e-3)
    assert reading.lean_acceleration == pytest.approx([-0.003, 0.004], rel=2e-3)


def test_a_robot_that_sways_lacks_no_moment():
    """It sways by 2 mrad at 1.3 rad/s to 4 rad/s, which moves 0.7 N m to and fro, the ball under it as the balance
    rows have it: 0.01 N m and less is missing, where the mean lean alone lacks more than ten times as much.
    """
    description = files().description
    body, weighing = WholeBody(description), HandWeighing(description, files().balance.hand_load)
    fine = np.linspace(4.0, 5.0, 2001)
    static = np.array(body.posture(ARMS).equilibrium_lean)
    ours, plain = [], []
    for rate, phase in ((1.3, 0.3), (2.5, 1.2), (4.0, 2.0)):
        sway = 2e-3 * np.column_stack((np.sin(rate * fine + phase), np.cos(1.1 * rate * fine)))
        speed = np.gradient(sway, fine, axis=0)
        bend = np.gradient(speed, fine, axis=0)
        zero = np.zeros((len(fine), len(ARMS)))
        terms = body.terms(np.tile(ARMS, (len(fine), 1)), zero, zero)
        rows = balance_rows(
            terms,
            OutsideMotion.at_rest(len(fine)),
            static + sway,
            speed,
            bend,
            description.parameters.ball.radius,
            description.ball_apparent_mass,
        )
        acceleration = -np.linalg.solve(rows.by_ball_acceleration, rows.residual[:, :, None])[:, :, 0]
        step = fine[1] - fine[0]
        ball = np.cumsum(np.cumsum(acceleration, axis=0), axis=0) * step**2
        at = np.arange(0, 2001, 40)
        reading = resting(ARMS, looks((static + sway)[at], ball[at]), 0.0)
        ours.append(np.abs(weighing.missing_moment(reading)).max())
        still = resting(ARMS, looks(np.tile((static + sway).mean(axis=0), (51, 1)), np.zeros((51, 2))), 0.0)
        plain.append(np.abs(weighing.missing_moment(still)).max())
    assert max(ours) < 0.01
    assert max(plain) > 10.0 * max(ours)


def test_a_ball_that_creeps_is_held_back():
    """Rolling forward by centimetres a second it feels the floor's resistance whole, as a moment backward that is not
    missing; a hundred times slower a tenth of it and less; to and fro, nothing.
    """
    given = files().balance.hand_load
    weighing = HandWeighing(files().description, given)
    still = np.tile(WholeBody(files().description).posture(ARMS).equilibrium_lean, (51, 1))

    def missing(speed: Array) -> Array:
        velocity = np.column_stack((speed, np.zeros(51)))
        return weighing.missing_moment(resting(ARMS, looks(still, np.zeros((51, 2)), velocity), 0.0))

    assert missing(np.full(51, 0.02)) == pytest.approx([0.0, given.rolling_moment], abs=1e-3)
    assert 0.0 < missing(np.full(51, 1e-4))[1] < 0.11 * given.rolling_moment
    assert missing(0.01 * np.sin(2.0 * np.pi * TIMES)) == pytest.approx([0.0, 0.0], abs=1e-3)
