"""The demo robot's URDF is a body that could be built, and Pinocchio and MuJoCo read the same one from it."""

import xml.etree.ElementTree as ElementTree
from itertools import product
from pathlib import Path

import mujoco
import numpy as np
import pinocchio as pin
import pytest

URDF = Path(__file__).parents[2] / "config" / "shelver" / "shelver.urdf"
GRAVITY = 9.80665  # m/s^2
ARM = ("shoulder_pitch", "shoulder_roll", "upper_arm_yaw", "elbow_pitch", "forearm_yaw", "wrist_pitch")
ARM_JOINTS = [f"{side}_{joint}" for side in ("left", "right") for joint in ARM]
ROBOT = ElementTree.parse(URDF).getroot()
LINKS = {link.attrib["name"]: link for link in ROBOT.findall("link")}


def child(element: ElementTree.Element, tag: str) -> ElementTree.Element:
    found = element.find(tag)
    assert found is not None, f"{element.attrib} has no <{tag}>"
    return found


def numbers(text: str) -> np.ndarray:
    return np.array([float(word) for word in text.split()])


def inertial_of(link: ElementTree.Element) -> tuple[float, np.ndarray, np.ndarray]:
    """Mass (kg), mass centre (m, link frame) and inertia about it (kg m^2) as written in the file."""
    inertial = child(link, "inertial")
    entry = {key: float(value) for key, value in child(inertial, "inertia").attrib.items()}
    inertia = np.array(
        [
            [entry["ixx"], entry["ixy"], entry["ixz"]],
            [entry["ixy"], entry["iyy"], entry["iyz"]],
            [entry["ixz"], entry["iyz"], entry["izz"]],
        ]
    )
    return float(child(inertial, "mass").attrib["value"]), numbers(child(inertial, "origin").attrib["xyz"]), inertia


def half_extent(geometry: ElementTree.Element) -> np.ndarray:
    """Half the edges (m) of the smallest box around a primitive, along the primitive's own axes."""
    shape = geometry[0]
    if shape.tag == "box":
        return numbers(shape.attrib["size"]) / 2
    radius = float(shape.attrib["radius"])
    return np.array([radius, radius, float(shape.attrib["length"]) / 2 if shape.tag == "cylinder" else radius])


def extent_of(link: ElementTree.Element) -> tuple[np.ndarray, np.ndarray]:
    """Lower and upper corner (m, link frame) of a box around all that the link shows."""
    corners = []
    for shape in link.findall("visual") + link.findall("collision"):
        origin = child(shape, "origin").attrib
        turn = pin.rpy.rpyToMatrix(numbers(origin["rpy"]))
        for signs in product((-1, 1), repeat=3):
            corners.append(numbers(origin["xyz"]) + turn @ (np.array(signs) * half_extent(child(shape, "geometry"))))
    return np.min(corners, axis=0), np.max(corners, axis=0)


def floating_model() -> pin.Model:
    model = pin.buildModelFromUrdf(str(URDF), pin.JointModelFreeFlyer())
    model.gravity.linear = np.array([0.0, 0.0, -GRAVITY])
    return model


def fixed_model() -> pin.Model:
    model = pin.buildModelFromUrdf(str(URDF))
    model.gravity.linear = np.array([0.0, 0.0, -GRAVITY])
    return model


def mujoco_model() -> mujoco.MjModel:
    spec = mujoco.MjSpec.from_file(str(URDF))
    spec.compiler.fusestatic = False  # or the body, which stands on no joint here, would lose its mass to the world
    spec.option.gravity = [0.0, 0.0, -GRAVITY]
    return spec.compile()


def random_arm_positions(count: int) -> np.ndarray:
    model = fixed_model()
    return np.random.default_rng(7).uniform(
        model.lowerPositionLimit, model.upperPositionLimit, (count, len(ARM_JOINTS))
    )


def hand_positions(**positions: float) -> dict[str, np.ndarray]:
    """Where both hands are (m, base_link) at these joint positions (rad), all others at zero."""
    model = fixed_model()
    data = model.createData()
    arm_position = np.zeros(model.nq)
    for name, value in positions.items():
        arm_position[model.joints[model.getJointId(name)].idx_q] = value
    pin.framesForwardKinematics(model, data, arm_position)
    return {side: data.oMf[model.getFrameId(f"{side}_hand")].translation.copy() for side in ("left", "right")}


def test_joints_are_two_arms_of_six() -> None:
    """Only the twelve arm joints move, left before right, in the order of the file, in both libraries."""
    moving = [joint.attrib["name"] for joint in ROBOT.findall("joint") if joint.attrib["type"] != "fixed"]
    assert moving == ARM_JOINTS
    assert list(floating_model().names)[2:] == ARM_JOINTS
    model = mujoco_model()
    assert [model.joint(i).name for i in range(model.njnt)] == ARM_JOINTS


