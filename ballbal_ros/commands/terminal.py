"""A person at the terminal while the bus goes on: typed lines, and being told to end."""

from __future__ import annotations

import contextlib
import os
import select
import signal
import sys
from collections.abc import Callable, Iterator


class TypedLines:
    """Lines from standard input, one at a time; nothing waits for them."""

    def __init__(self) -> None:
        self._typed = b""

    def read(self, meanwhile: Callable[[], None]) -> str:
        """The next line, with ``meanwhile`` called again and again until it is there; "" at the end of the input."""
        while b"\n" not in self._typed:
            meanwhile()
            if select.select([sys.stdin], [], [], 0.0)[0]:
                more = os.read(sys.stdin.fileno(), 1024)
                if not more:
                    return ""
                self._typed += more
        line, _, self._typed = self._typed.partition(b"\n")
        return line.decode(errors="replace") + "\n"


@contextlib.contextmanager
def told_to_end() -> Iterator[list[int]]:
    """Ctrl-C, SIGTERM and a closed terminal are noted, and don't come between what must not be cut short."""
    told: list[int] = []
    signals = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
    before = {number: signal.signal(number, lambda which, _: told.append(which)) for number in signals}
    try:
        yield told
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
