"""The ball's way over the floor: what the encoders saw, how the body leaned meanwhile, and what is guessed without."""

from __future__ import annotations

import math

from ballbal_ros.balance.attitude import Attitude, Triple


class BallWay:
    """Moves the ball tick by tick; ``ball`` is [x, y] in ``odom``, m. The ``attitude`` is that of the tick."""

    def __init__(self, radius: float, period: float, attitude: Attitude) -> None:
        self._radius, self._period, self._attitude = radius, period, attitude
        self.ball = [0.0, 0.0]
        self._guessed = [0.0, 0.0]
        self._seen_lean = (0.0, 0.0)

    def roll(self, turned: Triple, pitch_before: float, heading: float) -> tuple[float, float]:
        """Move the ball by what the encoders saw, ``turned`` rad in ``base_footprint`` axes, and by how the body has
        leaned meanwhile; how far, in heading axes, m.
        """
        attitude = self._attitude
        self._guessed = [0.0, 0.0]
        seen, self._seen_lean = self._seen_lean, (attitude.roll, attitude.pitch)
        ahead = self._radius * (turned[1] + attitude.pitch - seen[1])
        aside = -self._radius * (turned[0] + (attitude.roll - seen[0]) * math.cos(pitch_before))
        sin, cos = math.sin(heading), math.cos(heading)
        self.ball[0] += cos * ahead - sin * aside
        self.ball[1] += sin * ahead + cos * aside
        return ahead, aside

    def guess(self, velocity: tuple[float, float], heading: float, drive: bool) -> tuple[float, float]:
        """A tick at which the encoders' way is not known: how far the ball went by the ``velocity`` expected, m/s, in
        heading axes, m. The ball moves there once the ``drive`` is heard again.
        """
        ahead, aside = self._period * velocity[0], self._period * velocity[1]
        sin, cos = math.sin(heading), math.cos(heading)
        self._guessed[0] += cos * ahead - sin * aside
        self._guessed[1] += sin * ahead + cos * aside
        if drive:
            # Whatever the encoders count, the place is as good as any: nothing is to jump.
            self.ball[0] += self._guessed[0]
            self.ball[1] += self._guessed[1]
            self._guessed = [0.0, 0.0]
            self._seen_lean = self._attitude.roll, self._attitude.pitch
        return ahead, aside
