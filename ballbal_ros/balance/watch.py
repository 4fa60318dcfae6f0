"""For how long each input has been wrong, and so what its answer is by now."""

from __future__ import annotations

from collections import Counter

import attrs

from ballbal_ros.balance.answer_table import ANSWERS
from ballbal_ros.balance.answers import GO_ON, harder

_GOOD = 5


@attrs.define
class _Trouble:
    """An input that is wrong: since when, s, what with it, and how many good samples have come since."""

    since: float
    wrong: str
    good: int = 0


class Watch:
    """Keeps account of what is wrong with each input. ``counts``: how often each row of the table has been met, by
    (input, wrong).
    """

    def __init__(self) -> None:
        self._open: dict[str, _Trouble] = {}
        self.counts: Counter[tuple[str, str]] = Counter()
        self.deed, self.reason = GO_ON, ""

    @property
    def quiet(self) -> bool:
        """Whether nothing is wrong, nor was within the last samples."""
        return not self._open

    def troubles(self, now: float) -> dict[str, str]:
        """What is wrong at ``now``, s, in words by input, for diagnostics."""
        return {name: f"{t.wrong} for {now - t.since:.3f} s" for name, t in self._open.items()}

    def begin(self) -> None:
        """Start a tick."""
        self.deed, self.reason = GO_ON, ""

    def see(self, now: float, name: str, wrong: str) -> None:
        """Take what is wrong with an input at ``now``, s ("" for nothing); ``deed`` and ``reason`` are the hardest
        answer of this tick.
        """
        trouble = self._open.get(name)
        if not wrong:
            if trouble is not None:
                trouble.good += 1
                if trouble.good >= _GOOD:
                    del self._open[name]
            return
        if trouble is None:
            trouble = self._open[name] = _Trouble(now, wrong)
        trouble.wrong, trouble.good = wrong, 0
        self.counts[name, wrong] += 1
        lasting = now - trouble.since
        deed = ANSWERS[name, wrong].deed(lasting)
        if harder(deed, self.deed) != self.deed:
            self.deed, self.reason = deed, f"{name}: {wrong} for {lasting:.3f} s"

    def restart(self) -> None:
        """Time jumped, or a person reset it: count anew."""
        self._open.clear()
