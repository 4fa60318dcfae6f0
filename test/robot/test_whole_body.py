"""Mass centre, momentum and inertia against Pinocchio and MuJoCo, loads against a URDF that has them."""

import xml.etree.ElementTree as ElementTree

import mujoco
import numpy as np
import pinocchio as pin
import pytest

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import shelver

RNG = np.random.default_rng(6)
LOADS = (
    Load("left_hand", 1.7, [0.01, -0.02, -0.06], np.diag([2e-3, 3e-3, 4e-3])),
    Load("right_hand", 0.8, [0.0, 0.03, -0.04], [[2e-3, 1e-4, 0], [1e-4, 2e-3, 0], [0, 0, 1e-3]]),
)


def positions(count: int) -> np.ndarray:
    """Random arm positions within the limits."""
    robot = shelver()
    return RNG.uniform(robot.position_low, robot.position_high, size=(count, robot.joint_count))


def with_loads_written_in() -> RobotDescription:
    """The demo robot with the loads as fixed links of their own in its URDF."""
    root = ElementTree.fromstring(shelver().urdf_text)
    for number, load in enumerate(LOADS):
        (xx, xy, xz), (_, yy, yz), (_, _, zz) = load.inertia.tolist()
        link = ElementTree.SubElement(root, "link", name=f"load_{number}")
        inertial = ElementTree.SubElement(link, "inertial")
        ElementTree.SubElement(inertial, "origin", xyz=" ".join(map(str, load.center)), rpy="0 0 0")
        ElementTree.SubElement(inertial, "mass", value=str(load.mass))
        entries = {"ixx": xx, "ixy": xy, "ixz": xz, "iyy": yy, "iyz": yz, "izz": zz}
        ElementTree.SubElement(inertial, "inertia", {key: str(value) for key, value in entries.items()})
        joint = ElementTree.SubElement(root, "joint", name=f"grip_{number}", type="fixed")
        ElementTree.SubElement(joint, "parent", link=load.hand)
        ElementTree.SubElement(joint, "child", link=f"load_{number}")
    text = ElementTree.tostring(root, encoding="unicode")
    return RobotDescription.from_urdf(shelver().parameters, text, "body.urdf", "robot.yaml")


def mujoco_posture(description: RobotDescription, position: np.ndarray) -> tuple[float, np.ndarray, np.ndarray]:
    """Mass, mass centre and inertia about it, summed over MuJoCo's bodies."""
    spec = mujoco.MjSpec.from_string(description.urdf_text)
    spec.compiler.fusestatic = False
    model = spec.compile()
    data = mujoco.MjData(model)
    for name, value in zip(description.joint_names, position, strict=True):
        data.qpos[model.jnt_qposadr[model.joint(name).id]] = value
    mujoco.mj_kinematics(model, data)
    mujoco.mj_comPos(model, data)
    mass = model.body_mass.sum()
    center = model.body_mass @ data.xipos / mass
    inertia = np.zeros((3, 3))
    for body in range(model.nbody):
        axes, arm = data.ximat[body].reshape(3, 3), data.xipos[body] - center
        inertia += axes @ np.diag(model.body_inertia[body]) @ axes.T
        inertia += model.body_mass[body] * (arm @ arm * np.eye(3) - np.outer(arm, arm))
    return float(mass), center, inertia


@pytest.mark.parametrize("position", positions(4))
def test_mass_mass_centre_and_inertia_are_mujocos(position: np.ndarray):
    """A body with loads has the mass, mass centre and inertia that MuJoCo sums from a URDF with the loads."""
    posture = WholeBody(shelver(), LOADS).posture(position)
    mass, center, inertia = mujoco_posture(with_loads_written_in(), position)
    assert posture.mass == pytest.approx(mass, abs=1e-9)
    np.testing.assert_allclose(posture.center, center, atol=1e-9)
    np.testing.assert_allclose(posture.inertia, inertia, atol=1e-7)
    about_ball = posture.inertia_about_ball - posture.inertia
    np.testing.assert_allclose(about_ball @ center, np.zeros(3), atol=1e-9)
    assert np.trace(about_ball) == pytest.approx(2.0 * mass * center @ center)


