"""Rolling to a place: the velocity towards a goal, slow enough to stop there."""

from __future__ import annotations

import math

import attrs

SPEED, TURNING = 0.4, 0.6
_SLOWING, _SLOWING_TURN = 0.15, 0.3
_NEAR, _NEAR_TURN = 0.005, 0.01


@attrs.frozen
class Goal:
    """A place in ``odom``: x, y in m, heading in rad."""

    x: float
    y: float
    heading: float

    def velocity(self, station: tuple[float, float], heading: float) -> tuple[float, float, float]:
        """Velocity (m/s, m/s in heading axes; rad/s) to command at a station in ``odom`` (m) and heading (rad); zeros
        once there.

        Its size is that from which a constant deceleration of 0.15 m/s² (0.3 rad/s²) ends at the goal, at most 0.4 m/s
        (0.6 rad/s).
        """
        dx, dy = self.x - station[0], self.y - station[1]
        far = math.hypot(dx, dy)
        turn = (self.heading - heading + math.pi) % (2.0 * math.pi) - math.pi
        speed = min(SPEED, math.sqrt(2.0 * _SLOWING * far), 1.5 * far) if far > _NEAR else 0.0
        turning = (
            min(TURNING, math.sqrt(2.0 * _SLOWING_TURN * abs(turn)), 1.5 * abs(turn)) if abs(turn) > _NEAR_TURN else 0.0
        )
        sin, cos = math.sin(heading), math.cos(heading)
        along, aside = cos * dx + sin * dy, cos * dy - sin * dx
        share = speed / far if far > 0.0 else 0.0
        return share * along, share * aside, math.copysign(turning, turn)
