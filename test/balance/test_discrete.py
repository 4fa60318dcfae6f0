"""Discretisation, regulator and filter agree with reference libraries, and with what they are by definition."""

from __future__ import annotations

import control
import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from ballbal_ros.balance.discrete import continuous_lqr, discrete_lqr, kalman_gain, sampled, sampled_noise
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from helpers.balancing import reach_gains

PERIOD = 0.01
A = np.array([[0.0, 1.0], [9.0, -0.2]])
B = np.array([[0.3], [2.0]])
E = np.array([[0.0], [0.5]])


def followed(delay: float, inputs: Array, disturbance: float) -> Array:
    """The state after all `inputs`, each held for a period and acting `delay` late, by an ODE solver."""
    edges = np.unique(np.concatenate((np.arange(len(inputs) + 1) * PERIOD, np.arange(len(inputs)) * PERIOD + delay)))
    state = np.array([0.1, -0.2])
    end = len(inputs) * PERIOD
    for begin, stop in zip(edges[edges < end - 1e-12], edges[1:], strict=False):
        tick = int(np.floor((0.5 * (begin + stop) - delay) / PERIOD))
        held = inputs[tick] if tick >= 0 else 0.0
        forcing = B[:, 0] * held + E[:, 0] * disturbance
        state = solve_ivp(lambda _, x, f=forcing: A @ x + f, (begin, stop), state, rtol=1e-10, atol=1e-12).y[:, -1]
    return state


@pytest.mark.parametrize("delay", [0.0, 0.003, 0.01, 0.0171, 0.03], ids=lambda d: f"{1e3 * d:g}ms")
def test_delayed_input_is_discretised_exactly(delay: float) -> None:
    """Whole and broken delays: the sampled plant ends where an ODE solver ends, to 1e-8."""
    inputs = np.random.default_rng(3).normal(size=12)
    plant = sampled(A, B, E, np.eye(2), PERIOD, delay)
    a, b = plant.augmented()
    state = np.zeros(len(a))
    state[:2] = 0.1, -0.2
    for value in inputs:
        state = a @ state + b[:, 0] * value
        state[:2] += plant.disturbance[:, 0] * 0.7
    np.testing.assert_allclose(state[:2], followed(delay, inputs, 0.7), atol=1e-8)


def test_no_delay_agrees_with_python_control() -> None:
    """Without delay it is the zero-order hold of python-control."""
    plant = sampled(A, B, E, np.eye(2), PERIOD, 0.0)
    reference = control.c2d(control.ss(A, B, np.eye(2), 0.0), PERIOD, "zoh")
    np.testing.assert_allclose(plant.transition, reference.A, atol=1e-13)
    np.testing.assert_allclose(plant.inputs[0], reference.B, atol=1e-13)
    assert plant.history == 0


def test_history_holds_what_is_under_way() -> None:
    """One past input for a delay of one period, two for a period and a half; their effects add up as without delay."""
    gamma = sampled(A, B, E, np.eye(2), PERIOD, 0.0).inputs[0]
    for delay, history in ((PERIOD, 1), (1.5 * PERIOD, 2), (0.5 * PERIOD, 1), (3.0 * PERIOD, 3)):
        plant = sampled(A, B, E, np.eye(2), PERIOD, delay)
        assert plant.history == history
        np.testing.assert_allclose(plant.inputs.sum(axis=0), gamma, atol=1e-4)


def test_noise_covariance_is_the_integral() -> None:
    """∫ exp(As) Q exp(Aᵀs) ds over a period, by quadrature."""
    density = np.diag([0.2, 1.5])
    nodes, weights = np.polynomial.legendre.leggauss(12)
    times = 0.5 * PERIOD * (nodes + 1.0)
    parts = [w * expm(A * t) @ density @ expm(A * t).T for t, w in zip(times, weights, strict=True)]
    np.testing.assert_allclose(sampled_noise(A, density, PERIOD), 0.5 * PERIOD * np.sum(parts, axis=0), rtol=1e-10)


