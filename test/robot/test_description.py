"""A robot that can't be is refused in one line that names file, link or joint, what was found and what would do."""

import xml.etree.ElementTree as ElementTree
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from ballbal_ros.declaration import build, flatten
from ballbal_ros.errors import BallbalError, ModelError
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import CONFIG, shelver

Element = ElementTree.Element


def describe(change: Callable[[Element], None] = lambda root: None, **parameters: object) -> RobotDescription:
    """The demo robot with its URDF changed by `change` and parameters (`drive__back__push=…`) replaced."""
    root = ElementTree.fromstring(shelver().urdf_text)
    change(root)
    flat = {**flatten(shelver().parameters), **{key.replace("__", "."): value for key, value in parameters.items()}}
    built = build(RobotParameters, flat, "robot.yaml")
    return RobotDescription.from_urdf(built, ElementTree.tostring(root, encoding="unicode"), "body.urdf", "robot.yaml")


def refusal(change: Callable[[Element], None] = lambda root: None, **parameters: object) -> str:
    """What the changed demo robot is refused with, in one line."""
    with pytest.raises(BallbalError) as caught:
        describe(change, **parameters)
    line = str(caught.value)
    assert "\n" not in line
    return line


def part(root: Element, path: str) -> Element:
    found = root.find(path)
    assert found is not None, path
    return found


def joint(root: Element, name: str = "left_elbow_pitch") -> Element:
    return part(root, f"joint[@name='{name}']")


def set_on(path: str, **values: str) -> Callable[[Element], None]:
    """Set attributes of the element at `path`."""

    def change(root: Element) -> None:
        for key, value in values.items():
            part(root, path).set(key, value)

    return change


def take_off(path: str, tag: str) -> Callable[[Element], None]:
    """Remove a child of the element at `path`."""
    return lambda root: part(root, path).remove(part(part(root, path), tag))


def add(path: str, xml: str) -> Callable[[Element], None]:
    """Append a child to the element at `path`."""
    return lambda root: part(root, path).append(ElementTree.fromstring(xml))


ELBOW = "joint[@name='left_elbow_pitch']"
HAND = "link[@name='left_hand']"


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (set_on(f"{HAND}/inertial/mass", value="-1.5"), ("body.urdf", "left_hand", "-1.5 kg", "positive")),
        (set_on(f"{HAND}/inertial/mass", value="0"), ("left_hand", "mass is 0 kg")),
        (set_on(f"{HAND}/inertial/mass", value="nan"), ("left_hand", "mass", "'nan'", "finite")),
        (set_on(f"{HAND}/inertial/mass", value="heavy"), ("left_hand", "mass", "'heavy'", "finite")),
        (take_off(f"{HAND}/inertial", "mass"), ("left_hand", "mass", "None")),
        (set_on(f"{HAND}/inertial/inertia", ixx="1.0"), ("left_hand", "no possible body", "sum")),
        (set_on(f"{HAND}/inertial/inertia", izz="-1e-4"), ("left_hand", "principal value", "positive")),
        (set_on(f"{HAND}/inertial/inertia", ixy="inf"), ("left_hand", "ixy", "finite")),
        (take_off(f"{HAND}/inertial", "inertia"), ("left_hand", "inertia", "ixx")),
        (set_on(f"{ELBOW}/parent", link="left_fore"), ("left_elbow_pitch", "parent link 'left_fore'", "did you mean")),
        (take_off(ELBOW, "child"), ("left_elbow_pitch", "child link ''")),
        (take_off(ELBOW, "limit"), ("left_elbow_pitch", "no <limit>", "velocity")),
        (set_on(f"{ELBOW}/limit", lower="1.0", upper="-1.0"), ("left_elbow_pitch", "lower 1.0", "upper -1.0")),
        (set_on(f"{ELBOW}/limit", velocity="0"), ("left_elbow_pitch", "velocity is 0", "positive")),
        (set_on(f"{ELBOW}/limit", effort="nan"), ("left_elbow_pitch", "effort", "finite")),
        (set_on(ELBOW, type="floating"), ("left_elbow_pitch", "floating", "revolute")),
        (set_on(ELBOW, type="planar"), ("left_elbow_pitch", "planar", "revolute")),
        (add(ELBOW, "<mimic joint='right_elbow_pitch'/>"), ("left_elbow_pitch", "mimics", "independent")),
        (add(".", "<link name='satellite'/>"), ("root links base_link, satellite", "base_link")),
        (set_on("link[@name='base_link']", name="body"), ("no link base_link", "ball's centre")),
    ],
)
def test_an_impossible_urdf_is_refused_by_link_or_joint(change: Callable[[Element], None], words: tuple[str, ...]):
    """Each impossible mass, inertia, joint or tree is refused with its name."""
    line = refusal(change)
    for word in words:
        assert word in line


def test_a_body_without_mass_is_refused():
    """base_link must have mass: nothing could balance without."""

    def hollow(root: Element) -> None:
        fixed = [part(j, "child").get("link") for j in root.findall("joint[@type='fixed']")]
        for name in ("base_link", *fixed):
            link = part(root, f"link[@name='{name}']")
            for inertial in link.findall("inertial"):
                link.remove(inertial)

    line = refusal(hollow)
    assert "base_link" in line
    assert "no mass" in line


def test_a_loop_of_links_is_refused():
    """Links that hang on each other instead of on base_link are no robot."""

    def loop(root: Element) -> None:
        elbow = part(root, f"{ELBOW}/child").get("link", "")
        part(joint(root, "left_shoulder_pitch"), "parent").set("link", elbow)

    assert "body.urdf" in refusal(loop)