@pytest.mark.parametrize("position", positions(3))
def test_loads_are_as_if_written_into_the_urdf(position: np.ndarray):
    """Everything a body with loads says, one whose URDF has the loads says too."""
    held, written = WholeBody(shelver(), LOADS), WholeBody(with_loads_written_in())
    rate, acceleration = RNG.normal(size=(2, 1, len(position)))
    ours = held.terms(position[None], rate, acceleration, ("left_hand",))
    theirs = written.terms(position[None], rate, acceleration, ("left_hand",))
    for name in ("mass", "moment", "moment_rate", "moment_acceleration", "inertia", "inertia_rate", "angular"):
        np.testing.assert_allclose(getattr(ours, name), getattr(theirs, name), atol=1e-11, err_msg=name)
    np.testing.assert_allclose(ours.angular_rate, theirs.angular_rate, atol=1e-10)
    np.testing.assert_allclose(ours.hand_position, theirs.hand_position, atol=1e-14)


@pytest.mark.parametrize("position", positions(3))
def test_mass_centre_and_its_rate_are_pinocchios(position: np.ndarray):
    """Mass centre, its velocity and its Jacobian agree with Pinocchio's and with finite differences."""
    body, rate = WholeBody(shelver()), RNG.normal(size=len(position))
    model = shelver().model
    data = model.createData()
    whole, moving = np.concatenate((np.zeros(6), [1.0], position)), np.concatenate((np.zeros(6), rate))
    pin.centerOfMass(model, data, whole, moving)
    np.testing.assert_allclose(body.center_of_mass(position), data.com[0], atol=1e-14)
    np.testing.assert_allclose(body.posture(position).center, data.com[0], atol=1e-14)
    np.testing.assert_allclose(body.center_velocity(position, rate), data.vcom[0], atol=1e-12)
    jacobian = body.center_jacobian(position)
    for joint in range(len(position)):
        step = 1e-6 * np.eye(len(position))[joint]
        expected = (body.center_of_mass(position + step) - body.center_of_mass(position - step)) / 2e-6
        np.testing.assert_allclose(jacobian[:, joint], expected, atol=1e-9)


@pytest.mark.parametrize("position", positions(3))
def test_momentum_is_pinocchios_and_terms_hold_it(position: np.ndarray):
    """Linear momentum is mass times the centre's velocity, angular momentum is Pinocchio's, moved to the ball."""
    body, rate = WholeBody(shelver(), LOADS), RNG.normal(size=len(position))
    description = with_loads_written_in()
    data = description.model.createData()
    whole, moving = np.concatenate((np.zeros(6), [1.0], position)), np.concatenate((np.zeros(6), rate))
    pin.computeCentroidalMomentum(description.model, data, whole, moving)
    linear, angular = body.momentum(position, rate)
    np.testing.assert_allclose(linear, data.hg.linear, atol=1e-11)
    np.testing.assert_allclose(linear, body.mass * body.center_velocity(position, rate), atol=1e-11)
    np.testing.assert_allclose(angular, data.hg.angular + np.cross(data.com[0], data.hg.linear), atol=1e-11)
    terms = body.terms(position[None], rate[None], 0.0 * rate[None])
    np.testing.assert_allclose(terms.moment_rate[0], linear, atol=1e-12)
    np.testing.assert_allclose(terms.angular[0], angular, atol=1e-12)
    np.testing.assert_allclose(terms.inertia[0], body.posture(position).inertia_about_ball, atol=1e-11)


def test_the_terms_rates_are_finite_differences_along_a_motion():
    """Every term that is called a rate is the rate of its term along a smooth arm motion."""
    body, a = WholeBody(shelver(), LOADS), RNG.normal(size=(3, shelver().joint_count)) * 0.4

    def at(t: float) -> np.ndarray:
        return body.terms((a[0] + a[1] * t + a[2] * t * t)[None], (a[1] + 2 * a[2] * t)[None], 2 * a[2][None])

    h, now = 1e-5, at(0.2)
    before, after = at(0.2 - h), at(0.2 + h)
    for value, rate in (
        ("moment", "moment_rate"),
        ("moment_rate", "moment_acceleration"),
        ("inertia", "inertia_rate"),
        ("angular", "angular_rate"),
    ):
        expected = (getattr(after, value) - getattr(before, value)) / (2 * h)
        np.testing.assert_allclose(getattr(now, rate), expected, atol=2e-6, err_msg=rate)


