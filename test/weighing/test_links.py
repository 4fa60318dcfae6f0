"""Links as unknowns: what is drawn comes out as drawn, and whatever the unknowns are, a body can be so."""

from __future__ import annotations

import numpy as np
import pinocchio as pin
import pytest

from ballbal_ros.robot.loads import check_inertia
from ballbal_ros.weighing.links import Links
from helpers.robots import shelver


def links() -> Links:
    """The demo robot's."""
    return Links.of(shelver())


def test_as_drawn_they_are_what_pinocchio_reads_from_the_urdf():
    """With all unknowns 0 the segments' inertial parameters are those of Pinocchio's own reading of the file."""
    inertias = list(shelver().model.inertias)[1:]
    expected = np.concatenate([np.asarray(inertia.toDynamicParameters()) for inertia in inertias])
    np.testing.assert_allclose(links().dynamic(np.zeros(links().unknowns)), expected, atol=1e-10)


@pytest.mark.parametrize("seed", range(3))
def test_whatever_the_unknowns_are_a_body_can_be_so(seed: int):
    """At unknowns five standard deviations wide every link has positive mass and a possible inertia, and so has every
    segment: its pseudo-inertia (Wensing, Kim and Slotine 2018, IEEE RA-L 3(1) 60, from memory) is positive definite.
    """
    own = 5.0 * np.random.default_rng(seed).standard_normal(links().unknowns)
    for mass in links().masses(own):
        assert mass.mass > 0.0
        check_inertia(mass.inertia, "test", mass.name)
    for m, hx, hy, hz, xx, xy, yy, xz, yz, zz in links().dynamic(own).reshape(-1, 10):
        inertia, moment = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]), np.array([hx, hy, hz])
        second = 0.5 * np.trace(inertia) * np.eye(3) - inertia
        pseudo = np.block([[second, moment[:, None]], [moment[None], np.array([[m]])]])
        assert np.linalg.eigvalsh(pseudo)[0] > 0.0


def test_derivatives_are_those_of_small_steps():
    """The derivatives foretell what a small step does."""
    rng = np.random.default_rng(0)
    own, step = rng.standard_normal(links().unknowns), 1e-4 * rng.standard_normal(links().unknowns)
    change = links().dynamic(own + step) - links().dynamic(own)
    np.testing.assert_allclose(links().dynamic_by(own) @ step, change, atol=1e-7)


def test_the_mass_model_brings_the_links_into_the_description():
    """What is found, written as parameters and laid over the URDF, makes the description that was meant."""
    rng, found = np.random.default_rng(1), links()
    own = rng.standard_normal(found.unknowns)
    masses = found.masses(own)
    model = shelver().parameters.mass_model
    parameters = type(model)(
        links=[m.name for m in masses],
        link={m.name: m.as_parameters() for m in masses},
        imu_tilt=[0.01, -0.02],
        spread=model.spread,
    )
    description = shelver().with_mass_model(parameters)
    dynamic = np.concatenate([np.asarray(i.toDynamicParameters()) for i in list(description.model.inertias)[1:]])
    np.testing.assert_allclose(dynamic, found.dynamic(own), atol=1e-9)
    tilt = description.rotation_imu_in_base @ shelver().rotation_imu_in_base.T
    np.testing.assert_allclose(pin.rpy.matrixToRpy(tilt), [0.01, -0.02, 0.0], atol=1e-12)
    drawn = description.as_drawn()
    assert pin.computeTotalMass(drawn.model) == pytest.approx(pin.computeTotalMass(shelver().model), abs=1e-12)
