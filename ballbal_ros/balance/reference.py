"""Where body and ball are meant to be at each tick: by a lean plan, by the measured arms, by commanded velocity."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from ballbal_ros.motion.lean_plan import REFERENCE_WIDTH, LeanPlan
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.whole_body import WholeBody

_ACCELERATION = 0.4
_TURNING = 0.8
_TORQUE = 0.01
_SAME = 1e-9


class Reference:
    """The reference of each tick, as ``row`` [17] (columns as in
    :data:`~ballbal_ros.motion.lean_plan.REFERENCE_WIDTH`).

    The ball's columns in ``row`` are relative to ``station`` (x, y in ``odom``), in the axes of ``frame_heading``.
    With no plan in
    force the lean is that which balances the measured arms (compensation ``planned`` and ``quasi_static``), or that
    at engage
    (``none``); after a plan's end it goes on from the plan's last lean and torque without a jump: what pulls at a hand
    then still does.
    """

    def __init__(self, body: WholeBody, period: float, torque_ahead: float, follow_arms: bool) -> None:
        self._body, self._period, self._ahead = body, period, torque_ahead
        self.follow_arms = follow_arms
        self.row = np.zeros(REFERENCE_WIDTH)
        self.station = [0.0, 0.0]
        self.frame_heading = 0.0
        self._heading = 0.0
        self._velocity = [0.0, 0.0, 0.0]
        self._wanted = [0.0, 0.0, 0.0]
        self._offset = (0.0, 0.0)
        self._held: tuple[float, float, float] | None = None
        self._frozen: tuple[float, float] | None = None
        self._tables: list[tuple[float, Array]] = []
        self.plan_stamp: float | None = None

    @property
    def has_plan(self) -> bool:
        """Whether a plan is in force or waits for its time."""
        return bool(self._tables)

    @property
    def waiting(self) -> int:
        """How many plans are in force or wait for their time."""
        return len(self._tables)

    def next_plan(self, now: float) -> tuple[float, Array] | None:
        """Stamp, s, and table of the plan that comes next, where one waits and none is in force at ``now``, s."""
        return self._tables[0] if self._tables and self._tables[0][0] > now else None

    def has_plan_within(self, now: float, ahead: float) -> bool:
        """Whether a plan is in force at ``now``, or begins within ``ahead`` of it, s."""
        coming = self.next_plan(now)
        return self.has_plan and (coming is None or coming[0] - now < ahead)

    def off_station(self, row: list[float], ball: Sequence[float]) -> tuple[float, float]:
        """Distance of a ``ball`` (x, y in ``odom``, m) from where ``row`` means it to be, in heading axes, m."""
        station, sin, cos = self.station, math.sin(self.frame_heading), math.cos(self.frame_heading)
        x = ball[0] - station[0] - cos * row[4] + sin * row[5]
        y = ball[1] - station[1] - sin * row[4] - cos * row[5]
        sin, cos = math.sin(row[8]), math.cos(row[8])
        return cos * x + sin * y, cos * y - sin * x

    def engage(self, arm_position: Array) -> None:
        """Station here, heading zero; plans whose time is to come stay."""
        self.station, self.frame_heading = [0.0, 0.0], 0.0
        self._velocity, self._wanted = [0.0] * 3, [0.0] * 3
        self._offset, self._held = (0.0, 0.0), None
        self.row[:] = 0.0
        self._frozen = None
        self._frozen = None if self.follow_arms else self.equilibrium(arm_position)

    def follow(self, follow_arms: bool, arm_position: Array) -> None:
        """Change whether the lean follows the measured arms; it goes on from where it is, without a jump."""
        if follow_arms == self.follow_arms:
            return
        self.follow_arms = follow_arms
        here = float(self.row[0]), float(self.row[1])
        if follow_arms:
            self._frozen = None
            roll, pitch = self.equilibrium(arm_position)
            self._offset = here[0] - roll, here[1] - pitch
        else:
            self._frozen, self._offset = here, (0.0, 0.0)

    def equilibrium(self, arm_position: Array) -> tuple[float, float]:
        """(roll, pitch) that puts the mass centre of the measured arms above the ball, rad."""
        if self._frozen is not None:
            return self._frozen
        x, y, z = self._body.center_of_mass(arm_position).tolist()
        return math.atan2(y, z), math.atan2(-x, math.hypot(y, z))

    def add_plan(self, stamp: float, plan: LeanPlan) -> None:
        """Follow a plan from its stamp (s) on; of plans that wait, those that start later are replaced by it."""
        self._tables = [entry for entry in self._tables if entry[0] < stamp - 1e-9]
        self._tables.append((stamp, plan.table(self._period, self._ahead)))

    def withdraw(self, stamp: float, now: float) -> bool:
        """Forget the plan that begins at a stamp, s, and say whether there was one; one that has begun by ``now`` goes
        on.
        """
        kept = [entry for entry in self._tables if entry[0] <= now or abs(entry[0] - stamp) > _SAME]
        there = len(kept) < len(self._tables)
        self._tables = kept
        return there

    def lean_at(self, stamp: float) -> tuple[float, float]:
        """(roll, pitch) that is planned for a time to come, s; the present one where no plan reaches it, rad."""
        for start, table in reversed(self._tables):
            if start <= stamp + 1e-9:
                row = table[min(int((stamp - start) / self._period + 0.5), len(table) - 1)]
                return float(row[0]), float(row[1])
        return float(self.row[0]), float(self.row[1])

    def cancel_plans(self, arm_position: Array) -> None:
        """Forget all plans; the lean goes on from where it is, without a jump."""
        if self._tables:
            self._end_plan(arm_position)
        self._tables.clear()

    def set_velocity(self, x: float, y: float, turning: float) -> None:
        """Commanded velocity of the ball (m/s, heading axes) and of the heading (rad/s); reached with a bounded
        acceleration.
        """
        self._wanted = [x, y, turning]

    def update(self, stamp: float, arm_position: Array) -> Array:
        """The reference row of this tick."""
        tables = self._tables
        while len(tables) > 1 and tables[1][0] <= stamp + 1e-9:
            self._give_up(tables[1][0], *tables.pop(0))
        if tables and tables[0][0] <= stamp + 1e-9:
            start, table = tables[0]
            index = int((stamp - start) / self._period + 0.5)
            if index < len(table):
                if self.plan_stamp != start:
                    self.plan_stamp, self.frame_heading = start, self.row[8]
                    self._heading = self.row[8] - table[0, 8]
                self.row[:] = table[index]
                self.row[8] += self._heading
                return self.row
            self.row[:] = table[-1]
            self.row[8] += self._heading
            self._end_plan(arm_position)
            self._hold_torque(table[-1])
            tables.pop(0)
        return self._unplanned(arm_position)

    def _give_up(self, time: float, start: float, table: Array) -> None:
        """A plan is taken over by another at a time, s: the station is where its ball is meant to be just then."""
        index = int((time - start) / self._period + 0.5)
        if self.plan_stamp == start:
            self.row[4:6] = table[min(index, len(table) - 1), 4:6]
        self._move_station()

    def _move_station(self) -> None:
        """Move the station to where a plan's ball is, as what follows counts from there."""
        sin, cos = math.sin(self.frame_heading), math.cos(self.frame_heading)
        x, y = float(self.row[4]), float(self.row[5])
        self.station[0] += cos * x - sin * y
        self.station[1] += sin * x + cos * y
        self.row[4:6] = 0.0

    def _end_plan(self, arm_position: Array) -> None:
        self._move_station()
        self.frame_heading = float(self.row[8])
        if self._frozen is not None:
            self._frozen = (float(self.row[0]), float(self.row[1]))
        else:
            roll, pitch = self.equilibrium(arm_position)
            self._offset = (float(self.row[0]) - roll, float(self.row[1]) - pitch)
        self.plan_stamp = None

    def _hold_torque(self, row: Array) -> None:
        """What the drive gives at a plan's end against a pull, it goes on giving: ``row`` [17] is the plan's last."""
        x, y, z = row[10:13].tolist()
        self._held = (x, y, z) if max(abs(x), abs(y), abs(z)) > _TORQUE else None

    def _unplanned(self, arm_position: Array) -> Array:
        row = self.row
        roll, pitch = self.equilibrium(arm_position)
        row[2:] = 0.0
        if self._held is not None:
            row[10:13] = self._held
        heading = float(self.frame_heading)
        row[0], row[1] = roll + self._offset[0], pitch + self._offset[1]
        if self._wanted != [0.0, 0.0, 0.0] or self._velocity != [0.0, 0.0, 0.0]:
            heading = self._roll_on(heading)
        row[8] = heading
        return row

    def _roll_on(self, heading: float) -> float:
        """Move station and heading by the commanded velocity, whose changes are bounded."""
        period, velocity = self._period, self._velocity
        for axis, most in ((0, _ACCELERATION), (1, _ACCELERATION), (2, _TURNING)):
            gap = self._wanted[axis] - velocity[axis]
            velocity[axis] += max(-most * period, min(most * period, gap))
        sin, cos = math.sin(heading), math.cos(heading)
        self.station[0] += period * (cos * velocity[0] - sin * velocity[1])
        self.station[1] += period * (sin * velocity[0] + cos * velocity[1])
        self.frame_heading = heading + period * velocity[2]
        self.row[6], self.row[7], self.row[9] = velocity[0], velocity[1], velocity[2]
        return self.frame_heading
