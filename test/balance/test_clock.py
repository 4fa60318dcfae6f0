"""What the loop makes of the stamps that come: missed ticks, a process that got no time, a clock that jumped."""

from __future__ import annotations

import pytest

from ballbal_ros.balance.clock import LoopClock

PERIOD = 0.002


@pytest.mark.parametrize(
    ("gap", "wrong"),
    [
        (0.09, "late tick"), (0.12, "stall"), (0.39, "stall"),
        (0.42, "jump"), (5.0, "jump"), (-0.2, "jump"), (-5.0, "jump"),
    ],
)  # fmt: skip
def test_a_gap_is_judged_by_its_length(gap: float, wrong: str) -> None:
    """Up to 0.1 s is bridged at once; anything else only after three stamps in order from there."""
    clock = LoopClock(PERIOD)
    for k in range(5):
        assert clock.advance(1.0 + k * PERIOD) == 1 and clock.wrong == ""
    after = 1.0 + 4 * PERIOD + gap
    periods = [clock.advance(after + k * PERIOD) for k in range(3)]
    if wrong == "late tick":
        assert periods == [45, 1, 1]
        return
    assert periods == [0, 0, 1] and clock.wrong == wrong
    assert clock.advance(after + 3 * PERIOD) == 1 and clock.wrong == ""


def test_one_stamp_from_elsewhere_is_passed_over() -> None:
    """Time goes on as if it had not come."""
    clock = LoopClock(PERIOD)
    clock.advance(1.0)
    assert clock.advance(1.3) == 0 and clock.wrong == "ahead"
    assert clock.advance(0.7) == 0 and clock.wrong == "backwards"
    assert clock.advance(1.0 + PERIOD) == 1
