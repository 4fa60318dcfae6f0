"""The choice of postures: allowed, clear, and better than what chance offers."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.weighing.clearance import Clearance
from ballbal_ros.weighing.postures import Design, DesignSettings, choose_postures, scaled_regressor
from helpers.robots import reach, shelver

SETTINGS = DesignSettings(count=6, candidates=60)


@cache
def design() -> Design:
    """A small design for the demo robot."""
    return choose_postures(shelver(), reach().first, SETTINGS)


def test_chosen_postures_are_within_all_limits():
    """Joints, equilibrium lean, and what the joints can hold; the ways between them are clear of the robot itself."""
    description, body, found = shelver(), WholeBody(shelver()), design()
    clearance = Clearance(description, SETTINGS.margin)
    here = reach().first
    for posture in found.postures:
        assert np.all(posture >= description.position_low) and np.all(posture <= description.position_high)
        assert np.hypot(*body.posture(posture).equilibrium_lean) <= 0.5 * description.parameters.limits.lean
        assert np.all(np.abs(body.holding_effort(posture)) <= 0.6 * description.effort_limit)
        assert clearance.gap(posture) >= SETTINGS.margin - 1e-6
        middle = 0.5 * (here + posture)
        assert clearance.gap(middle) >= SETTINGS.margin - 1e-6
        here = posture


def weakest(told: Array, basis: Array) -> float:
    """The smallest singular value of stacked regressors [K, 2, n] along a basis [m, n]."""
    return float(np.linalg.svd((told @ basis.T).reshape(-1, len(basis)), compute_uv=False)[-1])


def test_they_tell_more_than_postures_by_chance():
    """The smallest singular value over the same directions is larger than that of any of 50 chance choices."""
    rng, description = np.random.default_rng(0), shelver()
    clearance, found = Clearance(description, SETTINGS.margin), []
    while len(found) < 60:
        posture = rng.uniform(np.maximum(description.position_low, -2.0), np.minimum(description.position_high, 2.0))
        if clearance.clear(posture):
            found.append(posture)
    chance = scaled_regressor(description, np.array(found), 0.03)
    chosen = scaled_regressor(description, design().postures, 0.03)
    basis = design().directions
    ours = weakest(chosen, basis)
    assert ours == pytest.approx(design().weakest, rel=1e-6)
    picks = [rng.choice(len(chance), SETTINGS.count, replace=False) for _ in range(50)]
    assert ours > max(weakest(chance[pick], basis) for pick in picks)


def test_the_same_seed_gives_the_same_postures():
    """Nothing in the choice is left to chance but by the seed."""
    assert np.array_equal(choose_postures(shelver(), reach().first, SETTINGS).postures, design().postures)


def test_where_nothing_is_clear_it_says_so_in_one_line():
    """With a margin that no posture keeps there is nothing to choose from."""
    with pytest.raises(BallbalError, match=r"weigh-in: finds only 0 postures .*--posture"):
        choose_postures(shelver(), reach().first, DesignSettings(count=3, candidates=4, margin=0.5))
