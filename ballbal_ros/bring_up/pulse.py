"""One small push of one actuator: what the ball and its wheels did, as torque for each N m that was commanded.

The ball hangs free in its cage, so that with J = I_b 1 + reflected inertia

    J ω' = Rᵀ (K e - f sign θ'),   θ' = R ω,   R: ``rate_map``,

or θ'' = A (K e - f sign θ'), A = R J⁻¹ Rᵀ. A push of +e for a time T and then of -e, read while the driven wheel
turns one way, gives two accelerations a₊ and a₋: friction is their sum and the torque their difference,
A K e = (a₊ - a₋) / 2, without knowing the friction. That tells which wheel is driven. How hard, tells a fit of K, f and
the delay from command to torque to the whole record, as the other wheels may stick.
"""

from __future__ import annotations

import math

import attrs
import numpy as np
from scipy.optimize import least_squares

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.drive import Drive

_DELAYS = np.arange(0.0, 0.0505, 0.0005)
_FEWEST = 4
_SLIDES = 0.1
_CREEP = 0.02
_STEP = 0.002
BRAKE = 0.6
"""For which share of T it brakes."""


@attrs.frozen(eq=False)
class Record:
    """One push: ``time`` [N] since it began, s; true ``angle`` [N, n], rad, NaN where an encoder does not tell;
    ``effort`` commanded, N m, until ``push`` s, and its opposite afterwards.
    """

    time: Array
    angle: Array
    effort: float
    push: float

    def response(self) -> Array | None:
        """Acceleration [n] for each N m commanded, rad/s²/(N m), friction taken out; NaN where an encoder does not
        tell. None where too little was seen.
        """
        turned = self.angle - self.angle[0]
        known = np.isfinite(turned).all(axis=0)
        if not known.any():
            return None
        way = np.abs(turned[:, known]).T[int(np.argmax(np.abs(turned[:, known]).max(axis=0)))]
        # Until it slides, friction is less; beyond its farthest, friction would push the other way.
        used = slice(int(np.argmax(way > _SLIDES * way.max())), int(np.argmax(way)) + 1)
        time, turned = self.time[used], turned[used][:, known]
        best: tuple[float, Array] | None = None
        for delay in _DELAYS:
            basis = _parabolas(time - delay, self.push)
            braking = int((basis[:, 3] > 0.0).sum())
            if len(time) - braking < _FEWEST or braking < _FEWEST:
                break
            found, *_ = np.linalg.lstsq(basis, turned, rcond=None)
            off = float(np.square(turned - basis @ found).sum())
            if best is None or off < best[0]:
                best = off, found
        if best is None:
            return None
        response = np.full(self.angle.shape[1], np.nan)
        response[known] = (best[1][2] - best[1][3]) / (2.0 * self.effort)
        return response


@attrs.frozen
class Strength:
    """``factor`` K: torque for each N m commanded; ``friction`` f, N m at each wheel; ``delay`` to the torque, s."""

    factor: float
    friction: float
    delay: float


def strength(record: Record, drive: Drive, ball_inertia: float, contact: int, factor: float) -> Strength:
    """Fit the push of the actuator on a ``contact``; ``factor`` is a first guess of K."""
    turned = record.angle - record.angle[0]
    known = np.isfinite(turned).all(axis=0)
    size = float(np.abs(turned[:, known]).max())
    start = np.array([factor, max(float(drive.stiction.mean()), 1e-3), 0.004])
    scale = np.array([abs(factor), abs(record.effort), 0.01])

    def off(x: Array) -> Array:
        """How far the simulated turn is from the recorded one, as a share of its size, for scaled unknowns."""
        way = _simulated(record, drive, ball_inertia, contact, *(x * scale).tolist())
        return np.asarray((way[:, known] - turned[:, known]) / size).ravel()

    low, high = np.array([-np.inf, 0.0, 0.0]), np.array([np.inf, 1.0, _DELAYS[-1] / scale[2]])
    found = least_squares(
        off, np.clip(start / scale, low, high), bounds=(low, high), diff_step=np.full(3, 1e-4), max_nfev=30
    )
    return Strength(*(found.x * scale).tolist())


def _simulated(
    record: Record, drive: Drive, ball_inertia: float, contact: int, factor: float, friction: float, delay: float
) -> Array:
    """The way [N, n] that each wheel goes, rad; the friction's step is implicit: stable however large it is."""
    rate_map = drive.rate_map
    turning = ball_inertia * np.eye(3) + drive.reflected_inertia
    push, end = record.push + delay, record.push * (1.0 + BRAKE) + delay
    rate, way = np.zeros(3), np.zeros((len(record.time), len(rate_map)))
    for index in range(1, len(record.time)):
        begin, span = float(record.time[index - 1]), float(record.time[index] - record.time[index - 1])
        steps = max(1, math.ceil(span / _STEP - 1e-6))
        step, way[index] = span / steps, way[index - 1]
        for k in range(steps):
            at = begin + k * step
            # The effort's mean over the step, for the delay is no whole number of steps.
            mean = _overlap(at, step, delay, push) - _overlap(at, step, push, end)
            drag = friction / (_CREEP + np.abs(rate_map @ rate))
            held = turning + step * (rate_map.T * drag) @ rate_map
            rate = np.linalg.solve(held, turning @ rate + step * factor * record.effort * mean * rate_map[contact])
            way[index] += step * (rate_map @ rate)
    return way


def _overlap(at: float, step: float, begin: float, end: float) -> float:
    """Which share of [at, at + step] lies within [begin, end]."""
    return max(0.0, min(at + step, end) - max(at, begin)) / step


def _parabolas(time: Array, push: float) -> Array:
    """Columns: 1 and time, for where and how fast it began to slide; the way for an acceleration of 1 until ``push``;
    the way for one of 1 from then on.
    """
    first = np.clip(time, 0.0, push)
    later = np.maximum(time - push, 0.0)
    return np.stack((np.ones_like(time), time, 0.5 * first**2 + first * later, 0.5 * later**2), axis=1)
