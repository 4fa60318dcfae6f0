"""The errors of this package: one base class that carries the evidence and what would do instead."""

from __future__ import annotations

import difflib
import reprlib
from collections.abc import Iterable
from typing import Any

_MOST = 420


def _one_line(text: str) -> str:
    """A text in one line, and no more of it than one reads."""
    line = " ".join(text.split())
    return line if len(line) <= _MOST else f"{line[: _MOST - 20]} … and so on"


class BallbalError(Exception):
    """Something given to the program is wrong, or can't be done.

    ``where`` names the file, topic or object; ``what`` the key and what was found; ``remedy`` what would do.
    ``str()`` is one line: *where: what; remedy*, the latter two no longer than one reads.
    """

    def __init__(self, where: str, what: str, remedy: str = "") -> None:
        self.where, self.what, self.remedy = where, what, remedy
        words = (" ".join(where.split()), _one_line(what), _one_line(remedy))
        super().__init__(f"{words[0]}: {words[1]}{'; ' + words[2] if words[2] else ''}")


class ParameterError(BallbalError):
    """A parameter is unknown, missing, of the wrong type or out of its range."""


class ModelError(BallbalError):
    """A robot description (URDF, masses, geometry) is impossible or incomplete."""


class PlanError(BallbalError):
    """A plan can't be read, or is not possible for this robot."""


class PlanRefused(PlanError):
    """A plan is well formed, but would take the robot beyond its limits, or can't be followed now."""


def nearest(name: str, known: Iterable[str]) -> str:
    """Say which known name is meant, or list those there are: the ``remedy`` for an unknown name."""
    names = sorted(known)
    close = difflib.get_close_matches(name, names, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]}?"
    return f"known: {', '.join(names)}" if names else "none is known here"


def shown(value: Any) -> str:
    """A value as an error shows it: not more of it than a line has room for."""
    text = reprlib.Repr().repr(value)
    return text if len(text) <= 80 else f"{text[:77]}..."
