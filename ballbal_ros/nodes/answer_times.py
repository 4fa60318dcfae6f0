"""How long the answer to a tick takes, as the simulated robot sees it by the wall clock."""

from __future__ import annotations

import time
from collections import deque

import numpy as np

# A minute at 500 Hz.
_KEPT = 30_000


class AnswerTimes:
    """From the moment a tick's last message goes out until the command with its stamp is here."""

    def __init__(self) -> None:
        self._asked, self._stamp = 0.0, -1
        self._answers: deque[float] = deque(maxlen=_KEPT)
        self._lateness: deque[float] = deque(maxlen=_KEPT)

    def asked(self, stamp: int, late: float = 0.0) -> None:
        """A tick is about to go out, ``late`` s after its time by the wall clock."""
        self._asked, self._stamp = time.monotonic(), stamp
        self._lateness.append(late)

    def answered(self, stamp: int) -> None:
        """A command came with a stamp, ns."""
        if stamp == self._stamp:
            self._answers.append(time.monotonic() - self._asked)
            self._stamp = -1

    def values(self) -> dict[str, float]:
        """Median and 99th percentile in ms of answers and lateness, and the share of ticks answered in time."""
        if not self._answers:
            return {}
        answer = 1e3 * np.percentile(self._answers, (50.0, 99.0))
        late = 1e3 * np.percentile(self._lateness, (50.0, 99.0))
        return {
            "answer median ms": float(answer[0]),
            "answer p99 ms": float(answer[1]),
            "late median ms": float(late[0]),
            "late p99 ms": float(late[1]),
            "answered share": len(self._answers) / len(self._lateness),
        }
