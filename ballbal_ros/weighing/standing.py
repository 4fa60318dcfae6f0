"""Watches a robot that stands: reads its balance in each posture, and notices when something is taken or put down."""

from __future__ import annotations

import math
from collections.abc import Iterable

import attrs
import numpy as np

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.loads import Load
from ballbal_ros.weighing.hand_load import HandLoadEstimate, HandWeighing, good_enough
from ballbal_ros.weighing.reading import Reading
from ballbal_ros.weighing.resting import resting

EVERY = 0.02
"""How often the watch wants to look, s."""
_LOOKS = 50
_SMOOTHING = 0.1
_REST_SPEED = 5e-3
_REST_LEAN_RATE = 0.02
_PLANNED_RATE, _PLANNED_ACCELERATION = 2e-3, 2e-3
_ARMS_STILL = 2e-3
_FARTHEST = 0.15
# Of chi-square with two degrees of freedom, exceeded by chance once in a hundred times (tables).
_SURPRISE = 9.21
TAKEN, PUT_DOWN, PULLED = "taken", "put down", "pulled"


@attrs.frozen
class HandEvent:
    """At ``time`` s something was taken into ``hand`` or put down from it, about ``mass`` kg; or something else pulls
    at the robot (``hand`` "").
    """

    time: float
    what: str
    hand: str
    mass: float


class StandingWatch:
    """Looks at the loop every :data:`EVERY` s, between its ticks; ``estimates`` by hand, ``events`` in their order.

    A reading is the mean over a second in which ball, body and arms are at rest. One that differs from the last
    of the same posture by more than ``hand_load.event`` is an event: a push is over by then.
    """

    def __init__(self, loop: BalanceLoop) -> None:
        self._loop = loop
        self._given = loop.parameters.hand_load
        time = loop.parameters.attitude_time
        self.weighing = HandWeighing(loop.description, self._given, loop.body.loads.values(), time)
        self.estimates: dict[str, HandLoadEstimate] = {}
        self.events: list[HandEvent] = []
        self.readings = 0
        self._known = dict(loop.body.loads)
        self._found: set[str] = set()
        self._settled: Reading | None = None
        self._arms = np.zeros(loop.description.joint_count)
        self._velocity = (0.0, 0.0)
        self._begin()

    def _begin(self) -> None:
        self._looks: list[tuple[float, ...]] = []

    def see(self, now: float) -> tuple[Load, ...]:
        """Look at the loop at ``now``, s; the loads that were found and are good enough to be used from now on."""
        loop = self._loop
        self._told()
        arms, ball = loop.senses.arm_position, loop.ball
        moved = float(np.abs(arms - self._arms).max()) > _ARMS_STILL
        if moved:
            self._arms[:] = arms
            self._settled = None
        roll_rate, pitch_rate, _ = loop.attitude.rates
        vx, vy = self._velocity
        vx, vy = self._velocity = vx + _SMOOTHING * (ball.vx - vx), vy + _SMOOTHING * (ball.vy - vy)
        rests = loop.guard.state == BALANCING and not moved and self._planned_at_rest()
        if not rests or math.hypot(vx, vy) > _REST_SPEED or math.hypot(roll_rate, pitch_rate) > _REST_LEAN_RATE:
            self._begin()
            return ()
        self._looks.append((now, *loop.lean, ball.x, ball.y, ball.vx, ball.vy))
        if len(self._looks) <= _LOOKS:
            return ()
        reading = resting(self._arms.copy(), np.array(self._looks), loop.heading)
        self._begin()
        return self._take(now, reading)

    def _planned_at_rest(self) -> bool:
        """Whether no plan leans the body just now, before the arms begin or after they have come to rest."""
        row = self._loop.reference.row
        return float(np.abs(row[2:4]).max()) < _PLANNED_RATE and float(np.abs(row[13:17]).max()) < _PLANNED_ACCELERATION

    def _told(self) -> None:
        """Loads that somebody announced are taken at their word."""
        for hand in self.weighing.hands:
            held = self._loop.body.loads.get(hand)
            if held is not self._known.get(hand):
                if hand not in self._found:
                    self.weighing.tell(held or Load(hand, 0.0))
                    self.estimates.pop(hand, None)
                    self._settled = None
                    self._begin()
                self._found.discard(hand)
                self._known = dict(self._loop.body.loads)

    def _take(self, now: float, reading: Reading) -> tuple[Load, ...]:
        self.readings += 1
        before, self._settled = self._settled, reading
        if before is not None:
            change = self.weighing.missing_moment(reading) - self.weighing.missing_moment(before)
            if float(np.hypot(*change)) > self._given.event:
                self._happened(now, reading, change)
        self.weighing.add(reading)
        good: list[Load] = []
        for hand in self.weighing.hands:
            estimate = self.weighing.estimate(hand)
            if estimate.prior_error <= 0.0:
                continue
            self.estimates[hand] = estimate
            if good_enough(estimate, self._given):
                good.append(estimate.load)
        return tuple(good) if good and self.weighing.surprise(self._loop.body.loads) > _SURPRISE else ()

    def adopted(self, loads: Iterable[Load]) -> None:
        """The loop believes these now, by :meth:`~ballbal_ros.balance.loop.BalanceLoop.adopt_load`."""
        self._found.update(load.hand for load in loads)

    def _happened(self, now: float, reading: Reading, change: Array) -> None:
        """Find the hand that the change fits best: that whose load would have to be least far from it."""
        best = HandEvent(now, PULLED, "", 0.0)
        nearest = _FARTHEST
        for hand in self.weighing.hands:
            lever = self.weighing.lever(reading, hand)[:, 0]
            mass = float(lever @ change) / float(lever @ lever)
            held = self._loop.body.loads.get(hand)
            least, most = -1.2 * held.mass if held else 0.0, self._loop.description.parameters.hands.load_limit
            if not least <= mass <= 1.2 * most:
                continue
            away = float(np.hypot(*(change - lever * mass))) / (9.80665 * max(abs(mass), 1e-3))
            if away < nearest:
                nearest = away
                best = HandEvent(now, TAKEN if mass > 0.0 else PUT_DOWN, hand, abs(mass))
        self.events.append(best)
        if best.hand:
            self.weighing.open(best.hand)
            self.estimates.pop(best.hand, None)
        else:
            self.weighing.disturb()
