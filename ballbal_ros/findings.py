"""What a check has found, and what would do about it."""

from __future__ import annotations

import attrs

OK, LOOK, WRONG = "ok", "look", "wrong"


@attrs.frozen
class Finding:
    """One line of a checkup: ``what`` was looked at within an ``area``, the ``verdict`` (ok, look or wrong),
    what was ``found``, and what to ``do`` about it; "" where nothing has to be done.
    """

    area: str
    what: str
    verdict: str
    found: str
    do: str = ""


def graded(value: float, look_at: float, wrong_at: float) -> str:
    """The verdict on a value of which less is worse where ``wrong_at`` < ``look_at``, and more is worse otherwise."""
    sign = 1.0 if wrong_at < look_at else -1.0
    # Not so if it is NaN either.
    if not sign * value >= sign * wrong_at:
        return WRONG
    return OK if sign * value >= sign * look_at else LOOK
