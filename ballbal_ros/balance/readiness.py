"""What must hold before the loop engages."""

from __future__ import annotations

import math

from ballbal_ros.balance.guard_parameters import GuardParameters
from ballbal_ros.balance.senses import Senses
from ballbal_ros.balance.watch import Watch


def missing(
    limits: GuardParameters, senses: Senses, watch: Watch, off: tuple[float, float], off_rates: tuple[float, float]
) -> str:
    """What is missing to engage, in words; "" for nothing. How far lean and its rate (roll, pitch) are ``off``, rad
    and rad/s.
    """
    lean, rate = math.hypot(*off), math.hypot(*off_rates)
    for there, sense in ((senses.imu, "IMU"), (senses.drive, "drive"), (senses.arms, "arm")):
        if not there:
            return f"no {sense} data that can be used"
    if not watch.quiet:
        return "senses have only just come back"
    if not senses.attitude.settled:
        return "the attitude estimate settles"
    if not lean < limits.engage_lean:
        return f"{lean:.3f} rad off balance, limits.engage_lean is {limits.engage_lean:g}"
    if not rate < limits.engage_rate:
        return f"leans with {rate:.2f} rad/s, limits.engage_rate is {limits.engage_rate:g}"
    return ""
