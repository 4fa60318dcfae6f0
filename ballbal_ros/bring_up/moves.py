"""Small, bounded moves of one actuator after the other, and what they say of order, sign, torque constant and encoder.

The robot hangs clear of the floor, its ball free in its cage. The moves are open loop: nothing that an encoder says
makes the torque larger. A push lasts for a few tenths of a second at the most, with a small share of the rated torque.
"""

from __future__ import annotations

import math
from collections.abc import Generator

import numpy as np

from ballbal_ros.bring_up.hand_turns import EncoderMap
from ballbal_ros.bring_up.pulse import BRAKE, Record
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.drive import Drive

GREATEST_SHARE = 0.15
"""No push is allowed more than this share of an actuator's rated torque."""
_LEVELS = (0.25, 0.5, 1.0)
_TRAVEL, _MOVED, _TOO_FAR = 0.4, 0.05, 6.0
_SHORTEST, _LONGEST = 0.04, 0.4
_STILL, _STILL_FOR, _PATIENCE = 0.004, 0.15, 4.0


class SmallMoves:
    """Gives each tick's efforts, and gathers what comes of them. Feed :meth:`tick` with every ``drive_states``.

    ``answers``: per actuator as commanded, the records of a push one way and the other; empty for one that moved
    nothing. ``saying``: what it does now.
    """

    def __init__(self, drive: Drive, ball_inertia: float, encoders: EncoderMap, share: float = 0.05) -> None:
        """``share`` of each actuator's ``effort_limit`` that is never exceeded."""
        if not 0.0 < share <= GREATEST_SHARE:
            raise BallbalError("--share", f"is {share:g}", f"it takes more than 0 and at most {GREATEST_SHARE:g}")
        self.drive, self.ball_inertia, self._encoders = drive, ball_inertia, encoders
        self._most = share * drive.effort_limit
        self.model = expected_response(drive, ball_inertia)
        self._none = np.zeros(len(drive.names))
        self.answers: list[list[Record]] = [[] for _ in drive.names]
        self.largest = np.zeros(len(drive.names))
        self.smallest_step = np.full(len(drive.names), np.inf)
        self.period = math.inf
        self.done, self.saying = False, "waits until all is still"
        self._now, self._reading, self._last = -math.inf, self._none, self._none
        self._step = self._run()

    def tick(self, now: float, reading: Array) -> Array:
        """Efforts [n], N m, that answer the encoders' angles [n], rad, at ``now``, s; zeros once it is done.

        Raises :class:`BallbalError` where something turns much further than it should.
        """
        if not np.isfinite(reading).all():
            raise BallbalError("drive_states", f"has the angles {reading.tolist()}", "mend the driver")
        if self.done or now <= self._now:
            # One that came before is answered as before.
            return self._last.copy()
        if math.isfinite(self._now):
            self._look_at_steps(now, reading)
        self._now, self._reading = now, reading.copy()
        try:
            self._last = np.clip(next(self._step), -self._most, self._most)
        except StopIteration:
            self.done, self.saying, self._last = True, "done", self._none
        return self._last.copy()

    def _look_at_steps(self, now: float, reading: Array) -> None:
        self.period = min(self.period, now - self._now)
        step = np.abs(reading - self._reading)
        self.smallest_step = np.where(step > 1e-9, np.minimum(self.smallest_step, step), self.smallest_step)

    def _run(self) -> Generator[Array, None, None]:
        yield from self._rest()
        for index, name in enumerate(self.drive.names):
            for level in _LEVELS:
                effort = level * float(self._most[index])
                self.saying = f"{name}: {effort:.2g} N m, there and back"
                forth = yield from self._push(index, effort)
                if forth is None:
                    continue
                back = yield from self._push(index, -effort)
                self.answers[index] = [record for record in (forth, back) if record is not None]
                break

    def _push(self, index: int, effort: float) -> Generator[Array, None, Record | None]:
        """Push, brake and rest; returns the record, None where nothing moved enough to tell."""
        accelerates = float(self.model[index, index]) * abs(effort)
        push = min(max(math.sqrt(_TRAVEL / accelerates), _SHORTEST), _LONGEST)
        began, first = self._now, self._encoders.true_angle(self._reading)
        self.largest[index] = max(self.largest[index], abs(effort))
        times, angles = [0.0], [first]
        efforts = self._none.copy()
        while self._now - began < push * (1.0 + BRAKE):
            efforts[index] = effort if self._now - began < push else -effort
            yield efforts.copy()
            times.append(self._now - began)
            angles.append(self._encoders.true_angle(self._reading))
            self._check_way(angles[-1] - first)
        yield from self._rest()
        turned = np.nanmax(np.abs(np.array(angles) - first), initial=0.0)
        # The command changed at ticks, not at any instant.
        switched = next((t for t in times if t >= push), push)
        return Record(np.array(times), np.array(angles), effort, switched) if turned >= _MOVED else None

    def _rest(self) -> Generator[Array, None, None]:
        """No torque until nothing has turned for a while."""
        began, since, at = self._now, self._now, self._reading
        while self._now - since < _STILL_FOR:
            yield self._none.copy()
            if np.abs(self._reading - at).max() > _STILL:
                since, at = self._now, self._reading
            if self._now - began > _PATIENCE:
                raise BallbalError(
                    "drive_states",
                    f"the ball still turns {_PATIENCE:g} s after the last push",
                    "hold it still; if it turns by itself, the drive is not in torque mode",
                )

    def _check_way(self, way: Array) -> None:
        if np.nanmax(np.abs(way), initial=0.0) > _TOO_FAR:
            raise BallbalError(
                "drive_states",
                f"an actuator turned by more than {_TOO_FAR:g} rad in a push meant for {_TRAVEL:g}",
                "is the drive in torque mode, in N m at the wheel? mend that first",
            )


def expected_response(drive: Drive, ball_inertia: float) -> Array:
    """A [n, n], rad/s²/(N m): acceleration of actuator j for an effort of actuator i, the ball free in its cage."""
    turning = ball_inertia * np.eye(3) + drive.reflected_inertia
    return np.asarray(drive.rate_map @ np.linalg.solve(turning, drive.rate_map.T))
