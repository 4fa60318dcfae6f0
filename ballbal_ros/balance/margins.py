"""Margins of a loop as sampled: gain, phase, delay and disk margins, broken where the torque acts.

Axis by axis with the others closed (l_i = 1/S_ii - 1, S = (I + L)⁻¹), and all together by the disk margin α = 2 / max
σ(S - T): gains of all axes may change at once, independently, by (2-α)/(2+α) … (2+α)/(2-α), or phases by 2 atan(α/2)
(Seiler, Packard and Gahinet 2020, IEEE Control Systems 40(5) 78, from memory; largest singular value, so a lower
bound with several axes). A loop around an unstable pole p with h whole samples of delay has max |T| ≥ |exp(p h T_s)|:
the floor reported beside it.
"""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np
from numpy.typing import NDArray

from ballbal_ros.balance.discrete import SampledPlant
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.robot.arrays import Array

GRID = 1500
LOWEST = 1e-3
LONGEST_DELAY = 0.5


@attrs.frozen
class AxisMargins:
    """Classical margins of one axis, the others closed. Gains as factors, ``phase`` in deg, ``delay`` in s.

    ``gain_up`` is infinite and ``gain_down`` 0 where no gain makes the loop unstable; ``crossover`` is the highest
    frequency (rad/s) at which the loop gain is 1.
    """

    axis: str
    gain_up: float
    gain_down: float
    phase: float
    delay: float
    crossover: float


@attrs.frozen
class Margins:
    """Margins of a loop. ``disk`` α; ``sensitivity_peak`` max σ(S); ``complementary_peak`` max σ(T) and its floor.

    ``delay_limit`` in s: the extra delay, of all axes at once, at which the closed loop's poles reach the unit circle
    (found by search on the exactly discretised plant; infinite where none below the search's end does).
    """

    axes: tuple[AxisMargins, ...]
    disk: float
    sensitivity_peak: float
    complementary_peak: float
    complementary_floor: float
    delay_limit: float


def loop_margins(
    regulator: Regulator, axes: tuple[str, ...], plant: SampledPlant | None = None, longest_delay: float = LONGEST_DELAY
) -> Margins:
    """Measure a loop's margins, on the plant it was designed for or on another; delays are tried up to
    ``longest_delay``, s.

    All are zero (gain margins 1) where the closed loop is unstable to begin with.
    """
    actual = plant or regulator.plant
    floor = _complementary_floor(actual)
    if regulator.spectral_radius(actual) >= 1.0:
        none = tuple(AxisMargins(axis, 1.0, 1.0, 0.0, 0.0, 0.0) for axis in axes)
        return Margins(none, 0.0, np.inf, np.inf, floor, 0.0)
    frequency = np.append(np.geomspace(LOWEST, np.pi / actual.period, GRID)[:-1], np.pi / actual.period)
    open_loop = regulator.loop(actual).response(np.exp(1j * frequency * actual.period))
    identity = np.eye(len(axes))
    sensitivity: NDArray[Any] = np.linalg.inv(identity + open_loop)
    complementary = identity - sensitivity
    found = tuple(axis_margins(axis, frequency, 1.0 / sensitivity[:, i, i] - 1.0) for i, axis in enumerate(axes))
    return Margins(
        axes=found,
        disk=2.0 / _peak(sensitivity - complementary),
        sensitivity_peak=_peak(sensitivity),
        complementary_peak=_peak(complementary),
        complementary_floor=floor,
        delay_limit=delay_limit(regulator, actual, longest_delay),
    )


def axis_margins(axis: str, frequency: Array, loop: NDArray[Any]) -> AxisMargins:
    """Classical margins of one loop's response [N] (complex, negative feedback counted) at ``frequency`` [N], rad/s.

    The closed loop is taken to be stable. Crossings are found by linear interpolation between neighbouring frequencies.
    """
    gains = _negative_real_gains(loop)
    above, below = [g for g in gains if g > 1.0], [g for g in gains if g < 1.0]
    size, angle = np.abs(loop), np.unwrap(np.angle(loop))
    log_size = np.log(size)
    crossing = np.flatnonzero(np.sign(log_size[:-1]) * np.sign(log_size[1:]) < 0)
    share = log_size[crossing] / (log_size[crossing] - log_size[crossing + 1])
    at = frequency[crossing] + share * (frequency[crossing + 1] - frequency[crossing])
    lag = np.mod(angle[crossing] + share * (angle[crossing + 1] - angle[crossing]) + np.pi, 2.0 * np.pi)
    return AxisMargins(
        axis=axis,
        gain_up=min(above, default=np.inf),
        gain_down=max(below, default=0.0),
        phase=float(np.degrees(np.minimum(lag, 2.0 * np.pi - lag).min(initial=np.pi))),
        delay=float((lag / at).min(initial=np.inf)),
        crossover=float(at.max(initial=0.0)),
    )


def _negative_real_gains(loop: NDArray[Any]) -> list[float]:
    """Factors by which the loop gain must change for the response to pass through -1."""
    imaginary, real = loop.imag, loop.real
    crossing = np.flatnonzero(imaginary[:-1] * imaginary[1:] < 0)
    share = imaginary[crossing] / (imaginary[crossing] - imaginary[crossing + 1])
    at = real[crossing] + share * (real[crossing + 1] - real[crossing])
    at = np.append(at, real[-1])
    return [float(-1.0 / value) for value in at if value < 0.0]


def _peak(response: NDArray[Any]) -> float:
    return float(np.linalg.norm(response, 2, axis=(1, 2)).max())


def _complementary_floor(plant: SampledPlant) -> float:
    """Least possible max |T|: |z_p|^h for an unstable plant pole z_p and h samples from torque to state.

    T is 1 at z_p and has h zeros at infinity; the maximum principle does the rest.
    """
    whole = 1 + int(np.floor(plant.delay / plant.period + 1e-9))
    return float(max(1.0, np.abs(np.linalg.eigvals(plant.transition)).max()) ** whole)


def delay_limit(regulator: Regulator, plant: SampledPlant, longest: float = LONGEST_DELAY) -> float:
    """Extra delay (s) at which the closed loop stops being stable: by steps of half a period, then to a microsecond."""
    step = plant.period / 2.0
    stable, unstable = 0.0, np.inf
    for extra in np.arange(1, int(longest / step)) * step:
        if regulator.spectral_radius(plant.with_delay(plant.delay + float(extra))) >= 1.0:
            unstable = float(extra)
            break
        stable = float(extra)
    while np.isfinite(unstable) and unstable - stable > 1e-6:
        middle = (stable + unstable) / 2.0
        if regulator.spectral_radius(plant.with_delay(plant.delay + middle)) >= 1.0:
            unstable = middle
        else:
            stable = middle
    return unstable
