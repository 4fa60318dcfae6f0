"""Whether the loop can follow a lean plan that it is offered: the checks before it is acknowledged."""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.balance.guard import BALANCING, ENGAGING, STOPPING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_plan import LeanPlan

_TOPIC = "lean_plan"
_MOST_WAITING = 8


def check_plan(plan: LeanPlan, start: float, now: float, loop: BalanceLoop) -> None:
    """Raise :class:`PlanRefused` in one line unless the loop can follow the plan from ``start`` (s) on; ``now`` is its
    last tick.

    Refused: while it does not balance, a start that is past, a lean, speed or turning beyond robot.yaml's ``limits``,
    a torque beyond what it may command, and a lean that begins elsewhere than where the reference will be.
    """
    guard, limits = loop.guard, loop.description.parameters.limits
    if guard.state not in (ENGAGING, BALANCING, STOPPING):
        raise PlanRefused(
            _TOPIC, f"came while the balance is {guard.state}", "send it once balance_state says balancing"
        )
    if start < now - 1e-9:
        raise PlanRefused(
            _TOPIC, f"starts at {start:.3f} s, and it is {now:.3f} s", "give it a start that is still to come"
        )
    if loop.reference.waiting >= _MOST_WAITING:
        raise PlanRefused(_TOPIC, f"came while {loop.reference.waiting} plans wait for their time", "send it later")
    age, oldest = loop.senses.arms_age(now), loop.parameters.arms_timeout
    if loop.clock.now > -math.inf and age > oldest:
        raise PlanRefused(_TOPIC, f"came while joint_states are {age:.2f} s old", f"they may be {oldest:g} s old")
    speed = float(np.hypot(*plan.ball_rate.T).max())
    if speed > limits.ball_speed:
        raise PlanRefused(_TOPIC, f"rolls with {speed:.3g} m/s", f"limits.ball_speed is {limits.ball_speed:g} m/s")
    turning = float(np.abs(plan.heading_rate).max())
    if turning > limits.heading_rate:
        what = f"turns with {turning:.3g} rad/s"
        raise PlanRefused(_TOPIC, what, f"limits.heading_rate is {limits.heading_rate:g} rad/s")
    lean = float(np.hypot(*plan.lean.T).max())
    if lean > limits.lean:
        raise PlanRefused(_TOPIC, f"leans {lean:.3f} rad", f"limits.lean is {limits.lean:g} rad")
    torque = float(np.abs(plan.torque).max())
    if torque > limits.drive_torque:
        raise PlanRefused(
            _TOPIC, f"has a torque of {torque:.3g} N m", f"limits.drive_torque is {limits.drive_torque:g} N m"
        )
    roll, pitch = loop.reference.lean_at(start)
    jump = math.hypot(float(plan.lean[0, 0]) - roll, float(plan.lean[0, 1]) - pitch)
    most = loop.parameters.limits.engage_lean
    if jump > most:
        raise PlanRefused(
            _TOPIC,
            f"begins {jump:.3f} rad from where the lean will be",
            f"it takes at most {most:g} rad: plan from where it is",
        )
