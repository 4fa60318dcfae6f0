"""Margins are what they say: at them the sampled loop stops being stable, inside them it does not."""

from __future__ import annotations

import attrs
import control
import numpy as np
import pytest
from scipy.integrate import trapezoid

from ballbal_ros.balance.discrete import SampledPlant
from ballbal_ros.balance.gains import Gains
from ballbal_ros.balance.margins import Margins, loop_margins
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.robot.arrays import read_only
from helpers.balancing import reach_gains


@pytest.fixture(scope="module")
def gains() -> Gains:
    """The demo robot's gains at the start of `reach`."""
    return reach_gains()


@pytest.fixture(scope="module")
def station(gains: Gains) -> Margins:
    """Margins of lean and ball."""
    return loop_margins(gains.station, ("x", "y"))


def scaled(regulator: Regulator, *factors: float) -> SampledPlant:
    """The plant with each axis' torque multiplied by a factor."""
    plant = regulator.plant
    a, b, e = plant.continuous
    factor = np.array(factors)
    return attrs.evolve(plant, continuous=(a, b * factor, e), inputs=read_only(plant.inputs * factor))


def test_gain_margins_are_where_stability_ends(gains: Gains, station: Margins) -> None:
    """A torque 0.5 % inside a gain margin leaves the loop stable, 0.5 % beyond it does not; up and down, x and y."""
    for index, axis in enumerate(station.axes):
        for margin, outward in ((axis.gain_up, 1.005), (axis.gain_down, 1.0 / 1.005)):
            factors = [1.0, 1.0]
            factors[index] = margin / outward
            assert gains.station.spectral_radius(scaled(gains.station, *factors)) < 1.0
            factors[index] = margin * outward
            assert gains.station.spectral_radius(scaled(gains.station, *factors)) > 1.0


def test_both_gains_may_change_within_the_disk(gains: Gains, station: Margins) -> None:
    """Anywhere in (2-α)/(2+α) … (2+α)/(2-α), both axes at once and differently, the loop stays stable."""
    low, high = (2.0 - station.disk) / (2.0 + station.disk), (2.0 + station.disk) / (2.0 - station.disk)
    for x in np.geomspace(low, high, 5):
        for y in np.geomspace(low, high, 5):
            assert gains.station.spectral_radius(scaled(gains.station, x, y)) < 1.0


def test_disk_lies_within_the_classical_margins(station: Margins) -> None:
    """What both axes may do at once, one may do alone."""
    for axis in station.axes:
        assert (2.0 + station.disk) / (2.0 - station.disk) <= axis.gain_up * 1.001
        assert (2.0 - station.disk) / (2.0 + station.disk) >= axis.gain_down * 0.999
        assert np.degrees(2.0 * np.arctan(station.disk / 2.0)) <= axis.phase * 1.001


def test_delay_margin_agrees_with_the_search(gains: Gains, station: Margins) -> None:
    """Phase over frequency at the crossover and the poles of the exactly delayed loop tell the same delay, to 2 %."""
    assert min(axis.delay for axis in station.axes) == pytest.approx(station.delay_limit, rel=0.02)
    heading = loop_margins(gains.heading, ("z",))
    assert heading.axes[0].delay == pytest.approx(heading.delay_limit, rel=0.02)


@pytest.mark.parametrize("share", [0.97, 1.03])
def test_delay_margin_is_where_a_simulation_falls(gains: Gains, station: Margins, share: float) -> None:
    """Stepped in time with 3 % less extra delay than the margin the lean dies out, with 3 % more it grows."""
    regulator = gains.station
    plant = regulator.plant.with_delay(regulator.plant.delay + share * station.delay_limit)
    a, b = plant.augmented()
    controller = regulator.controller()
    state, inner = np.zeros(len(a)), np.zeros(len(controller.a))
    state[:2] = 1e-3
    size = []
    for _ in range(6000):
        measured = plant.output @ state[:8]
        torque = controller.c @ inner + controller.d @ measured
        inner = controller.a @ inner + controller.b @ measured
        state = a @ state + b @ torque
        size.append(float(np.abs(state[:2]).max()))
    early, late = max(size[1000:2000]), max(size[5000:])
    assert late < 0.5 * early if share < 1.0 else late > 2.0 * early


def test_heading_margins_agree_with_python_control(gains: Gains) -> None:
    """python-control finds the same gain and phase margins on the same loop."""
    loop = gains.heading.loop()
    period = gains.heading.plant.period
    omega = np.geomspace(0.01, np.pi / period, 4000)
    response = control.frd(loop.response(np.exp(1j * omega * period))[:, 0, 0], omega)
    gain, phase, _, _, _, _ = control.stability_margins(response, returnall=True)
    found = loop_margins(gains.heading, ("z",)).axes[0]
    assert found.phase == pytest.approx(np.abs(phase).min(), rel=5e-3)
    assert found.gain_up == pytest.approx(gain[gain > 1.0].min(), rel=5e-3)
    assert found.gain_down == pytest.approx(gain[gain < 1.0].max(), rel=5e-3)


def test_sensitivity_keeps_bodes_balance(gains: Gains) -> None:
    """1/2π ∫ ln |det S| over the unit circle is the sum of ln |z| over the loop's unstable poles.

    Bode's integral for sampled loops: Sung and Hara 1988, Int. J. Control 48(6) 2429, written down from memory.
    """
    loop = gains.station.loop()
    angle = np.geomspace(1e-6, np.pi, 6000)
    sensitivity = 1.0 / np.linalg.det(np.eye(2) + loop.response(np.exp(1j * angle)))
    poles = np.abs(np.linalg.eigvals(loop.a))
    mean = trapezoid(np.log(np.abs(sensitivity)), angle) / np.pi
    assert mean == pytest.approx(np.log(poles[poles > 1.0 + 1e-6]).sum(), rel=2e-3)


def test_complementary_sensitivity_keeps_its_floor(station: Margins) -> None:
    """max |T| lies above what pole and delay allow at best."""
    assert station.complementary_peak > station.complementary_floor > 1.0


def test_unstable_loop_has_no_margins(gains: Gains) -> None:
    """On a plant that it can't hold, all margins are zero, and nothing is claimed."""
    weak = scaled(gains.station, 0.01, 0.01)
    found = loop_margins(gains.station, ("x", "y"), weak)
    assert found.disk == found.delay_limit == 0.0
    assert all(axis.phase == axis.delay == 0.0 and axis.gain_up == 1.0 for axis in found.axes)
