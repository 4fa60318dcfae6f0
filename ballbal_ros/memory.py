"""Python's memory, where a loop is to run evenly."""

from __future__ import annotations

import gc


def settle_memory() -> None:
    """Collect what set-up left behind and take the rest out of later collections, which would stop a loop for 30 ms."""
    gc.collect()
    gc.freeze()
