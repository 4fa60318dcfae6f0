"""Least squares as weighing does it, against certified values and reference libraries."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import curve_fit

from ballbal_ros.robot.arrays import Array
from ballbal_ros.weighing.least_squares import Fit, most_probable

# J. W. Longley (1967), JASA 62, 819: prices, national product, unemployed, armed forces, population, year; employed.
LONGLEY = """
83.0 234289 2356 1590 107608 1947 60323
88.5 259426 2325 1456 108632 1948 61122
88.2 258054 3682 1616 109773 1949 60171
89.5 284599 3351 1650 110929 1950 61187
96.2 328975 2099 3099 112075 1951 63221
98.1 346999 1932 3594 113270 1952 63639
99.0 365385 1870 3547 115094 1953 64989
100.0 363112 3578 3350 116219 1954 63761
101.2 397469 2904 3048 117388 1955 66019
104.6 419180 2822 2857 118734 1956 67857
108.4 442769 2936 2798 120445 1957 68169
110.8 444546 4681 2637 121950 1958 66513
112.6 482704 3813 2552 123366 1959 68655
114.2 502601 3931 2514 125368 1960 69564
115.7 518173 4806 2572 127852 1961 69331
116.9 554894 4007 2827 130081 1962 70551
"""
# NIST Statistical Reference Datasets, Longley: certified estimates, standard deviations, residual standard deviation.
# (Data and values written down from memory; they agree with each other to all digits asked for.)
CERTIFIED = (
    (-3482258.63459582, 890420.383607373),
    (15.0618722713733, 84.9149257747669),
    (-0.0358191792925910, 0.0334910077722432),
    (-2.02022980381683, 0.488399681651699),
    (-1.03322686717359, 0.214274163161675),
    (-0.0511041056535807, 0.226073200069370),
    (1829.15146461355, 455.478499142212),
)
RESIDUAL = 304.854073561965


# Of an unknown beforehand, in standard deviations of what the data tell of it: the prior says nothing.
_WIDE = 1e10


def with_nothing_known(design: Array, observed: Array, covariance: Array) -> Fit:
    """What is found of `observed = design x + noise` by `most_probable` where next to nothing is known of x before."""
    root = np.linalg.inv(np.linalg.cholesky(covariance if covariance.ndim == 2 else np.diag(covariance)))
    white, seen = root @ design, root @ observed
    scale = _WIDE / np.linalg.norm(white, axis=0)
    fit = most_probable(lambda z: white @ (scale * z) - seen, lambda z: white * scale, np.zeros(len(scale)))
    return Fit(scale * fit.estimate, fit.covariance * np.outer(scale, scale), fit.chi_square)


def standard_error(fit: Fit) -> Array:
    return np.asarray(np.sqrt(np.diag(fit.covariance)))


def test_certified_values_of_longley_come_out():
    """With the certified residual deviation as the known error, estimates and standard errors are the certified ones:
    a problem that is ill-conditioned on purpose.
    """
    data = np.array(LONGLEY.split(), float).reshape(-1, 7)
    design = np.column_stack((np.ones(len(data)), data[:, :6]))
    fit = with_nothing_known(design, data[:, 6], np.full(len(data), RESIDUAL**2))
    for (value, error), found, deviation in zip(CERTIFIED, fit.estimate, standard_error(fit), strict=True):
        assert found == pytest.approx(value, rel=1e-5)
        assert deviation == pytest.approx(error, rel=1e-5)
    assert fit.chi_square == pytest.approx(len(data) - 7, rel=1e-6)


@pytest.mark.parametrize("seed", range(3))
def test_scipy_agrees_for_any_covariance(seed: int):
    """Estimate and covariance are those of scipy.optimize.curve_fit with the same full covariance."""
    rng = np.random.default_rng(seed)
    design, root = rng.standard_normal((12, 3)), rng.standard_normal((12, 12))
    covariance = root @ root.T + np.eye(12)
    observed = design @ [1.0, -2.0, 0.5] + np.linalg.cholesky(covariance) @ rng.standard_normal(12)
    fit = with_nothing_known(design, observed, covariance)
    line = lambda _, a, b, c: design @ [a, b, c]  # noqa: E731
    expected, spread = curve_fit(line, np.arange(12.0), observed, np.zeros(3), sigma=covariance, absolute_sigma=True)
    np.testing.assert_allclose(fit.estimate, expected, rtol=1e-5, atol=1e-7)
    np.testing.assert_allclose(fit.covariance, spread, rtol=1e-5, atol=1e-9)


def test_a_prior_counts_as_a_measurement():
    """The most probable unknowns of a linear problem are those of least squares with the prior as further rows."""
    rng = np.random.default_rng(4)
    design, observed = rng.standard_normal((8, 3)), rng.standard_normal(8)
    rows, seen = np.vstack((design, np.eye(3))), np.append(observed, np.zeros(3))
    expected, *_ = np.linalg.lstsq(rows, seen, rcond=None)
    fit = most_probable(lambda x: design @ x - observed, lambda x: design, np.zeros(3))
    np.testing.assert_allclose(fit.estimate, expected, atol=1e-9)
    np.testing.assert_allclose(fit.covariance, np.linalg.inv(rows.T @ rows), atol=1e-9)


def numbers_in_the_page() -> dict[str, float]:
    """The numbers of the hand calculation in docs/weighing.md: `name = value` in its code blocks."""
    text = (Path(__file__).parents[2] / "docs" / "weighing.md").read_text(encoding="utf-8")
    blocks = "\n".join(re.findall(r"```text\n(.*?)```", text, re.S))
    return {name: float(value) for name, value in re.findall(r"(\w+) = .*?(-?[\d.]+)(?: [a-z ]+)?$", blocks, re.M)}


def test_the_hand_calculation_of_the_page_is_right():
    """What docs/weighing.md works out by hand is found as well, to the digits given there."""
    page = numbers_in_the_page()
    mass, lean = page["M"], np.array([page["lean_1"], page["lean_2"]])
    height = np.array([page["height_1"], page["height_2"]])
    # Moments at rest: M Z lean = B, and B + A with the arm out.
    error = mass * height * page["lean_error"]
    fit = with_nothing_known(np.array([[1.0, 0.0], [1.0, 1.0]]), mass * height * lean, error**2)
    body, arm = fit.estimate.tolist()
    assert body == pytest.approx(page["B"], abs=5e-4) and arm == pytest.approx(page["A"], abs=5e-4)
    assert float(standard_error(fit)[1]) == pytest.approx(page["A_error"], abs=5e-5)
    tilted = with_nothing_known(
        np.array([[1.0, 0.0], [1.0, 1.0]]), mass * height * (lean + page["tilt"]), error**2
    ).estimate
    assert tilted[1] - arm == pytest.approx(page["A_by_tilt"], abs=5e-4)
    assert tilted[0] - body == pytest.approx(page["B_by_tilt"], abs=5e-3)
