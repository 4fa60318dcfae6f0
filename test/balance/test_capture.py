"""The capturable region is what the linear model can be brought back from, no more and no less."""

from __future__ import annotations

import attrs
import numpy as np
import pytest
from scipy.linalg import expm

from ballbal_ros.balance.capture import CapturableRegion
from ballbal_ros.balance.linear_model import linear_model
from helpers.robots import reach, shelver

POSTURE = reach().body().posture(reach().first)
MODEL = linear_model(POSTURE, shelver())
STEP = 0.001


def region(torque: float = 40.0, reserve: float = 0.0) -> CapturableRegion:
    return CapturableRegion.of(MODEL, POSTURE, shelver(), torque, reserve)


def comes_back(axis: int, lean: float, rate: float, torque: float) -> bool:
    """Whether full torque against the fall brings the axis of the linear model back.

    It is the best that there is, as the unstable coordinate obeys it alone.
    """
    block = np.zeros((9, 9))
    block[:8, :8], block[:8, 8] = MODEL.state_matrix, MODEL.torque_matrix[:, axis]
    advance = expm(block * STEP)
    state = np.zeros(9)
    state[axis], state[2 + axis] = lean, rate
    pole = np.sqrt(MODEL.state_matrix[2 + axis, axis])
    sign = np.sign(lean + rate / pole)
    state[8] = -sign * torque
    for _ in range(3000):
        state = advance @ state
        if sign * (state[axis] + state[2 + axis] / pole) <= 0.0:
            return True
        if abs(state[axis]) > 50.0:
            return False
    return False


@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("rate", [0.0, 0.8, -0.8])
def test_just_inside_comes_back_and_just_outside_does_not(axis: int, rate: float):
    """At 2 % on either side of the edge, with the drive's speed left out of it."""
    free = attrs.evolve(region(), speed=1e6)
    pole, edge = free.axes[axis].pole, free.limit(axis)
    assert comes_back(axis, 0.98 * edge - rate / pole, rate, free.torque)
    assert not comes_back(axis, 1.02 * edge - rate / pole, rate, free.torque)


def test_the_region_shrinks_with_the_battery():
    """Half of the torque leaves half of the lean, where speed is no matter."""
    whole, half = (attrs.evolve(region(torque), speed=1e6) for torque in (30.0, 15.0))
    assert half.limit(1) == pytest.approx(0.5 * whole.limit(1))


def test_a_ball_that_already_rolls_that_way_leaves_less():
    """Falling forward it must roll forward: a ball that already does has less speed left."""
    ahead, still, back = (region().limit(1, velocity=v, way=1.0) for v in (2.0, 0.0, -1.0))
    assert ahead < still < back
    assert region().limit(1, velocity=10.0, way=1.0) == 0.0


def test_friction_bounds_what_a_strong_drive_could_do():
    """With a floor like ice it is the floor's friction that decides, whatever the drive gives."""
    parameters = attrs.evolve(shelver().parameters, floor=attrs.evolve(shelver().parameters.floor, friction=0.1))
    ice = attrs.evolve(shelver(), parameters=parameters)
    assert CapturableRegion.of(MODEL, POSTURE, ice, 40.0, 0.0).torque < 0.3 * region().torque


def test_what_a_plan_needs_and_what_somebody_pushes_are_counted():
    """Torque that the reference uses is not there for coming back, and a moment that pushes over counts as lean."""
    at = ((0.0, 0.3), (0.0, 0.0))
    alone = region().use(*at, (0.0, 0.0), (0.0, 0.0), 0.0)
    assert region().use(*at, (0.0, 0.0), (0.0, 0.0), 25.0) > alone
    assert region().use(*at, (0.0, 20.0), (0.0, 0.0), 0.0) > alone