def test_regulators_agree_with_python_control() -> None:
    """`discrete_lqr` and `continuous_lqr` give python-control's gains."""
    plant = sampled(A, B, E, np.eye(2), PERIOD, 0.0)
    q, r = np.diag([4.0, 1.0]), np.array([[0.5]])
    np.testing.assert_allclose(continuous_lqr(A, B, q, r), control.lqr(A, B, q, r)[0], rtol=1e-8)
    reference = control.dlqr(plant.transition, plant.inputs[0], q, r)[0]
    np.testing.assert_allclose(discrete_lqr(plant.transition, plant.inputs[0], q, r), reference, rtol=1e-8)


def test_delay_states_cost_what_the_delay_costs() -> None:
    """With the delay in the model the cost is the least: nudging any gain, that of past inputs too, costs more."""
    plant = sampled(A, B, E, np.eye(2), PERIOD, 1.5 * PERIOD)
    a, b = plant.augmented()
    q, r = np.zeros(a.shape), np.array([[0.5]])
    q[:2, :2] = np.diag([40.0, 1.0])
    best = discrete_lqr(a, b, q, r)
    start = np.array([0.1, 0.3, -0.4, 0.2])

    def cost(gain: Array) -> float:
        state, total = start.copy(), 0.0
        for _ in range(4000):
            u = -gain @ state
            total += float(state @ q @ state + u @ r @ u)
            state = a @ state + b @ u
        return total

    least = cost(best)
    for index in range(best.size):
        for nudge in (0.95, 1.05):
            changed = best.copy()
            changed[0, index] *= nudge
            assert cost(changed) > least


def test_filter_agrees_with_the_recursion() -> None:
    """The steady gain is where Kalman's recursion settles, with noise of state and measurement correlated or not."""
    plant = sampled(A, B, E, np.eye(2), PERIOD, 0.0)
    c, q, r = np.array([[1.0, 0.0], [0.3, 1.0]]), np.diag([1e-5, 3e-4]), np.array([[1e-3, 2e-4], [2e-4, 4e-3]])
    for cross in (np.zeros((2, 2)), np.array([[2e-5, 1e-5], [1e-4, -2e-4]])):
        covariance = np.eye(2)
        for _ in range(3000):
            innovation = c @ covariance @ c.T + r
            predictor = (plant.transition @ covariance @ c.T + cross) @ np.linalg.inv(innovation)
            covariance = plant.transition @ covariance @ plant.transition.T + q - predictor @ innovation @ predictor.T
        gain = kalman_gain(plant.transition, c, q, r, cross)
        np.testing.assert_allclose(plant.transition @ gain, predictor, rtol=1e-8)
    # python-control's is the gain of the prediction
    reference, *_ = control.dlqe(plant.transition, np.eye(2), c, q, r)
    gain = kalman_gain(plant.transition, c, q, r)
    np.testing.assert_allclose(plant.transition @ gain, reference, rtol=1e-6)


def test_unsolvable_is_one_line() -> None:
    """An unstable mode that no input reaches, or no output shows, is refused in one line."""
    a, b = np.diag([1.1, 0.5]), np.array([[0.0], [1.0]])
    with pytest.raises(BallbalError, match="regulator has no solution"):
        discrete_lqr(a, b, np.eye(2), np.eye(1))
    with pytest.raises(BallbalError, match="no steady state"):
        kalman_gain(a, b.T, np.eye(2), np.eye(1))
    with pytest.raises(BallbalError, match="regulator has no solution"):
        continuous_lqr(a, b, np.eye(2), np.eye(1))


def test_the_robot_has_one_period_of_delay() -> None:
    """The demo robot's plant, 2 ms at 500 Hz, remembers one torque."""
    assert reach_gains().station.plant.history == 1