def test_root_is_base_link() -> None:
    """The root is base_link, and the ball, which turns under it, is no part of the file."""
    children = {child(joint, "child").attrib["link"] for joint in ROBOT.findall("joint")}
    assert set(LINKS) - children == {"base_link"}
    assert not [name for name in LINKS if "ball" in name]


def test_mass_and_height() -> None:
    """The upper body weighs 56 to 58 kg and, on a ball of 0.115 m radius, stands 1.5 m tall."""
    assert 56.0 < pin.computeTotalMass(floating_model()) < 58.0
    model = fixed_model()
    data = model.createData()
    pin.framesForwardKinematics(model, data, pin.neutral(model))
    top = max(data.oMf[model.getFrameId(name)].translation[2] + extent_of(link)[1][2] for name, link in LINKS.items())
    assert top + 0.115 == pytest.approx(1.5, abs=0.01)


def test_mass_is_the_sum_of_the_links() -> None:
    """Both libraries find the mass that the file's links add up to."""
    total = sum(inertial_of(link)[0] for link in LINKS.values())
    assert pin.computeTotalMass(floating_model()) == pytest.approx(total, abs=1e-9)
    assert mujoco_model().body_mass.sum() == pytest.approx(total, abs=1e-9)


def test_mass_centre_is_nearly_above_the_ball() -> None:
    """With hanging arms the mass centre is 0.60 to 0.62 m up, near the z axis but, as on real robots, off it."""
    model = floating_model()
    center = pin.centerOfMass(model, model.createData(), pin.neutral(model))
    assert 0.60 < center[2] < 0.62
    assert np.linalg.norm(center[:2]) < 0.02
    assert np.all(np.abs(center[:2]) > 0.001)


def test_mass_centre_agrees_between_libraries() -> None:
    """Pinocchio and MuJoCo agree on the mass centre to 1e-9 m at random joint positions."""
    floating, simulated = floating_model(), mujoco_model()
    floating_data, simulated_data = floating.createData(), mujoco.MjData(simulated)
    for arm_position in random_arm_positions(50):
        whole = pin.neutral(floating)
        whole[7:] = arm_position
        simulated_data.qpos[:] = arm_position
        mujoco.mj_forward(simulated, simulated_data)
        np.testing.assert_allclose(
            pin.centerOfMass(floating, floating_data, whole),
            simulated_data.subtree_com[simulated.body("base_link").id],
            atol=1e-9,
        )


def test_arm_dynamics_agree_between_libraries() -> None:
    """Gravity, centrifugal and Coriolis torques agree too (1e-6 N m): the inertias are read alike."""
    fixed, simulated = fixed_model(), mujoco_model()
    fixed_data, simulated_data = fixed.createData(), mujoco.MjData(simulated)
    rng = np.random.default_rng(8)
    for arm_position in random_arm_positions(20):
        arm_velocity = rng.normal(0.0, 2.0, len(ARM_JOINTS))
        simulated_data.qpos[:], simulated_data.qvel[:] = arm_position, arm_velocity
        mujoco.mj_forward(simulated, simulated_data)
        expected = pin.nonLinearEffects(fixed, fixed_data, arm_position, arm_velocity)
        np.testing.assert_allclose(simulated_data.qfrc_bias, expected, atol=1e-6)


@pytest.mark.parametrize("name", LINKS)
def test_link_inertia_is_possible(name: str) -> None:
    """Each link has mass, and principal moments that are positive, none more than the sum of the others."""
    mass, _, inertia = inertial_of(LINKS[name])
    moments = np.linalg.eigvalsh(inertia)
    assert mass > 0
    assert moments[0] > 0
    assert moments[2] < moments[0] + moments[1]


@pytest.mark.parametrize("name", LINKS)
def test_link_mass_fits_its_shape(name: str) -> None:
    """Each link's mass centre lies inside what it shows, its moments are what mass inside that can have."""
    mass, center, inertia = inertial_of(LINKS[name])
    lower, upper = extent_of(LINKS[name])
    assert np.all(center > lower) and np.all(center < upper)
    # mass between a and b from its mean has at most the variance a b (Bhatia and Davis 2000, from memory)
    second_moment = mass * (center - lower) * (upper - center)
    largest = second_moment.sum() - second_moment
    assert np.all(np.diag(inertia) < largest)


