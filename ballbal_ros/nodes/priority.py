"""Going before other programs on a busy machine, where that is allowed: real-time scheduling and locked memory."""

from __future__ import annotations

import ctypes
import os
from pathlib import Path

_LOCK_ALL = 3  # MCL_CURRENT | MCL_FUTURE


class Scheduling:
    """What the system granted this process. ``told`` says it for diagnostics; ``granted``: whether it goes before other
    programs.
    """

    told = "ordinary, memory not locked: not asked for"
    granted = False

    @classmethod
    def hurry(cls, priority: int) -> None:
        """Ask for SCHED_FIFO at a priority (1 to 99) for all threads of this process, and for memory that stays in."""
        if priority <= 0:
            return
        try:
            for task in Path("/proc/self/task").iterdir():
                os.sched_setscheduler(int(task.name), os.SCHED_FIFO, os.sched_param(priority))
            cls.granted, scheduling = True, f"SCHED_FIFO {priority}"
        except (OSError, ValueError) as error:
            scheduling = f"ordinary: SCHED_FIFO {priority} was not granted ({error})"
        locked = ctypes.CDLL(None, use_errno=True).mlockall(_LOCK_ALL) == 0
        cls.told = f"{scheduling}, memory {'locked' if locked else 'not locked: not granted'}"
