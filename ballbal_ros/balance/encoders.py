"""From the drive's encoders to how the ball has turned under the body; encoders may jump, stick or stay silent."""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

Triple = tuple[float, float, float]

_SOON = 1e-9
_GAP = 25
_SETTLING = 50
_SHAKES = 0.0015
_SHARE = 0.1
_ALONE = 4.0
_SLIDES = 4
_SMOOTH = 10
_STILL_TICKS = 5
_STILL_STEPS = 20.0
_STILL_ANGLE = 2e-3


class Encoders:
    """Looks at drive data. After a :meth:`look` without complaint ``turn`` is the ball's turn relative to the body
    since the look before that had none (3 numbers, rad, ``base_link``); ``one_bad`` says what is wrong with a single
    encoder, or "".

    With n encoders good the turn is the least-squares one of n. One that jumps or sticks is left out; where the others
    do not suffice, the third equation is that the floor holds the ball's spin, so that the gyro shows the turn about
    z.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters) -> None:
        drive = description.drive
        self._late, self._most = parameters.drive_timeout, parameters.limits.wheel_jump
        self._fastest: Array = 1.5 * drive.rate_limit
        self._start, self._slip = parameters.limits.wheel_start, parameters.limits.wheel_slip
        self._names = drive.names
        self._rate_map = np.ascontiguousarray(drive.rate_map)
        self._spin_map = np.ascontiguousarray(drive.spin_map)
        self._without = [_without(self._rate_map, i) for i in range(len(drive.names))]
        self._still = np.maximum(_STILL_STEPS * drive.encoder_step, _STILL_ANGLE).tolist()
        self._stamp = -math.inf
        self._last: Array | None = None
        self._expected = np.zeros(3)
        self._waited = 0
        self._by_spin, self._spin = self._rate_map[:, 2].copy(), 0.0
        self._quiet = [0] * len(drive.names)
        self._missed = [0.0] * len(drive.names)
        self._stuck: set[int] = set()
        self.turn: Triple = (0.0, 0.0, 0.0)
        self.rate: Array = np.zeros(len(drive.names))
        self.one_bad, self.bad_name = "", ""
        self.gap = False
        self.spin_held = True
        self._settling = self._lost = self._smooth = 0
        self._runs, self._ran = 0, -1
        self._shaking = [0.0] * len(drive.names)
        self._moved = [0.0] * len(drive.names)

    def restart(self) -> None:
        """The clock jumped, or it begins anew: the next sample is where it starts from."""
        self._stamp, self._last = -math.inf, None
        self._stuck.clear()
        self._quiet = [0] * len(self._names)
        self._missed = [0.0] * len(self._names)

    @property
    def sliding(self) -> int | None:
        """The index of an actuator that has been off alone for several ticks now: it slides on the ball, or nothing
        holds it.
        """
        return self._ran if self._runs >= _SLIDES else None

    def pass_over(self, expected: Triple) -> None:
        """A tick without a look; ``expected`` as there."""
        self._expected += expected
        self._waited += 1

    def look(self, measured: Measurement, now: float, expected: Triple | None, period: float) -> str:
        """What is wrong with this tick's drive data as a whole; "" for nothing.

        ``expected``: rate of the ball relative to the body that model and other senses expect, rad/s, ``base_link``;
        None where the loop does not run. ``period``: time since the look before, s.
        """
        if expected is not None:
            self._expected += expected
        self._waited += 1
        self.one_bad, self.gap = "", False
        stamp = measured.stamp if measured.drive_stamp is None else measured.drive_stamp
        if not stamp > self._stamp + _SOON:
            return "silent"
        if not now - stamp <= self._late:
            return "late"
        angle = measured.drive_angle
        if not math.isfinite(float(angle @ angle)):
            return "not finite"
        self._stamp = stamp
        last, self._last = self._last, angle.copy()
        ticks, waited = self._waited, self._expected * period
        self._waited, self._expected[:] = 0, 0.0
        if last is None:
            self.turn = (0.0, 0.0, 0.0)
            return ""
        moved = angle - last
        self.rate = moved / (ticks * period)
        if ticks > _GAP and expected is not None:
            self._gap(long=True)
            return ""
        bad = self._bad(moved, waited if expected is not None else None, ticks, period)
        if len(bad) > 1:
            self._lost += 1
            # All turn smoothly, only not as expected: then it is the expectation that is wrong.
            if self._smooth < _SMOOTH:
                return "encoders absurd"
            self._gap(long=True)
            return ""
        if self._lost:
            self._gap(long=self._lost > _GAP)
            return ""
        if not bad:
            self._runs = 0
            x, y, z = (self._spin_map @ moved).tolist()
            self.turn, self._spin = (x, y, z), z / ticks
            return ""
        (index,) = bad
        self._runs = self._runs + 1 if index == self._ran and bad[index] != "stuck" else 1
        self._ran = index
        self.one_bad, self.bad_name = bad[index], self._names[index]
        moved[index] = 0.0
        z = 0.0 if expected is None else float(waited[2]) if self.spin_held else self._spin * ticks
        x, y, z = (self._without[index] @ np.append(moved, z)).tolist()
        self.turn = (x, y, z)
        return ""

    def _single_out(self, off: list[float], bad: dict[int, str]) -> None:
        """One that is off alone slides on the ball; what the model does not know of shows in several."""
        most = max(off)
        index = off.index(most)
        if most > self._slip and all(_ALONE * o < most for i, o in enumerate(off) if i != index):
            bad[index] = "slip"

    def _gap(self, long: bool) -> None:
        """How it moved meanwhile can't be told; from here on it can."""
        self.gap, self._lost = True, 0
        if long:
            self._settling, self._moved = _SETTLING, [0.0] * len(self._names)

    def _bad(self, moved: Array, expected: Array | None, ticks: int, period: float) -> dict[int, str]:
        """What is wrong with which encoder."""
        if expected is None:
            if self._stuck or any(self._quiet):
                self._stuck.clear()
                self._quiet = [0] * len(self._names)
            far = np.abs(moved) > self._fastest * (ticks * period)
            return {int(i): "jump" for i in np.flatnonzero(far)} if far.any() else {}
        bad: dict[int, str] = {}
        due = (self._rate_map @ expected).tolist()
        # The ball may spin, but not all at once.
        spin = (self._by_spin * (self._spin * ticks - float(expected[2]))).tolist()
        most = self._most * (1.0 + 0.1 * (ticks - 1))
        last, self._moved = self._moved, [d / ticks for d in moved.tolist()]
        if self._settling:
            # It has only just been heard again: what was expected meanwhile may be far off.
            self._settling -= 1
            return {i: "jump" for i, d in enumerate(self._moved) if abs(d) > self._fastest[i] * period}
        shaking, frozen, smooth = self._shaking, not any(self._moved), True
        for i, d in enumerate(moved.tolist()):
            shaken = abs(d / ticks - last[i])
            shaking[i] += _SHARE * (min(shaken, 3.0 * _SHAKES) - shaking[i])
            smooth = smooth and d != 0.0 and shaken <= self._start and shaking[i] <= _SHAKES
            if d == 0.0:
                self._quiet[i] += 1
                self._missed[i] += due[i]
                if self._quiet[i] >= _STILL_TICKS and abs(self._missed[i]) > self._still[i]:
                    self._stuck.add(i)
                if i in self._stuck:
                    bad[i] = "stuck"
                continue
            if self._quiet[i]:
                self._quiet[i], self._missed[i] = 0, 0.0
                if i in self._stuck:
                    # What it says now is from where it stood: the next difference can be used.
                    self._stuck.discard(i)
                    bad[i] = "stuck"
                    continue
            if not abs(d - due[i] - spin[i]) <= most or not shaken <= self._start or shaking[i] > _SHAKES:
                bad[i] = "jump"
        self._smooth = self._smooth + 1 if smooth and len(bad) > 1 else 0
        # With the ball free to spin there is no third equation to do without one.
        if self.spin_held and not bad:
            self._single_out([abs(d - e) for d, e in zip(moved.tolist(), due)], bad)
        if bad and frozen and min(self._quiet) >= _STILL_TICKS:
            return dict.fromkeys(range(len(self._names)), "stuck")
        return bad


def _without(rate_map: Array, index: int) -> Array:
    """[3, n + 1]: turns of the actuators and about z → turn of the ball, with the one actuator left out."""
    count = len(rate_map)
    rows = rate_map.copy()
    rows[index] = 0.0
    enough = np.linalg.svd(rows, compute_uv=False)[-1] > 0.1 * np.linalg.svd(rate_map, compute_uv=False)[-1]
    z = np.zeros((1, 3)) if enough else np.array([[0.0, 0.0, 1.0]])
    solved = np.linalg.pinv(np.vstack((rows, z)))
    solved[:, index] = 0.0
    return np.asarray(solved.reshape(3, count + 1))
