"""For a small motion of a point-mass pendulum our solver finds the closed forms of the textbooks.

θ'' - ω²θ = -f has the one bounded solution θ(t) = 1/(2ω) ∫ exp(-ω|t-s|) f(s) ds (Devasia, Chen and Paden 1996, IEEE TAC
41(7) 930; from memory). Here the pendulum is a point mass over the held ball, and f comes as a moment on its hand.
"""

import numpy as np
import pytest
from numpy.typing import NDArray

from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, solve_lean
from ballbal_ros.robot.balance_rows import GRAVITY, OutsideMotion, UpperBodyTerms

Array = NDArray[np.float64]
OMEGA = 3.0
TINY = 1e-4  # of a radian per second squared, so that sin θ is θ
MASS, RADIUS, STEP = 40.0, 0.1, 0.01


def pendulum(forcing: Array, height: float, axis: int, first: float | None = None) -> LeanSolution:
    """The bounded lean of a point mass this high over the floor under f(t) [N], rad/s², of roll (0) or pitch (1).

    It begins and ends in equilibrium, or begins at the lean `first`, rad.
    """
    nodes, arm = len(forcing), height - RADIUS
    terms = UpperBodyTerms.empty(nodes, MASS, ("hand",))
    terms.moment[:, 2] = MASS * arm
    terms.inertia[:, 0, 0] = terms.inertia[:, 1, 1] = MASS * arm**2
    outside = OutsideMotion.at_rest(nodes, 1)
    # m arm height θ'' = m g arm θ + M, so that M = -m arm height f
    outside.hand_moment[:, 0, axis] = -MASS * arm * height * forcing
    problem = LeanProblem.of(terms, outside, STEP, RADIUS, 5.0)
    ends = np.zeros((2, 2))
    ends[:, axis] = forcing[[0, -1]] * height / GRAVITY
    if first is not None:
        ends[0, axis] = first
    return solve_lean(problem, *ends)


def bounded(forcing: Array, axis: int = 1) -> Array:
    """The bounded θ(t) [N] for f(t) [N] at ω = 3 rad/s, times and forcing scaled down to a tiny motion and up again."""
    lean = pendulum(TINY * forcing, GRAVITY / OMEGA**2, axis).lean / TINY
    assert np.abs(lean[:, 1 - axis]).max() < 1e-6
    return lean[:, axis]


TIMES = STEP * np.arange(-600, 601)


@pytest.mark.parametrize("axis", [0, 1])
def test_a_gaussian(axis: int):
    """f = exp(-t²/2σ²), σ = 0.5, ω = 3: θ(0) = 0.0859693 (recomputed with SciPy)."""
    theta = bounded(np.exp(-0.5 * (TIMES / 0.5) ** 2), axis)
    assert theta[600] == pytest.approx(0.0859693, abs=2e-7)


def test_any_forcing_is_the_integral():
    """For a forcing without symmetry the solution is the integral, everywhere."""
    forcing = np.exp(-((TIMES - 0.3) ** 2)) - 0.7 * np.exp(-8.0 * (TIMES + 0.6) ** 2)
    kernel = np.exp(-OMEGA * np.abs(TIMES[:, None] - TIMES)) / (2.0 * OMEGA)
    # The kernel has a corner at t = s; the trapezoid's error there is -f/12 step² times the jump of its slope.
    expected = kernel @ forcing * STEP - forcing * STEP**2 / 12.0
    np.testing.assert_allclose(bounded(forcing), expected, atol=2e-6)


@pytest.mark.parametrize("frequency", [0.5, 2.0, 6.0])
def test_a_sinusoid(frequency: float):
    """f = sin Ωt gives θ = sin Ωt / (ω² + Ω²), away from the ends."""
    theta = bounded(np.sin(frequency * TIMES))
    expected = np.sin(frequency * TIMES) / (OMEGA**2 + frequency**2)
    np.testing.assert_allclose(theta[300:-300], expected[300:-300], atol=2e-5)


def test_a_step_is_leant_for_before_it_comes():
    """A step of f at 0: θ(0) = A/2ω², before it A/2ω² exp(ωt), after it A/ω² less the same."""
    theta = bounded(np.heaviside(TIMES, 0.5))
    before = np.exp(OMEGA * TIMES[:601]) / (2.0 * OMEGA**2)
    np.testing.assert_allclose(theta[:601], before, atol=1e-5)
    np.testing.assert_allclose(theta[600:], 1.0 / OMEGA**2 - before[::-1], atol=1e-5)


def test_finite_preview_loses_exponentially():
    """With a preview of ln(50)/ω = 1.304 s one percent of a step's lean is lost (Zou and Devasia 1999; from memory)."""
    theta = bounded(np.heaviside(TIMES, 0.5))
    preview = np.log(50.0) / OMEGA
    assert preview == pytest.approx(1.304, abs=5e-4)
    assert np.interp(-preview, TIMES, theta) / theta[-1] == pytest.approx(0.01, abs=2e-4)


def test_the_capture_point():
    """With z = 0.9 m, v = 0.3 m/s the pivot that stops the mass is 0.090883 m ahead (Pratt et al. 2006, from memory).

    A moment of m g p on the hand moves the pivot by p: the bounded lean then starts with the speed that p captures.
    """
    height, point, scale = 0.9, 0.090883, 1e-3
    arm = height - RADIUS
    shifted = np.full(601, scale * point * GRAVITY / (arm * height))
    solution = pendulum(shifted, height, axis=1, first=0.0)
    assert arm * solution.lean_rate[0, 1] / scale == pytest.approx(0.3, abs=1e-5)
    assert arm * solution.lean[-1, 1] / scale == pytest.approx(point, abs=1e-6)
