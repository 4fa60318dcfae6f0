"""Sampled systems: exact discretisation with input delay, linear-quadratic feedback, steady-state Kalman filter.

Plants x' = A x + B u + E d are driven through a zero-order hold whose output arrives ``delay`` late: x[k+1] = Φ x[k]
+ Σ_j Γ_j u[k-j] + Γ_d d[k]  (Åström and Wittenmark, *Computer-Controlled Systems*, delays; from memory).
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.linalg import LinAlgError, expm, solve_continuous_are, solve_discrete_are

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array, read_only


@attrs.frozen(eq=False)
class SampledPlant:
    """A plant as the loop sees it: n states, m inputs, l disturbances, p outputs, ``period`` and ``delay`` in s.

    ``transition`` Φ [n, n]; ``inputs`` [h + 1, n, m], the effect of u[k-j] on x[k+1] for j = 0 … h; ``disturbance``
    Γ_d [n, l]; ``output`` C [p, n]. h, the number of past inputs that still act, is ``history``. ``continuous`` is
    (A, B, E).
    """

    continuous: tuple[Array, Array, Array]
    period: float
    delay: float
    transition: Array
    inputs: Array
    disturbance: Array
    output: Array

    @property
    def history(self) -> int:
        """How many past inputs still have an effect to come."""
        return len(self.inputs) - 1

    def with_delay(self, delay: float) -> SampledPlant:
        """The same plant with another delay, s."""
        return sampled(*self.continuous, self.output, self.period, delay)

    def augmented(self) -> tuple[Array, Array]:
        """(A, B) for the state [x; u[k-1]; …; u[k-h]] and the input u[k]."""
        n, m, h = len(self.transition), self.inputs.shape[2], self.history
        a, b = np.zeros((n + h * m, n + h * m)), np.zeros((n + h * m, m))
        a[:n, :n], b[:n] = self.transition, self.inputs[0]
        for j in range(1, h + 1):
            a[:n, n + (j - 1) * m : n + j * m] = self.inputs[j]
        if h:
            b[n : n + m] = np.eye(m)
            a[n + m :, n : n + (h - 1) * m] = np.eye((h - 1) * m)
        return a, b


def sampled(
    state_matrix: Array, input_matrix: Array, disturbance_matrix: Array, output: Array, period: float, delay: float
) -> SampledPlant:
    """Discretise x' = A x + B u + E d exactly: u and d held over a period, u arriving ``delay`` (s, any) late."""
    whole = int(np.floor(delay / period + 1e-9))
    part = max(0.0, delay - whole * period)
    if part < 1e-9 * period:
        part = 0.0
    n, m = input_matrix.shape
    both = np.hstack((input_matrix, disturbance_matrix))
    transition, held = _held(state_matrix, both, period)
    inputs = np.zeros((whole + 1 + (part > 0.0), n, m))
    if part > 0.0:
        early, inputs[whole] = _held(state_matrix, input_matrix, period - part)
        inputs[whole + 1] = early @ _held(state_matrix, input_matrix, part)[1]
    else:
        inputs[whole] = held[:, :m]
    return SampledPlant(
        (state_matrix, input_matrix, disturbance_matrix),
        period,
        delay,
        read_only(transition),
        read_only(inputs),
        read_only(held[:, m:].copy()),
        read_only(np.array(output, float)),
    )


def _held(state_matrix: Array, input_matrix: Array, time: float) -> tuple[Array, Array]:
    """exp(A t) and ∫_0^t exp(A s) ds B."""
    n, m = input_matrix.shape
    block = np.zeros((n + m, n + m))
    block[:n, :n], block[:n, n:] = state_matrix, input_matrix
    exponential = expm(block * time)
    return exponential[:n, :n], exponential[:n, n:]


def sampled_noise(state_matrix: Array, density: Array, period: float) -> Array:
    """Covariance [n, n] that white noise of ``density`` [n, n] on x' builds up over a period.

    Van Loan 1978, IEEE TAC 23(3) 395, from memory.
    """
    n = len(state_matrix)
    block = np.zeros((2 * n, 2 * n))
    block[:n, :n], block[:n, n:], block[n:, n:] = -state_matrix, density, state_matrix.T
    exponential = expm(block * period)
    covariance = exponential[n:, n:].T @ exponential[:n, n:]
    return np.asarray((covariance + covariance.T) / 2.0)


def discrete_lqr(a: Array, b: Array, q: Array, r: Array, what: str = "the loop") -> Array:
    """K [m, n] of u = -K x that makes Σ xᵀQx + uᵀRu least; raises :class:`BallbalError` where there is none."""
    try:
        cost = solve_discrete_are(a, b, q, r)
    except (LinAlgError, ValueError) as error:
        raise BallbalError(what, f"its quadratic regulator has no solution ({error})", "change the weights") from error
    return np.asarray(np.linalg.solve(r + b.T @ cost @ b, b.T @ cost @ a))


def continuous_lqr(a: Array, b: Array, q: Array, r: Array, what: str = "the loop") -> Array:
    """K [m, n] of u = -K x that makes ∫ xᵀQx + uᵀRu dt least; raises :class:`BallbalError` where there is none."""
    try:
        cost = solve_continuous_are(a, b, q, r)
    except (LinAlgError, ValueError) as error:
        raise BallbalError(what, f"its quadratic regulator has no solution ({error})", "change the weights") from error
    return np.asarray(np.linalg.solve(r, b.T @ cost))


def kalman_gain(
    a: Array, c: Array, q: Array, r: Array, cross: Array | None = None, what: str = "the estimator"
) -> Array:
    """L [n, p] of the steady-state filter x̂ = x̄ + L (y - C x̄), x̄[k+1] = A x̂[k] + …; raises :class:`BallbalError`.

    q [n, n] is the covariance of the noise w[k] on x[k+1], r [p, p] that of the noise v[k] on y[k], ``cross`` [n, p]
    that between w[k] and v[k]. A must be invertible: with ``cross``, L = A⁻¹ (A P Cᵀ + S) (C P Cᵀ + r)⁻¹, the gain
    whose *prediction* x̄ is best (without it, the usual filter, whose x̂ is best too).
    """
    s = np.zeros((len(a), len(c))) if cross is None else cross
    try:
        prior = solve_discrete_are(a.T, c.T, q, r, s=s)
    except (LinAlgError, ValueError) as error:
        raise BallbalError(
            what, f"its Kalman filter has no steady state ({error})", "change the noise figures"
        ) from error
    corrected = prior @ c.T + np.linalg.solve(a, s)
    return np.asarray(np.linalg.solve(c @ prior @ c.T + r, corrected.T).T)
