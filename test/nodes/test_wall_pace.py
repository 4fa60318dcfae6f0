"""Simulated time by the wall clock: in step with it, and never in a hurry after it."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.nodes.wall_pace import WallPace

PERIOD = 0.002


def steps_at(wall: WallPace, now: float, time: float) -> tuple[int, float]:
    """How many steps are made at a look, and where simulated time is then."""
    count = 0
    while wall.late(now, time) >= 0.0:
        time, count = time + PERIOD, count + 1
    return count, time


def test_time_goes_with_the_clock() -> None:
    """Looked at each millisecond, and now and then two periods late, it ends with the wall clock, and nothing is
    held.
    """
    wall, time = WallPace(PERIOD, 0.006), 3.0
    wall.begin(100.0, time)
    for k in range(1000):
        now = 100.0 + 0.001 * k + (0.004 if k % 100 == 0 else 0.0)
        _, time = steps_at(wall, now, time)
    assert time == pytest.approx(3.0 + 0.999, abs=1.5 * PERIOD) and wall.held == 0.0


def test_what_the_machine_takes_away_is_left_out() -> None:
    """After 143 ms without a processor it makes up for 6 ms, a few steps, not for 71; the rest is told, and later steps
    are in time again.
    """
    wall = WallPace(PERIOD, 0.006)
    wall.begin(100.0, 0.0)
    count, time = steps_at(wall, 100.1431, 0.0)
    assert 1 <= count <= 4 and time <= 0.008 + 1e-9
    told = wall.values()
    assert told["time held s"] == pytest.approx(0.1351) and told["time held at once ms"] == pytest.approx(135.1)
    assert steps_at(wall, 100.1431 + 0.02, time)[0] == 3 and wall.held == pytest.approx(0.1351 + 0.014)
    assert WallPace(PERIOD, 0.006).values() == {}


def test_before_it_begins_nothing_is_due() -> None:
    """And the first step is due one period after the beginning."""
    wall = WallPace(PERIOD, 0.006)
    assert not wall.began and wall.late(1e9, 0.0) < 0.0
    wall.begin(50.0, 1.0)
    assert wall.late(50.0019, 1.0) < 0.0 <= wall.late(50.0021, 1.0)
