"""Published linear-quadratic examples and laws of quadratic and sampled loops hold for our design functions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from ballbal_ros.balance.discrete import continuous_lqr, discrete_lqr, sampled
from ballbal_ros.balance.margins import axis_margins
from ballbal_ros.robot.arrays import Array

CART_INPUT_LIMITS = np.geomspace(1e-2, 1e4, 20_000)


def cart_pendulum() -> tuple[Array, Array]:
    """Cart M = 0.5 kg, rod m = 0.2 kg, friction 0.1 N/(m/s), I = 0.006 kg m², l = 0.3 m, g = 9.8 m/s².

    Control Tutorials for MATLAB and Simulink, "Inverted Pendulum: System Modeling".
    """
    cart, rod, friction, inertia, length, gravity = 0.5, 0.2, 0.1, 0.006, 0.3, 9.8
    p = inertia * (cart + rod) + cart * rod * length**2
    a = np.zeros((4, 4))
    a[0, 1] = a[2, 3] = 1.0
    a[1, 1], a[1, 2] = -(inertia + rod * length**2) * friction / p, rod**2 * gravity * length**2 / p
    a[3, 1], a[3, 2] = -rod * length * friction / p, rod * gravity * length * (cart + rod) / p
    return a, np.array([[0.0], [(inertia + rod * length**2) / p], [0.0], [rod * length / p]])


def loop_response(a: Array, b: Array, k: Array, s: Array) -> Array:
    """K (sI - A)⁻¹ B at the complex frequencies s [N]."""
    return (k @ np.linalg.solve(s[:, None, None] * np.eye(len(a)) - a, b[None].astype(complex)))[:, 0, 0]


def test_continuous_example() -> None:
    """K = [-1.0000 -1.7559 16.9145 3.2274] for the inverted pendulum of the documentation.

    MathWorks documentation, `lti.lqr`, inverted pendulum example.
    """
    a = np.array([[0, 1, 0, 0], [0, -0.1, 3, 0], [0, 0, 0, 1], [0, -0.5, 30, 0]], float)
    b = np.array([[0.0], [2.0], [0.0], [5.0]])
    gain = continuous_lqr(a, b, np.diag([1.0, 0.0, 1.0, 0.0]), np.eye(1))
    np.testing.assert_allclose(gain[0], [-1.0, -1.7559, 16.9145, 3.2274], atol=5e-5)


def test_discrete_example() -> None:
    """K = [394.61003 16.76761] and poles 0.11073, 0.12166.

    Altair Compose documentation, `dlqr`.
    """
    a, b = np.array([[9.0, 0.2], [0.0, 8.0]]), np.array([[0.0], [1.0]])
    gain = discrete_lqr(a, b, np.array([[2.0, 1.0], [1.0, 2.0]]), np.eye(1))
    np.testing.assert_allclose(gain[0], [394.61003, 16.76761], atol=5e-6)
    np.testing.assert_allclose(np.sort(np.linalg.eigvals(a - b @ gain).real), [0.11073, 0.12166], atol=5e-6)


def test_inverted_pendulum_in_closed_form() -> None:
    """θ'' = ω²θ + u, R = 1: k1 = ω² + √(ω⁴ + q1), k2 = √(q2 + 2 k1); 18.5394 and 6.1708 for ω = 3, Q = diag(10, 1).

    Derived from the algebraic Riccati equation by hand; no source but that.
    """
    omega, q1, q2 = 3.0, 10.0, 1.0
    a, b = np.array([[0.0, 1.0], [omega**2, 0.0]]), np.array([[0.0], [1.0]])
    gain = continuous_lqr(a, b, np.diag([q1, q2]), np.eye(1))[0]
    k1 = omega**2 + np.sqrt(omega**4 + q1)
    np.testing.assert_allclose(gain, [k1, np.sqrt(q2 + 2.0 * k1)], rtol=1e-10)
    np.testing.assert_allclose(gain, [18.5394, 6.1708], atol=5e-5)


def test_cart_pendulum_continuous() -> None:
    """K = [-70.7107 -37.8345 105.5298 20.9238] for Q = diag(5000, 0, 100, 0), R = 1.

    Control Tutorials for MATLAB and Simulink, "Inverted Pendulum: State-Space Methods for Controller Design".
    """
    a, b = cart_pendulum()
    gain = continuous_lqr(a, b, np.diag([5000.0, 0.0, 100.0, 0.0]), np.eye(1))
    np.testing.assert_allclose(gain[0], [-70.7107, -37.8345, 105.5298, 20.9238], atol=5e-5)


def test_cart_pendulum_sampled() -> None:
    """At 100 Hz K = [-61.9933 -33.5040 95.0597 18.8300] for the same weights.

    Control Tutorials for MATLAB and Simulink, "Inverted Pendulum: Digital Controller Design".
    """
    a, b = cart_pendulum()
    plant = sampled(a, b, np.zeros((4, 1)), np.eye(4), 0.01, 0.0)
    gain = discrete_lqr(plant.transition, plant.inputs[0], np.diag([5000.0, 0.0, 100.0, 0.0]), np.eye(1))
    np.testing.assert_allclose(gain[0], [-61.9933, -33.5040, 95.0597, 18.8300], atol=5e-5)


@pytest.mark.parametrize("weight", [0.01, 1.0, 100.0])
def test_continuous_margins(weight: float) -> None:
    """A continuous regulator with full state has at least 60° of phase, and may have half the gain or any more.

    Anderson and Moore 1990, *Optimal Control*; Safonov and Athans 1977, IEEE TAC 22(2) 173. Written down from memory.
    """
    a, b = cart_pendulum()
    gain = continuous_lqr(a, b, np.diag([5000.0, 0.0, 100.0, 0.0]), weight * np.eye(1))
    response = loop_response(a, b, gain, 1j * CART_INPUT_LIMITS)
    assert np.abs(1.0 + response).min() > 1.0 - 1e-9  # Kalman's inequality
    found = axis_margins("force", CART_INPUT_LIMITS, response)
    assert found.phase > 60.0
    assert found.gain_down <= 0.5
    for factor in (0.501, 10.0, 1000.0):
        assert np.linalg.eigvals(a - factor * b @ gain).real.max() < 0.0


def test_sampled_loop_does_not_inherit_them() -> None:
    """The same pendulum sampled at 10 Hz, with its own optimal gain, has less than 60°: hence margins are measured."""
    a, b = cart_pendulum()
    plant = sampled(a, b, np.zeros((4, 1)), np.eye(4), 0.1, 0.0)
    gain = discrete_lqr(plant.transition, plant.inputs[0], np.diag([5000.0, 0.0, 100.0, 0.0]), np.eye(1))
    omega = np.geomspace(1e-2, np.pi / 0.1, 5000)
    response = loop_response(plant.transition, plant.inputs[0], gain, np.exp(0.1j * omega))
    assert axis_margins("force", omega, response).phase < 60.0


def balance_system() -> tuple[Array, Array]:
    """Balance system M = 10 kg, m = 80 kg, J = 100 kg m², l = 1 m, g = 9.8 m/s², without friction; [p, θ, p', θ'].

    Åström and Murray, *Feedback Systems*, balance systems; written down from memory.
    """
    cart, mass, inertia, length, gravity = 10.0, 80.0, 100.0, 1.0, 9.8
    total, about_pivot = cart + mass, inertia + mass * length**2
    mu = total * about_pivot - (mass * length) ** 2
    a = np.zeros((4, 4))
    a[0, 2] = a[1, 3] = 1.0
    a[2, 1], a[3, 1] = (mass * length) ** 2 * gravity / mu, total * mass * gravity * length / mu
    return a, np.array([[0.0], [0.0], [about_pivot / mu], [mass * length / mu]])


def test_balance_system_pole_and_zero() -> None:
    """Poles ±2.6833 rad/s, zeros of the position ±2.0870 rad/s.

    Åström and Murray, *Feedback Systems*; written down from memory.
    """
    a, b = balance_system()
    assert np.sort(np.linalg.eigvals(a).real)[-1] == pytest.approx(2.6833, abs=5e-5)
    position = np.array([[1.0, 0.0, 0.0, 0.0]])

    def numerator(s: float) -> float:
        return float(np.linalg.det(np.block([[s * np.eye(4) - a, -b], [position, np.zeros((1, 1))]])))

    low, high = 2.0, 2.2
    assert numerator(low) * numerator(high) < 0.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if numerator(low) * numerator(middle) > 0.0 else (low, middle)
    assert low == pytest.approx(2.0870, abs=5e-5)


def test_balance_system_peak_sensitivity() -> None:
    """With the position alone measured no controller gets the peak of |S| below (p + z)/|p - z| = 8; nor does ours.

    Åström and Murray, *Feedback Systems*; written down from memory. The controller is a regulator on a Kalman filter,
    made with our functions; with none of the noise figures it comes under the bound.
    """
    a, b = balance_system()
    c = np.array([[1.0, 0.0, 0.0, 0.0]])
    pole, zero = 2.6833, 2.0870
    omega = np.geomspace(1e-3, 1e3, 4000)
    for noise in (1e-6, 1e-3, 1.0):
        gain = continuous_lqr(a, b, np.diag([1.0, 0.0, 0.0, 0.0]), np.eye(1))
        observer = continuous_lqr(a.T, c.T, b @ b.T, noise * np.eye(1)).T
        inner = a - b @ gain - observer @ c
        shifted = 1j * omega[:, None, None] * np.eye(4)
        plant = (c @ np.linalg.solve(shifted - a, b[None].astype(complex)))[:, 0, 0]
        controller = (gain @ np.linalg.solve(shifted - inner, observer[None].astype(complex)))[:, 0, 0]
        closed = np.block([[a, -b @ gain], [observer @ c, inner]])
        assert np.linalg.eigvals(closed).real.max() < 0.0
        assert (
            np.abs(1.0 / (1.0 + plant * controller)).max()
            > (pole + zero) / abs(pole - zero)
            == pytest.approx(8.0, abs=0.01)
        )


def test_zero_order_hold_is_the_matrix_exponential() -> None:
    """The sampled cart-pendulum steps as exp(A T) does (any handbook of sampled systems)."""
    a, b = cart_pendulum()
    plant = sampled(a, b, np.zeros((4, 1)), np.eye(4), 0.01, 0.0)
    np.testing.assert_allclose(plant.transition, expm(0.01 * a), rtol=1e-12, atol=1e-15)
