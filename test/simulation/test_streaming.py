"""Arms that are streamed: ball travel beside a receding-horizon program that knows as much, and no more."""

from __future__ import annotations

from functools import cache

import pytest

from ballbal_ros.simulation.streaming import StreamedRehearsal
from helpers.receding_travel import receding_travel
from helpers.rehearsing import changed, rehearsed, story
from helpers.robots import reach

DELAYS = (0.0, 0.1, 0.2, 0.3, 0.5)


@cache
def bound(delay: float) -> float:
    """What the yardstick travels with this preview, mm."""
    return 1e3 * receding_travel(reach().body(), reach().path(), delay)


def travel(delay: float, seed: int = 0, measured: bool = False) -> float:
    """Largest travel of `reach`, streamed, mm; plans take effect at once, as the yardstick's do."""
    robot = changed(compensation={"stream.latency": 0.0})
    run, _ = StreamedRehearsal(robot, story("reach"), delay, seed, measured=measured).run()
    assert not run.fell
    return run.ball_travel_peak_mm


def test_a_delay_line_is_used_as_well_as_a_linear_program_would():
    """`reach` streamed with 0.2 s of delay: at most 1.3 times the yardstick's travel."""
    assert travel(0.2) <= 1.3 * bound(0.2)


@pytest.mark.prove
@pytest.mark.parametrize("delay", DELAYS)
def test_every_delay_is_used_as_well_as_a_linear_program_would(delay: float):
    """0 to 0.5 s of delay, three seeds each: at most 1.3 times the yardstick's travel."""
    assert max(travel(delay, seed) for seed in range(3)) <= 1.3 * bound(delay)


@pytest.mark.prove
def test_the_yardstick_falls_with_the_preview():
    """The yardstick itself: more preview never asks for more travel."""
    bounds = [bound(delay) for delay in DELAYS]
    assert bounds == sorted(bounds, reverse=True)


def test_arms_moved_by_hand_cost_less_than_a_quasi_static_lean():
    """Known by their encoders alone, the arms cost at most 0.6 of what the lean costs that balances their posture."""
    quasi_static = rehearsed(story("reach"), "quasi_static")[0].ball_travel_peak_mm
    assert travel(0.0, measured=True) <= 0.6 * quasi_static
