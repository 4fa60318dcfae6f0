"""On a computer that lets ticks come late, balance stays on its stand, or stops under control, and says why."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.nodes.overload import why_not_engage, why_stop
from ballbal_ros.nodes.pace import TOO_LATE, Pace
from helpers.balancing import balance

TICKS = 500
BEARS = 0.5 * balance().loop.period


def second(pace: Pace, late: float, often: int) -> None:
    """A second of ticks of which so many come late, s."""
    for k in range(TICKS):
        pace.was_late(late if k < often else 0.0)
    pace.turn()


def test_late_seconds_count_on_end_only() -> None:
    """A second with one run too late counts; one without begins anew; two on end are a stop."""
    pace = Pace()
    for late, count in ((2.0 * TOO_LATE, 1), (1.5 * TOO_LATE, 2), (0.5 * TOO_LATE, 0), (3.0 * TOO_LATE, 1)):
        second(pace, late, 1)
        assert pace.late_seconds == count and bool(why_stop(pace)) is (count == 2)


def test_what_it_bears_is_no_reason() -> None:
    """A few ticks late by half of drive_timeout, as beside programs that SCHED_FIFO goes before."""
    pace = Pace()
    second(pace, 0.5 * balance().drive_timeout, 10)
    assert why_not_engage(pace, balance(), granted=False) == ""


@pytest.mark.parametrize(
    ("late", "often", "says"),
    [
        (2.5 * BEARS, TICKS // 2, "1.2 ms late in the mean"),
        (1.1 * balance().drive_timeout, 1, "22 ms at worst"),
    ],
)
def test_later_than_it_bears_is_a_reason(late: float, often: int, says: str) -> None:
    """Often by little, or once by much: the figures are told, and what would do; a second in time ends it."""
    pace = Pace()
    second(pace, late, often)
    reason = why_not_engage(pace, balance(), granted=False)
    assert says in reason and "SCHED_FIFO" in reason
    assert "SCHED_FIFO" not in why_not_engage(pace, balance(), granted=True)
    second(pace, 0.0, 0)
    assert why_not_engage(pace, balance(), granted=False) == ""
    pace.was_late(late if often == 1 else 0.0)
    assert bool(why_not_engage(pace, balance(), granted=False)) is (often == 1)


def test_it_is_watched_for_a_second_first() -> None:
    """Before, and where no tick came in the last second, nothing is known."""
    pace = Pace()
    assert "watched" in why_not_engage(pace, balance(), granted=True)
    second(pace, 0.0, 0)
    pace.turn()
    assert "watched" in why_not_engage(pace, balance(), granted=True)