def test_two_joints_of_one_name_are_refused():
    """A joint name that stands twice is refused."""
    line = refusal(set_on("joint[@name='right_elbow_pitch']", name="left_elbow_pitch"))
    assert "body.urdf" in line


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"hands__links": ["left_hnd"]}, ("robot.yaml", "left_hnd", "did you mean left_hand?")),
        ({"ball__inertia": 0.05}, ("robot.yaml", "ball.inertia is 0.05", "shell")),
        ({"drive__back__push": [0.0, -1.1, 0.0]}, ("robot.yaml", "drive.back.push", "1.1", "unit vector")),
        ({"drive__back__point": [0.0, 0.0, 0.0]}, ("drive.back.point", "unit vector")),
        ({"drive__back__push": [1.0, 0.0, 0.0]}, ("drive.back.push", "45.0°", "90°")),
        ({"ball__mass": -4.0}, ("robot.yaml", "ball.mass is -4 kg", "range")),
    ],
)
def test_impossible_parameters_are_refused_by_key(parameters: dict[str, object], words: tuple[str, ...]):
    """Hands that are not there, balls that can't be and contacts that don't push along it are refused by key."""
    line = refusal(**parameters)
    for word in words:
        assert word in line


@pytest.mark.parametrize("text", ["", "not xml", "<robot name='x'", "<sdf/>", "<robot name='x'/>"])
def test_what_is_no_urdf_is_refused(text: str):
    """Text that is no XML, no <robot>, or a robot without links is refused in one line that names the URDF."""
    with pytest.raises(ModelError) as caught:
        RobotDescription.from_urdf(shelver().parameters, text, "body.urdf", "robot.yaml")
    assert str(caught.value).startswith("body.urdf: ")
    assert "\n" not in str(caught.value)


def test_a_urdf_that_is_not_there_is_refused(tmp_path: Path):
    """A robot.yaml that names a URDF which is not there is refused with the place where it was looked for."""
    text = (CONFIG / "shelver" / "robot.yaml").read_text().replace("shelver.urdf", "gone.urdf")
    (tmp_path / "robot.yaml").write_text(text)
    with pytest.raises(ModelError, match=r"robot\.yaml: urdf is gone\.urdf.*" + str(tmp_path / "gone.urdf")):
        RobotDescription.load(tmp_path)


def test_continuous_joints_have_no_limits_and_take_one_number():
    """A continuous joint is one number like any other, without limits, and the mass centre comes back after a turn."""

    def continuous(root: Element) -> None:
        joint(root).set("type", "continuous")

    description = describe(continuous)
    index = description.joint_index("left_elbow_pitch", "test")
    assert description.joint_count == shelver().joint_count
    assert description.position_low[index] < -1e5
    assert description.position_high[index] > 1e5
    body, position = WholeBody(description), np.zeros(description.joint_count)
    before = body.center_of_mass(position).copy()
    position[index] = 2.0 * np.pi
    np.testing.assert_allclose(body.center_of_mass(position), before, atol=1e-12)


def test_links_inside_extensions_are_no_links():
    """What simulators and controllers write into a URDF, links and joints of their own included, is left alone."""
    extension = "<gazebo><model><link name='lamp'/><joint name='lamp_joint'/></model></gazebo>"
    assert describe(add(".", extension)).joint_names == shelver().joint_names


def test_frames_without_mass_and_point_masses_are_allowed():
    """A link without mass and inertia is a frame, one with mass alone a point: both weigh what they say."""
    inertia = "<inertia ixx='0' ixy='0' ixz='0' iyy='0' iyz='0' izz='0'/>"

    def tagged(mass: float) -> RobotDescription:
        def change(root: Element) -> None:
            link = f"<link name='tag'><inertial><mass value='{mass}'/>{inertia}</inertial></link>"
            root.append(ElementTree.fromstring(link))
            joint = "<joint name='tag_joint' type='fixed'><parent link='left_hand'/><child link='tag'/></joint>"
            root.append(ElementTree.fromstring(joint))

        return describe(change)

    bare = WholeBody(shelver()).mass
    assert WholeBody(tagged(0.0)).mass == pytest.approx(bare, abs=1e-12)
    assert WholeBody(tagged(0.2)).mass == pytest.approx(bare + 0.2, abs=1e-12)


def test_a_description_can_not_be_changed():
    """The description's arrays are read-only."""
    for array in (shelver().position_low, shelver().drive.rate_map, shelver().rotation_imu_in_base):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


def test_joint_limits_are_those_of_the_file():
    """Positions, velocities and efforts stand in the order of the joint names, as the URDF gives them."""
    root = ElementTree.parse(CONFIG / "shelver" / "shelver.urdf").getroot()
    for index, name in enumerate(shelver().joint_names):
        limit = {key: float(value) for key, value in part(root, f"joint[@name='{name}']/limit").attrib.items()}
        assert shelver().position_low[index] == limit["lower"]
        assert shelver().position_high[index] == limit["upper"]
        assert shelver().velocity_limit[index] == limit["velocity"]
        assert shelver().effort_limit[index] == limit["effort"]


def test_an_unknown_joint_is_named_with_the_one_meant():
    """Asking for a joint that is not there suggests the nearest name."""
    with pytest.raises(ModelError, match="plan: unknown joint left_elbow; did you mean left_elbow_pitch?"):
        shelver().joint_index("left_elbow", "plan")
