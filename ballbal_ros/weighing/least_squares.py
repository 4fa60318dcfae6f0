"""Weighted least squares with known covariance, and the same with a prior for what is not linear."""

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

    @property
    def standard_error(self) -> Array:
        """Standard error of each [n]."""
        return np.sqrt(np.diag(self.covariance))


def weighted_least_squares(design: Array, observed: Array, covariance: Array) -> Fit:
    """The best linear unbiased estimate of x in ``observed = design x + noise``, noise of known covariance (Aitken
    1935, Proc. R. Soc. Edinburgh 55, 42; written down from memory).

    ``design`` [m, n], ``observed`` [m], ``covariance`` [m, m] or the variances [m]. The noise is made white by the
    covariance's Cholesky factor, and the white problem solved by QR.
    """
    if covariance.ndim == 1:
        scale = np.sqrt(covariance)
        white, seen = design / scale[:, None], observed / scale
    else:
        lower = np.linalg.cholesky(covariance)
        white = linalg.solve_triangular(lower, design, lower=True)
        seen = linalg.solve_triangular(lower, observed, lower=True)
    orthogonal, upper = linalg.qr(white, mode="economic")
    estimate = linalg.solve_triangular(upper, orthogonal.T @ seen)
    inverse = linalg.solve_triangular(upper, np.eye(len(upper)))
    left = seen - white @ estimate
    return Fit(np.asarray(estimate), np.asarray(inverse @ inverse.T), float(left @ left))


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