def test_terms_of_a_motion_that_rests_are_those_of_each_sample():
    """Samples that are equal, next to each other or not, have the terms that each has by itself."""
    body, order = WholeBody(shelver(), LOADS), [0, 0, 0, 1, 2, 2, 0, 1, 1]
    motion = RNG.normal(size=(3, 3, shelver().joint_count))[:, order] * 0.5
    together = body.terms(*motion, hands=("left_hand",))
    for k in range(len(order)):
        alone = body.terms(*motion[:, [k]], hands=("left_hand",))
        for name in ("moment", "inertia_rate", "angular_rate", "moment_acceleration", "hand_position"):
            np.testing.assert_array_equal(getattr(together, name)[k], getattr(alone, name)[0])
    assert len(body.terms(*motion[:, :0])) == 0


@pytest.mark.parametrize("position", positions(4))
def test_the_equilibrium_lean_puts_the_mass_centre_above_the_ball(position: np.ndarray):
    """Leant by it, the mass centre stands straight above the ball's centre (common practice, no source)."""
    posture = WholeBody(shelver(), LOADS).posture(position)
    x, y, z = rotation_lean(np.array(posture.equilibrium_lean)) @ posture.center
    np.testing.assert_allclose([x, y], 0.0, atol=1e-12)
    assert z > 0.0


def test_a_load_replaces_that_hands_load_and_mass_zero_takes_it_away():
    """After taking loads and putting them away the body is, to the bit, what it was; other bodies never change."""
    body, other, position = WholeBody(shelver()), WholeBody(shelver()), positions(1)[0]
    bare = body.posture(position)
    body.set_load(Load("left_hand", 1.0))
    body.set_load(LOADS[0])
    body.set_load(LOADS[1])
    assert set(body.loads) == {"left_hand", "right_hand"}
    assert body.mass == pytest.approx(bare.mass + 2.5)
    both = body.posture(position).center
    np.testing.assert_allclose(both, WholeBody(shelver(), LOADS).posture(position).center, atol=1e-15)
    assert other.posture(position).mass == bare.mass
    body.set_load(Load("left_hand", 0.0))
    body.set_load(Load("right_hand", 0.0))
    assert body.loads == {}
    after = body.posture(position)
    np.testing.assert_array_equal(after.center, bare.center)
    np.testing.assert_array_equal(after.inertia, bare.inertia)


def test_what_is_returned_does_not_change_with_the_next_call():
    """A posture, a mass centre and a Jacobian stay what they were when the next ones are made."""
    body = WholeBody(shelver())
    first, second = positions(2)
    kept = body.posture(first), body.center_of_mass(first), body.center_jacobian(first), body.momentum(first, second)[0]
    copies = kept[0].center.copy(), kept[0].inertia.copy(), *(array.copy() for array in kept[1:])
    body.posture(second), body.center_of_mass(second), body.center_jacobian(second), body.momentum(second, first)
    for array, copy in zip((kept[0].center, kept[0].inertia, *kept[1:]), copies, strict=True):
        np.testing.assert_array_equal(array, copy)


@pytest.mark.parametrize(
    ("load", "words"),
    [
        (Load("left_hnd", 1.0), ("unknown hand left_hnd", "did you mean left_hand?")),
        (Load("left_hand", -1.0), ("mass in left_hand is -1.0 kg", "0 to 3 kg")),
        (Load("left_hand", 3.5), ("mass in left_hand is 3.5 kg", "0 to 3 kg")),
        (Load("left_hand", float("nan")), ("mass in left_hand is nan kg",)),
        (Load("left_hand", 1.0, [0.0, 0.0, float("inf")]), ("center in left_hand",)),
        (Load("left_hand", 1.0, [0.0, 5.0, 0.0]), ("center in left_hand", "within 2 m")),
        (Load("left_hand", 1.0, [0.0, 0.0]), ("center in left_hand", "three numbers")),
        (Load("left_hand", 1.0, [0, 0, 0], np.diag([1.0, 1.0, 3.0])), ("inertia in left_hand", "no possible body")),
        (Load("left_hand", 1.0, [0, 0, 0], np.diag([-1e-3, 1e-3, 1e-3])), ("inertia in left_hand", "positive")),
        (Load("left_hand", 1.0, [0, 0, 0], np.eye(2)), ("inertia in left_hand", "3x3")),
    ],
)
def test_an_impossible_load_is_refused_and_changes_nothing(load: Load, words: tuple[str, ...]):
    """An unknown hand, an impossible or too heavy load is refused in one line, and the hand holds what it held."""
    body = WholeBody(shelver(), LOADS)
    with pytest.raises(ModelError) as caught:
        body.set_load(load, "hand_load")
    line = str(caught.value)
    assert line.startswith("hand_load: ")
    assert "\n" not in line
    for word in words:
        assert word in line
    assert body.loads == {load.hand: load for load in LOADS}
