"""The drive's maps: power is the same on both sides, efforts are of least norm, contacts must span space."""

import numpy as np
import pytest

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.drive import Drive
from ballbal_ros.robot.parameters import ContactParameters, DriveParameters

RADIUS = 0.12


def contact(point: np.ndarray, push: np.ndarray, effective_radius: float = 0.05, **more: float) -> ContactParameters:
    settings = {"effort_limit": 20.0, "rate_limit": 60.0, **more}
    return ContactParameters(point=list(point), push=list(push), effective_radius=effective_radius, **settings)


def ring(count: int, slope: float = 0.8, twist: float = 0.0) -> DriveParameters:
    """Omniwheels around the ball's top at this slope from it, rad, pushing sideways, turned by `twist` out of it."""
    members = {}
    for k in range(count):
        heading = 2.0 * np.pi * k / count + 0.3
        out, side = (
            np.array([np.cos(heading), np.sin(heading), 0.0]),
            np.array([-np.sin(heading), np.cos(heading), 0.0]),
        )
        point = np.sin(slope) * out + np.cos(slope) * np.array([0.0, 0.0, 1.0])
        push = np.cos(twist) * side + np.sin(twist) * np.cross(point, side)
        members[f"wheel_{k}"] = contact(point, push, 0.04 + 0.01 * k, rotor_inertia=0.001 * (k + 1))
    return DriveParameters(contacts=list(members), contact=members)


@pytest.fixture(params=[(3, 0.0), (4, 0.0), (3, 0.4), (5, -0.7)], ids=str)
def parameters(request: pytest.FixtureRequest) -> DriveParameters:
    count, twist = request.param
    return ring(count, twist=twist)


def test_power_is_the_same_on_both_sides(parameters: DriveParameters):
    """Efforts times actuator rates equal the torque on the ball times the ball's rate relative to the body."""
    drive, rng = Drive.from_parameters(parameters, RADIUS), np.random.default_rng(1)
    for _ in range(20):
        effort, spin = rng.normal(size=len(drive.names)), rng.normal(size=3)
        torque_on_ball = -drive.torque(effort)
        np.testing.assert_allclose(effort @ (drive.rate_map @ spin), torque_on_ball @ spin, atol=1e-12)


def test_rates_and_torques_are_those_of_wheels_on_a_sphere(parameters: DriveParameters):
    """A rim has the ball's surface speed along its push, and pushes with effort / effective radius."""
    drive, rng = Drive.from_parameters(parameters, RADIUS), np.random.default_rng(2)
    spin, effort = rng.normal(size=3), rng.normal(size=len(drive.names))
    torque_on_ball = np.zeros(3)
    for index, name in enumerate(parameters.contacts):
        member = parameters.contact[name]
        at = RADIUS * np.array(member.point)
        surface = np.cross(spin, at) @ np.array(member.push)
        assert (drive.rate_map @ spin)[index] == pytest.approx(surface / member.effective_radius, abs=1e-12)
        torque_on_ball += np.cross(at, np.array(member.push) * effort[index] / member.effective_radius)
    np.testing.assert_allclose(drive.torque(effort), -torque_on_ball, atol=1e-12)


def test_efforts_give_the_torque_asked_for_with_the_least_norm(parameters: DriveParameters):
    """The efforts give the torque, and any others that give it too are larger in norm."""
    drive, rng = Drive.from_parameters(parameters, RADIUS), np.random.default_rng(3)
    torque = rng.normal(size=3)
    effort = drive.effort(torque)
    np.testing.assert_allclose(drive.torque(effort), torque, atol=1e-12)
    _, values, rows = np.linalg.svd(drive.torque_map)
    for idle in rows[len(values) :]:
        np.testing.assert_allclose(drive.torque(effort + idle), torque, atol=1e-12)
        assert np.linalg.norm(effort + 0.1 * idle) > np.linalg.norm(effort)


def test_the_balls_rate_comes_back_from_the_actuators(parameters: DriveParameters):
    """Actuator rates of a spin give that spin again."""
    drive, spin = Drive.from_parameters(parameters, RADIUS), np.array([0.3, -1.2, 0.7])
    np.testing.assert_allclose(drive.spin_map @ (drive.rate_map @ spin), spin, atol=1e-12)


def test_reflected_inertia_holds_the_rotors_energy(parameters: DriveParameters):
    """Half spin · reflected inertia · spin is the kinetic energy of the rotors at their rates."""
    drive, spin = Drive.from_parameters(parameters, RADIUS), np.array([0.4, 0.2, -0.9])
    rotors = np.array([parameters.contact[name].rotor_inertia for name in parameters.contacts])
    energy = 0.5 * rotors @ (drive.rate_map @ spin) ** 2
    assert 0.5 * spin @ drive.reflected_inertia @ spin == pytest.approx(energy)


def test_the_torque_limit_is_where_the_first_actuator_meets_its_own(parameters: DriveParameters):
    """At the limit about an axis one actuator is at its effort limit, and none beyond it."""
    drive = Drive.from_parameters(parameters, RADIUS)
    for axis in np.vstack((np.eye(3), [[0.6, 0.0, 0.8]])):
        share = np.abs(drive.effort(drive.torque_limit(axis) * axis)) / drive.effort_limit
        assert share.max() == pytest.approx(1.0)


@pytest.mark.parametrize(
    "contacts",
    [
        {},
        {
            "a": contact(np.array([1.0, 0, 0]), np.array([0, 1.0, 0])),
            "b": contact(np.array([0, 1.0, 0]), np.array([0, 0, 1.0])),
        },
        # Three round the equator that push sideways only spin the ball about the vertical.
        ring(3, slope=np.pi / 2).contact,
        # Three along one meridian, pushing along it, turn the ball about one axis.
        {
            str(k): contact(np.array([np.sin(a), 0.0, np.cos(a)]), np.array([np.cos(a), 0.0, -np.sin(a)]))
            for k, a in enumerate((0.0, 0.5, 1.0))
        },
    ],
    ids=["none", "two", "equator", "meridian"],
)
def test_contacts_that_can_not_turn_the_ball_are_refused(contacts: dict[str, ContactParameters]):
    """Fewer than three contacts, or contacts that don't span space, are refused in one line that names the file."""
    with pytest.raises(ModelError, match=r"^my/robot\.yaml: drive\.contacts has \d contacts .*span space$"):
        Drive.from_parameters(DriveParameters(contacts=list(contacts), contact=contacts), RADIUS, "my/robot.yaml")
