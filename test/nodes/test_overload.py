"""A loop that comes late second after second is known to be late."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.nodes.pace import TOO_LATE, Pace


def test_late_seconds_count_on_end_only():
    """A second with one run too late counts; one without begins anew."""
    pace = Pace()
    for late, count in ((2.0 * TOO_LATE, 1), (1.5 * TOO_LATE, 2), (0.5 * TOO_LATE, 0), (3.0 * TOO_LATE, 1)):
        pace.was_late(0.0)
        pace.was_late(late)
        pace.turn()
        assert pace.late_seconds == count
