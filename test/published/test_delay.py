"""How much delay a balancing loop can bear: published bounds hold for our delayed plants and our margins."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from ballbal_ros.balance.discrete import sampled
from ballbal_ros.balance.gains import margins
from ballbal_ros.robot.arrays import Array
from helpers.balancing import reach_gains

GRAVITY = 9.81


def pendulum(omega: float) -> tuple[Array, Array]:
    """θ'' = ω²θ + u."""
    return np.array([[0.0, 1.0], [omega**2, 0.0]]), np.array([[0.0], [1.0]])


def radius(omega: float, gain: Array, delay: float, period: float) -> float:
    """Spectral radius of the pendulum under u = -K x, sampled fast and delayed."""
    a, b = pendulum(omega)
    plant = sampled(a, b, np.zeros((2, 1)), np.eye(2), period, delay)
    augmented, driven = plant.augmented()
    feedback = np.zeros((1, len(augmented)))
    feedback[:, :2] = gain
    return float(np.abs(np.linalg.eigvals(augmented - driven @ feedback)).max())


def any_gain_holds(omega: float, delay: float) -> bool:
    """Whether some PD gain of a grid balances the pendulum at this delay, a fast sampler's hold included."""
    period = delay / 40.5
    for p in np.linspace(1.0005, 1.2, 12) * omega**2:
        for d in np.linspace(0.8, 2.2, 29) * omega:
            if radius(omega, np.array([[p, d]]), 40.0 * period, period) < 1.0:
                return True
    return False


def test_critical_delay_of_a_balanced_stick() -> None:
    """A PD loop can't balance a pendulum θ'' = ω²θ with more delay than √2/ω: 428 ms for a point mass at 0.9 m.

    Stépán 2009, Phil. Trans. R. Soc. A 367, 1195 (delay effects in human balancing), written down from memory.
    """
    omega = np.sqrt(GRAVITY / 0.9)
    critical = np.sqrt(2.0) / omega
    assert critical == pytest.approx(0.428, abs=5e-4)
    assert any_gain_holds(omega, 0.93 * critical)
    assert not any_gain_holds(omega, 1.03 * critical)


def test_pole_times_delay_of_the_demo_robot() -> None:
    """For decent margins p τ should stay below 0.33: the demo robot's is less than a tenth of that.

    Rule of thumb, Åström and Murray, *Feedback Systems*, written down from memory. And what it bears lies below the
    bound of a PD loop, √2/p (above).
    """
    gains = reach_gains()
    pole = max(gains.model.open_loop_pole)
    loop = gains.parameters.loop
    assert pole * (loop.delay + 0.5 * loop.period) < 0.33 / 10.0
    station, _ = margins(gains)
    assert gains.parameters.margins.delay <= station.delay_limit < np.sqrt(2.0) / pole


def test_delay_multiplies_the_unstable_mode() -> None:
    """What the pendulum loses in a delay τ is exp(ωτ): with no input yet acting the state grows by just that."""
    omega, delay = 3.3, 0.05
    a, b = pendulum(omega)
    plant = sampled(a, b, np.zeros((2, 1)), np.eye(2), 0.01, delay)
    state = np.array([1.0, omega])
    for _ in range(5):
        state = plant.transition @ state
    np.testing.assert_allclose(state, np.exp(omega * delay) * np.array([1.0, omega]), rtol=1e-12)
    np.testing.assert_allclose(state, expm(a * delay) @ [1.0, omega], rtol=1e-12)
