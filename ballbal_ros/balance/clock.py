"""The loop's time, made of the stamps that come with the measurements: they may be late, doubled, out of order or
absurd.
"""

from __future__ import annotations

import math

MOST_MISSED = 0.1
"""Longest step, s, that is taken for missed ticks; a longer one is not bridged by the model."""
MOST_STALLED = 0.4
"""Longest step ahead, s, that is taken for a process that got no time; a longer one, or one back, is a clock's jump."""
_SOON = 1e-9
_LOOK_AGAIN = 20_000_000
_IN_ORDER = 3


class LoopClock:
    """Says at each stamp how many loop periods to go on. ``now`` in s; ``wrong``: what is wrong with the last stamp,
    or "".
    """

    def __init__(self, period: float) -> None:
        self._period = period
        self.now = -math.inf
        self.wrong = ""
        self._elsewhere, self._in_order = math.nan, 0

    def advance(self, stamp: float) -> int:
        """Periods (at least 1) from the last tick to this one; 0 where the stamp is refused, and no tick is to be made.

        A stamp elsewhere (behind, or far ahead) is refused, until others have followed in order from there: then it
        is a process that got no time, or the clock that jumped, and time goes on from it.
        """
        passed = stamp - self.now
        if _SOON < passed <= MOST_MISSED or self.now == -math.inf and math.isfinite(stamp):
            first = self.now == -math.inf
            self.now, self._in_order = stamp, 0
            periods = 1 if first else max(1, round(passed / self._period))
            self.wrong = "late tick" if periods > 1 else ""
            return periods
        if -_SOON <= passed <= _SOON:
            self.wrong = "standing still"
            return 0
        follows = _SOON < stamp - self._elsewhere <= MOST_MISSED
        self._in_order = self._in_order + 1 if follows else 1
        self._elsewhere = stamp
        if self._in_order < _IN_ORDER:
            self.wrong = "backwards" if not passed > 0.0 else "ahead"
            return 0
        self.now, self._in_order = stamp, 0
        self.wrong = "stall" if MOST_MISSED < passed <= MOST_STALLED else "jump"
        return 1


def is_looked_at(ns: int, period_ns: int) -> bool:
    """Whether the tick ``ns`` is one at which ``balance`` says its state while it does not balance yet, and the stand
    looks at it.

    That is the first tick of each 20 ms.
    """
    return ns % _LOOK_AGAIN < period_ns