@pytest.mark.parametrize("name", ["battery", "left_shoulder", "left_elbow", "left_wrist", "camera_mast"])
def test_inertia_is_that_of_the_solid(name: str) -> None:
    """A link made of one solid has the moments that MuJoCo finds for that solid of that mass."""
    mass, _, inertia = inertial_of(LINKS[name])
    geometry = child(child(LINKS[name], "collision"), "geometry")
    extent = half_extent(geometry)
    kind = mujoco.mjtGeom.mjGEOM_BOX if geometry[0].tag == "box" else mujoco.mjtGeom.mjGEOM_CYLINDER
    spec = mujoco.MjSpec()
    size = extent if geometry[0].tag == "box" else [extent[0], extent[2], 0.0]
    spec.worldbody.add_body(name=name).add_geom(type=kind, size=size, mass=mass)
    solid = spec.compile().body(name)
    np.testing.assert_allclose(np.linalg.eigvalsh(inertia), np.sort(solid.inertia), rtol=1e-4)


@pytest.mark.parametrize("joint", ARM_JOINTS)
def test_limits_are_finite(joint: str) -> None:
    """Each arm joint has finite limits of position, velocity and effort, and zero lies within the first."""
    element = next(item for item in ROBOT.findall("joint") if item.attrib["name"] == joint)
    limit = {key: float(value) for key, value in child(element, "limit").attrib.items()}
    assert np.all(np.isfinite(list(limit.values())))
    assert limit["lower"] < 0 < limit["upper"]
    assert limit["velocity"] > 0 and limit["effort"] > 0


def test_limits_are_mirrored() -> None:
    """The right arm may do what the left may, seen in a mirror."""
    model = fixed_model()
    lower, upper = model.lowerPositionLimit, model.upperPositionLimit
    mirrored = np.array(["roll" in joint or "yaw" in joint for joint in ARM])
    np.testing.assert_array_equal(lower[6:], np.where(mirrored, -upper[:6], lower[:6]))
    np.testing.assert_array_equal(upper[6:], np.where(mirrored, -lower[:6], upper[:6]))


@pytest.mark.parametrize("side", ["left", "right"])
def test_joint_signs(side: str) -> None:
    """Negative pitch swings a hand forward, positive roll to the left, positive yaw turns a bent arm to the left."""
    hanging = hand_positions()[side]
    assert hand_positions(**{f"{side}_shoulder_pitch": -1.4})[side][0] > hanging[0] + 0.6
    assert hand_positions(**{f"{side}_elbow_pitch": -1.0})[side][0] > hanging[0] + 0.3
    assert hand_positions(**{f"{side}_wrist_pitch": -1.0})[side][0] > hanging[0] + 0.08
    assert hand_positions(**{f"{side}_shoulder_roll": 0.2})[side][1] > hanging[1] + 0.1
    bent = {f"{side}_elbow_pitch": -1.5}
    assert hand_positions(**bent, **{f"{side}_upper_arm_yaw": 0.5})[side][1] > hand_positions(**bent)[side][1] + 0.1


@pytest.mark.parametrize("side", ["left", "right"])
def test_hand_frame(side: str) -> None:
    """A hanging hand's axes are the body's, z up along the forearm, its origin 0.67 m below the shoulder."""
    model = fixed_model()
    data = model.createData()
    pin.framesForwardKinematics(model, data, pin.neutral(model))
    hand = data.oMf[model.getFrameId(f"{side}_hand")]
    shoulder = data.oMi[model.getJointId(f"{side}_shoulder_pitch")]
    np.testing.assert_allclose(hand.rotation, np.eye(3), atol=1e-12)
    assert shoulder.translation[2] - hand.translation[2] == pytest.approx(0.30 + 0.27 + 0.10)


def test_imu_mounting() -> None:
    """The IMU sits 0.55 m up, a quarter turn to the left: a wrong mounting in use would swap roll and pitch."""
    model = fixed_model()
    data = model.createData()
    pin.framesForwardKinematics(model, data, pin.neutral(model))
    imu = data.oMf[model.getFrameId("imu_link")]
    assert imu.translation[2] == pytest.approx(0.55)
    np.testing.assert_allclose(imu.rotation @ [1.0, 0.0, 0.0], [0.0, 1.0, 0.0], atol=1e-9)


def test_body_stays_off_the_ball() -> None:
    """No collision shape of the body comes nearer than 5 mm to the ball that will be put under it."""
    spec = mujoco.MjSpec.from_file(str(URDF))
    spec.worldbody.add_geom(name="ball", type=mujoco.mjtGeom.mjGEOM_SPHERE, size=[0.115, 0.0, 0.0])
    model = spec.compile()
    data = mujoco.MjData(model)
    mujoco.mj_forward(model, data)
    ball = model.geom("ball").id
    shapes = [shape for shape in range(model.ngeom) if shape != ball]
    gaps = [mujoco.mj_geomDistance(model, data, ball, shape, 1.0, None) for shape in shapes]
    assert len(gaps) == sum(len(link.findall("collision")) for link in LINKS.values())
    assert min(gaps) > 0.005
