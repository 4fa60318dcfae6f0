"""Masses from rests, on made-up rests of robots that are known: no simulation."""

from __future__ import annotations

import attrs
import numpy as np
import pytest

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading, rotation_lean
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.mass_model import LinkMass
from ballbal_ros.robot.parameters import MassModelParameters
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.truth import drawn_truth
from ballbal_ros.weighing.findings import findings, not_told, turning_moments
from ballbal_ros.weighing.identify import Evidence, Weighed, identify
from ballbal_ros.weighing.links import Links
from ballbal_ros.weighing.postures import DesignSettings, choose_postures
from ballbal_ros.weighing.regressor import Motion
from helpers.robots import reach, shelver

NOISE = 5e-5  # rad, of the mean lean of one rest


def true_robot(seed: int) -> RobotDescription:
    """The demo robot as it truly is by a drawn truth."""
    truth, links = drawn_truth(shelver(), seed), Links.of(shelver())
    masses = [
        LinkMass(m.name, m.mass * truth.mass_factor[m.name], m.center + truth.center[m.name],
                 m.inertia * truth.mass_factor[m.name])
        for m in links.masses(np.zeros(links.unknowns))
    ]  # fmt: skip
    model = MassModelParameters(
        links=[m.name for m in masses],
        link={m.name: m.as_parameters() for m in masses},
        imu_tilt=list(truth.imu_tilt),
        spread=links.spread,
    )
    return shelver().with_mass_model(model)


def shown_lean(robot: RobotDescription, posture: Array) -> Array:
    """The lean at which a robot rests, as an IMU mounted as drawn would take it to be."""
    lean = WholeBody(robot).posture(posture).equilibrium_lean
    tilt = robot.rotation_imu_in_base @ shelver().rotation_imu_in_base.T
    return np.array(lean_and_heading(rotation_lean(np.array(lean)) @ tilt)[:2])


def weighed(seed: int, count: int = 8) -> Weighed:
    """What a weighing of rests alone finds, with a scale."""
    robot, rng = true_robot(seed), np.random.default_rng(seed)
    chosen = choose_postures(shelver(), reach().first, DesignSettings(count=count, candidates=60)).postures
    postures = np.vstack((chosen, reach().first))
    lean = np.array([shown_lean(robot, posture) for posture in postures])
    rests = Motion.at_rest(lean + NOISE * rng.standard_normal(lean.shape), postures)
    return identify(shelver(), Evidence(rests, rests.at(np.arange(0)), WholeBody(robot).mass))


@pytest.mark.parametrize("seed", range(2))
def test_the_lean_at_postures_not_weighed_is_foretold(seed: int):
    """After weighing, the lean shown at the ends of `reach` is right to a milliradian; before, it was off by many."""
    found = shelver().with_mass_model(weighed(seed).mass_model())
    for posture in (reach().first, reach().last):
        true = shown_lean(true_robot(seed), posture)
        before = np.abs(shown_lean(shelver(), posture) - true).max()
        after = np.abs(shown_lean(found, posture) - true).max()
        assert after < 1e-3 and after < 0.15 * before


def test_standard_errors_are_honest():
    """What the data have told lies within two standard errors of the truth for 90 % of the numbers, or more."""
    off = []
    for seed in range(3):
        robot, what = true_robot(seed), weighed(seed)
        links = Links.of(robot)
        rows, _ = turning_moments(shelver().model)
        dynamic = links.dynamic(np.zeros(links.unknowns))
        true = {f"{s} {a}": 1e3 * float(r @ dynamic) for s, m in zip(links.segments, rows) for a, r in zip("xyz", m)}
        off += [(f.found - true[f.name]) / f.error for f in findings(what) if f.told and f.name in true]
    assert len(off) >= 20
    assert np.mean(np.abs(off) < 2.0) >= 0.9


def test_tilt_and_mass_centre_are_said_not_to_be_told_apart():
    """At rest alone they go hand in hand: the report says so, with a correlation that is nearly one."""
    sentences = not_told(weighed(0))
    assert any("IMU tilt in pitch" in s and ("+1.00" in s or "+0.99" in s) for s in sentences)
    assert any("IMU tilt in roll" in s and ("-1.00" in s or "-0.99" in s) for s in sentences)


def test_without_a_scale_the_scale_of_masses_stays_unknown():
    """Rests alone don't tell the total mass: its standard error stays what it was."""
    what = weighed(1)
    rests = Motion.at_rest(np.array([shown_lean(true_robot(1), reach().first)]), reach().first[None])
    alone = identify(shelver(), Evidence(rests, rests.at(np.arange(0))))
    with_scale, without = (next(f for f in findings(w) if f.name == "total mass") for w in (what, alone))
    assert with_scale.error < 0.06 and with_scale.told
    assert without.error > 0.9 * without.before and not without.told


def test_a_motion_joined_is_both():
    """Samples of two motions follow each other."""
    one = Motion.at_rest(np.zeros((2, 2)), np.zeros((2, 3)))
    both = one.joined(attrs.evolve(one, lean=np.ones((2, 2))))
    assert len(both) == 4 and both.lean[3, 0] == 1.0
