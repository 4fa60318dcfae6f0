"""What the loop thinks of the ball."""

from __future__ import annotations

from collections.abc import Sequence

import attrs

from ballbal_ros.robot.arrays import Array


@attrs.frozen
class BallEstimate:
    """Where the loop thinks the ball is: x, y (m), heading (rad) in ``odom``; vx, vy (m/s) in ``base_footprint``;
    heading rate (rad/s).
    """

    x: float
    y: float
    heading: float
    vx: float
    vy: float
    heading_rate: float

    @classmethod
    def of(cls, ball: Sequence[float], heading: float, deviation: Array, row: Array) -> BallEstimate:
        """From the ``ball`` [2] and the heading as measured, and the estimated deviation from a reference row."""
        vx, vy, turning = (float(deviation[i] + row[i]) for i in (6, 7, 9))
        return cls(ball[0], ball[1], heading, vx, vy, turning)
