"""From the drive's encoders to how the ball has turned under the body; encoders may jump, stick or stay silent."""

from __future__ import annotations

import math
from operator import mul

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
_SHAKEN = 3.0 * _SHAKES
_SHARE = 0.1
_STILL: Triple = (0.0, 0.0, 0.0)
_ALONE = 6.0
_SLIDES = 4
_ALERT = 50
_SMOOTH = 10
_STILL_TICKS = 5
_STILL_STEPS = 20.0
_STILL_ANGLE = 2e-3


class Encoders:
    """Looks at drive data. After a :meth:`look` without complaint ``turn`` is the ball's turn relative to the body
    since the look before that had none (3 numbers, rad, ``base_link``); ``one_bad`` says what is wrong with a single
    encoder, or "".

    ``moved`` is how far each actuator went within the last ``passed`` s, rad. With n encoders good the turn is the
    least-squares one of n. One that jumps or sticks is left out; where the others do not suffice, the third equation
    is that the floor holds the ball's spin, so that the gyro shows the turn about z.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters) -> None:
        drive = description.drive
        self._late, self._most = parameters.drive_timeout, parameters.limits.wheel_jump
        self._fastest: list[float] = (1.5 * drive.rate_limit).tolist()
        self._even, self._alert = 0.25 * parameters.limits.wheel_start, 0
        self._start, self._slip = parameters.limits.wheel_start, parameters.limits.wheel_slip
        self._names = drive.names
        # Plain numbers: for so few they are faster than arrays.
        self._rate_map: list[list[float]] = drive.rate_map.tolist()
        self._spin_map: list[list[float]] = drive.spin_map.tolist()
        self._without = [_without(drive.rate_map, i) for i in range(len(drive.names))]
        self._still = np.maximum(_STILL_STEPS * drive.encoder_step, _STILL_ANGLE).tolist()
        self._stamp = -math.inf
        self._last: list[float] | None = None
        self._expected: Triple = _STILL
        self._waited = 0
        self._by_spin, self._spin = [row[2] for row in self._rate_map], 0.0
        self._quiet = [0] * len(drive.names)
        self._missed = [0.0] * len(drive.names)
        self._stuck: set[int] = set()
        self.turn: Triple = (0.0, 0.0, 0.0)
        self.moved, self.passed = [0.0] * len(drive.names), parameters.loop.period
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
        x, y, z = self._expected
        self._expected = x + expected[0], y + expected[1], z + expected[2]
        self._waited += 1

    def look(self, measured: Measurement, now: float, expected: Triple | None, period: float) -> str:
        """What is wrong with this tick's drive data as a whole; "" for nothing.

        ``expected``: rate of the ball relative to the body that model and other senses expect, rad/s, ``base_link``;
        None where the loop does not run. ``period``: time since the look before, s.
        """
        self.pass_over(expected or _STILL)
        self.one_bad, self.gap = "", False
        stamp = measured.stamp if measured.drive_stamp is None else measured.drive_stamp
        if not stamp > self._stamp + _SOON:
            return "silent"
        if not now - stamp <= self._late:
            return "late"
        angle: list[float] = measured.drive_angle.tolist()
        if not math.isfinite(sum(angle)):
            return "not finite"
        self._stamp = stamp
        last, self._last = self._last, angle
        ticks, (x, y, z) = self._waited, self._expected
        self._waited, self._expected = 0, _STILL
        if last is None:
            self.turn = _STILL
            return ""
        moved = [a - b for a, b in zip(angle, last)]
        self.moved, self.passed = moved, ticks * period
        if ticks > _GAP and expected is not None:
            self._gap(long=True)
            return ""
        waited = (period * x, period * y, period * z)
        bad = self._absurd(moved, ticks * period) if expected is None else self._bad(moved, waited, ticks, period)
        return self._take(moved, bad, waited[2], ticks)

    def _take(self, moved: list[float], bad: dict[int, str], turned: float, ticks: int) -> str:
        """Make the ball's turn of what is left; ``turned``: about z, as expected, rad."""
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
            xs, ys, zs = self._spin_map
            z = sum(map(mul, zs, moved))
            self.turn, self._spin = (sum(map(mul, xs, moved)), sum(map(mul, ys, moved)), z), z / ticks
            return ""
        (index,) = bad
        self._runs = self._runs + 1 if index == self._ran and bad[index] != "stuck" else 1
        self._ran = index
        self.one_bad, self.bad_name = bad[index], self._names[index]
        moved = list(moved)
        moved[index] = 0.0
        x, y, z = (self._without[index] @ [*moved, turned if self.spin_held else self._spin * ticks]).tolist()
        self.turn = (x, y, z)
        return ""

    def _absurd(self, moved: list[float], passed: float) -> dict[int, str]:
        """Encoders that turned faster than any actuator can, while nothing is known of the motion."""
        if self._stuck or any(self._quiet):
            self._stuck.clear()
            self._quiet = [0] * len(self._names)
        return {i: "jump" for i, d in enumerate(moved) if not abs(d) <= self._fastest[i] * passed}

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

    def _bad(self, moved: list[float], expected: Triple, ticks: int, period: float) -> dict[int, str]:
        """What is wrong with which encoder."""
        x, y, z = expected
        due = [rx * x + ry * y + rz * z for rx, ry, rz in self._rate_map]
        if self._alert == 0 and ticks == 1:
            if self._as_expected(moved, due):
                self._moved = moved
                return {}
            self._alert = _ALERT
        self._alert = max(0, self._alert - 1)
        return self._closer_look(moved, due, z, ticks, period)

    def _as_expected(self, moved: list[float], due: list[float]) -> bool:
        """Whether there is nothing that is worth a closer look: the common case."""
        slip, even, quiet, missed, before = self._slip, self._even, self._quiet, self._missed, self._moved
        for i, d in enumerate(moved):
            if not (-slip < d - due[i] < slip and -even < d - before[i] < even):
                return False
            if d == 0.0:
                missed[i] += due[i]
                if not -self._still[i] < missed[i] < self._still[i]:
                    return False
                quiet[i] += 1
            elif quiet[i]:
                quiet[i], missed[i] = 0, 0.0
        return True

    def _closer_look(self, moved: list[float], due: list[float], z: float, ticks: int, period: float) -> dict[int, str]:
        bad: dict[int, str] = {}
        # The ball may spin, but not all at once.
        spun = self._spin * ticks - z
        most = self._most * (1.0 + 0.1 * (ticks - 1))
        last, self._moved = self._moved, moved if ticks == 1 else [d / ticks for d in moved]
        if self._settling:
            # It has only just been heard again: what was expected meanwhile may be far off.
            self._settling -= 1
            return {i: "jump" for i, d in enumerate(self._moved) if abs(d) > self._fastest[i] * period}
        shaking, frozen, smooth = self._shaking, not any(self._moved), True
        for i, d in enumerate(moved):
            shaken = abs(self._moved[i] - last[i])
            shaking[i] += _SHARE * ((shaken if shaken < _SHAKEN else _SHAKEN) - shaking[i])
            calm = shaken <= self._start and shaking[i] <= _SHAKES
            smooth = smooth and calm and d != 0.0
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
            if not (calm and abs(d - due[i] - self._by_spin[i] * spun) <= most):
                bad[i] = "jump"
        self._smooth = self._smooth + 1 if smooth and len(bad) > 1 else 0
        # With the ball free to spin there is no third equation to do without one.
        if self.spin_held and not bad:
            self._single_out([abs(d - e) for d, e in zip(moved, due)], bad)
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
