"""What the world exerts on the hands over time, as plan files tell it: a door, a cart, somebody who holds on.

A force at a hand moves the equilibrium lean by its moment about the contact, and a horizontal one is borne by the
floor: at rest the drive must hold the ball against it with the torque r f, and the floor must give f by friction.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import attrs
import numpy as np

from ballbal_ros.motion.plan_request import HandWrench
from ballbal_ros.robot.arrays import Array

Vector = tuple[float, float, float]


@attrs.frozen
class Pull:
    """From ``time``, s, on a hand's force [3], N, and moment [3], N m, go evenly to these in ``during`` s, and stay.

    They act at the hand link's origin, in ``base_footprint`` axes. ``announced``: the planner is told.
    """

    time: float
    during: float
    hand: str
    force: Vector
    moment: Vector
    announced: bool


def hand_wrenches(pulls: Iterable[Pull], later: float = 0.0) -> tuple[HandWrench, ...]:
    """The pulls' forces and moments over time, one for each hand that has any; ``later`` s is added to their times."""
    by_hand: dict[str, list[Pull]] = {}
    for pull in sorted(pulls, key=lambda each: each.time):
        by_hand.setdefault(pull.hand, []).append(pull)
    return tuple(_wrench(hand, each, later) for hand, each in by_hand.items())


def _wrench(hand: str, pulls: Sequence[Pull], later: float) -> HandWrench:
    times, values = [pulls[0].time], [np.zeros(6)]
    for pull in pulls:
        if pull.time > times[-1]:
            times.append(pull.time)
            values.append(values[-1])
        times.append(pull.time + pull.during)
        values.append(np.array([*pull.force, *pull.moment]))
    table = np.array(values)
    return HandWrench(hand, np.array(times) + later, table[:, :3], table[:, 3:])


def joined(standing: Sequence[HandWrench], coming: Sequence[HandWrench], begin: float) -> list[HandWrench]:
    """Wrenches that go on as they stand until ``begin``, s, and from then on as ``coming`` ones say for their hands.

    A hand that nothing new is said of keeps what it has; where the new begins with another force, it steps.
    """
    new = {wrench.hand: wrench for wrench in coming}
    out = [wrench for wrench in standing if wrench.hand not in new]
    for wrench in coming:
        old = next((each for each in standing if each.hand == wrench.hand), None)
        if old is None:
            out.append(wrench)
            continue
        first = max(begin, float(wrench.times[0]))
        kept = np.append(old.times[old.times < first - 1e-6], first - 1e-6)
        before, after = [_at(old, kept)], wrench.times >= first
        out.append(
            HandWrench(
                wrench.hand,
                np.concatenate((kept, wrench.times[after])),
                np.concatenate((before[0][:, :3], wrench.force[after])),
                np.concatenate((before[0][:, 3:], wrench.moment[after])),
            )
        )
    return out


def _at(wrench: HandWrench, times: Array) -> Array:
    """Force and moment [N, 6] at times [N], s."""
    columns = np.concatenate((wrench.force, wrench.moment), axis=1)
    return np.stack([np.interp(times, wrench.times, column) for column in columns.T], axis=1)


def at_time(wrench: HandWrench, time: float) -> tuple[Array, Array]:
    """Force [3], N, and moment [3], N m, at one time, s."""
    both = _at(wrench, np.array([time]))[0]
    return both[:3], both[3:]
