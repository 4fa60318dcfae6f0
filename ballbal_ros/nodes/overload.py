"""What balance does on a computer that lets its ticks come late; not in lock-step, where stamps wait for answers."""

from __future__ import annotations

import math

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.nodes.pace import TOO_LATE, Pace

_LATE_SECONDS = 2


def why_not_engage(pace: Pace, parameters: BalanceParameters, granted: bool) -> str:
    """Why it must not engage now, in words; "" where ticks come in time.

    A tick that comes late is a delay in the loop: in the mean of a second it bears half a period, and never more than
    ``drive_timeout``, past which what it answers is stale. ``granted``: whether it goes before other programs by
    SCHED_FIFO. Common practice, no source.
    """
    mean, worst = pace.lateness
    bears, stale = 0.5 * parameters.loop.period, parameters.drive_timeout
    if mean <= bears and worst <= stale:
        return ""
    if mean == math.inf:
        return "ticks have not been watched for a second yet"
    late = f"ticks come {1e3 * mean:.1f} ms late in the mean, {1e3 * worst:.0f} ms at worst"
    borne = f"to engage, it bears half a loop period ({1e3 * bears:g} ms) and drive_timeout ({1e3 * stale:g} ms)"
    do = "stop what keeps this computer busy" + ("" if granted else ", or have SCHED_FIFO granted (docs/overload.md)")
    return f"{late}; {borne}: {do}"


def why_stop(pace: Pace) -> str:
    """Why it must come to a controlled stop now, in words; "" for no reason: nobody can balance on a machine that is
    busy with something else.
    """
    if pace.late_seconds < _LATE_SECONDS:
        return ""
    return f"the loop comes late by more than {TOO_LATE:g} s each second: this computer is overloaded"
