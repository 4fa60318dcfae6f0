"""Rate and lateness as diagnostics tell them, second by second."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.nodes import pace
from ballbal_ros.nodes.pace import Pace


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """The wall clock, to be set by hand."""
    now = [100.0]
    monkeypatch.setattr(pace.time, "monotonic", lambda: now[0])
    return now


def test_a_loop_in_time_is_not_late(clock: list[float]) -> None:
    """500 runs within a second, each when its stamp says: 500 Hz, nothing late."""
    kept = Pace()
    for k in range(500):
        clock[0] = 100.0 + 0.002 * (k + 1)
        kept.ran(0.002 * k)
    kept.turn()
    told = kept.values()
    assert told["loop rate Hz"] == pytest.approx(500.0)
    assert told["late worst ms"] == pytest.approx(0.0, abs=1e-6) and kept.count == 500


def test_one_late_run_is_the_worst_of_its_second_alone(clock: list[float]) -> None:
    """7 ms late once: worst 7 ms, mean over all runs; the next second begins anew."""
    kept = Pace()
    for k in range(10):
        clock[0] = 100.0 + 0.1 * k + (0.007 if k == 5 else 0.0)
        kept.ran(0.1 * k)
    clock[0] = 101.0
    kept.turn()
    told = dict(kept.values())
    assert told["late worst ms"] == pytest.approx(7.0) and told["late mean ms"] == pytest.approx(0.7)
    clock[0] = 102.0
    kept.turn()
    assert kept.values()["loop rate Hz"] == 0.0 and kept.values()["late worst ms"] == 0.0


def test_a_node_without_a_loop_tells_nothing_of_one() -> None:
    """A rate of zero would look like a loop that stands still."""
    kept = Pace()
    kept.turn()
    assert not kept.values()
