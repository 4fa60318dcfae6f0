"""Arms that move for a long time: it stands, the ball stays, and nothing grows."""

from __future__ import annotations

import pytest

from helpers.soak import Soaked, soak

AT_REST = 5.0
GROWS = 5.0


def held(found: Soaked, swings: int) -> None:
    print(f"{len(found.rests)} rests, worst {max(found.rests):.2f} mm, memory {found.grown:+.2f} MB")
    assert not found.fell and len(found.rests) >= swings
    assert max(found.rests) <= AT_REST and found.grown <= GROWS


def test_half_a_minute_of_swings_leaves_no_trace():
    """Seven swings in 35 s of simulated time: no fall, the ball within 5 mm at each rest, no memory gained."""
    held(soak(35.0, 12.0), 6)


@pytest.mark.prove
def test_an_hour_of_swings_leaves_no_trace():
    """One hour of simulated time."""
    held(soak(3600.0, 120.0), 700)
