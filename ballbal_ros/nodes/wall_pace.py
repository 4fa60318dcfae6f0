"""Simulated time by the wall clock. Times are of a steady clock, or simulated; s."""

from __future__ import annotations


class WallPace:
    """Says when the next step of ``period`` is due, and never hurries after what the machine has not let it do.

    Real physics does not wait for a processor. Where the simulated robot's own process was kept waiting, to make up
    for all of it at once would be a robot that goes without a command for as long, however soon its balance answers:
    nothing that a real one does. So what is late beyond ``catch_up`` is left out: simulated time stands still
    meanwhile. ``held`` is how long it has stood still in all, ``longest`` at once. A balance that comes late is late
    all the same.
    """

    def __init__(self, period: float, catch_up: float) -> None:
        self._period, self._catch_up = period, catch_up
        self._start: float | None = None
        self.held = self.longest = 0.0

    @property
    def began(self) -> bool:
        """Whether simulated time goes by the wall clock by now."""
        return self._start is not None

    def begin(self, now: float, time: float) -> None:
        """From ``now`` on, when simulated time is ``time``."""
        self._start = now - time

    def late(self, now: float, time: float) -> float:
        """How late it is ``now`` for the step from the simulated ``time`` on; negative while that is still to come."""
        if self._start is None:
            return -self._period
        late = now - self._start - time - self._period
        lost = late - self._catch_up
        if lost > 0.0:
            self._start += lost
            self.held += lost
            self.longest = max(self.longest, lost)
        return late

    def values(self) -> dict[str, float]:
        """What diagnostics tell of it."""
        return {"time held s": self.held, "time held at once ms": 1e3 * self.longest} if self.began else {}
