"""Least squares with a prior, for what is not linear."""

from __future__ import annotations

from collections.abc import Callable

import attrs
import numpy as np
from scipy import linalg

from ballbal_ros.robot.arrays import Array

_ITERATIONS, _HALVINGS, _SMALL = 20, 12, 1e-9


@attrs.frozen(eq=False)
class Fit:
    """Estimate [n] and its covariance [n, n]; ``chi_square``: weighted sum of the squared residuals."""

    estimate: Array
    covariance: Array
    chi_square: float


def most_probable(residual: Callable[[Array], Array], by: Callable[[Array], Array], start: Array) -> Fit:
    """The unknowns [n] that are most probable where each is 0 ± 1 beforehand, and residuals [m] (by each unknown
    [m, n]) are white of variance 1: Gauss-Newton on both together, with steps halved until they lower the sum.

    The covariance is that of the linear problem at the solution.
    """
    x, size = np.array(start, float), len(start)

    def cost(at: Array) -> float:
        """The residual's square with the prior's."""
        left = residual(at)
        return float(left @ left + at @ at)

    now = cost(x)
    for _ in range(_ITERATIONS):
        slope = by(x)
        normal = linalg.cho_factor(np.eye(size) + slope.T @ slope)
        step = -linalg.cho_solve(normal, slope.T @ residual(x) + x)
        for _ in range(_HALVINGS):
            after = cost(x + step)
            if after <= now:
                break
            step = 0.5 * step
        else:
            break
        small = now - after <= _SMALL * now
        x, now = x + step, after
        if small:
            break
    slope = by(x)
    covariance = linalg.cho_solve(linalg.cho_factor(np.eye(size) + slope.T @ slope), np.eye(size))
    left = residual(x)
    return Fit(x, np.asarray(covariance), float(left @ left))
