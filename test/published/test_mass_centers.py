"""Masses and mass centres of published robots come out of our own description and mass model.

Numbers: URDFs of the package example-robot-data 6.0.0, free-flyer, all joints at zero, recomputed with Pinocchio.
Neutral means zero here, so that a joint whose limits leave zero out counts as well.
"""

import importlib.metadata
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import attrs
import mujoco
import numpy as np
import pinocchio as pin
import pytest

from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import HandsParameters
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import shelver

# kg, m, in the root link's frame
PUBLISHED = {
    "talos_full_v2": (93.335724, (-0.020067, 0.000061, -0.137944)),
    "baxter": (137.332610, (0.090028, -0.000094, 0.107909)),
    "panda": (17.451901, (0.023221, 0.006107, 0.606224)),
    "ur5_robot": (20.9939, (0.287306, 0.064313, 0.071324)),
    "xarm7": (11.31706, (0.064869, 0.004194, 0.323104)),
}


def published_urdf(name: str) -> Path:
    """The URDF of this name in the installed package."""
    try:
        files = importlib.metadata.files("example-robot-data") or []
    except importlib.metadata.PackageNotFoundError:
        pytest.skip("needs the package example-robot-data")
    (found,) = (file for file in files if file.name == f"{name}.urdf")
    return Path(str(found.locate()))


def as_body(name: str) -> RobotDescription:
    """The published robot as the upper body of ours: its root link is base_link, and no joint mimics another."""
    root = ElementTree.parse(published_urdf(name)).getroot()
    children = {child.get("link") for child in root.findall("joint/child")}
    (first,) = (link.get("name") for link in root.findall("link") if link.get("name") not in children)
    renamed = {"base_link": "second_base_link", first: "base_link"} if first != "base_link" else {}
    for link in root.findall("link"):
        link.set("name", renamed.get(link.get("name"), link.get("name")))
        for shown in link.findall("visual") + link.findall("collision"):
            link.remove(shown)
    for joint in root.findall("joint"):
        for mimic in joint.findall("mimic"):
            joint.remove(mimic)
        for end in joint.findall("parent") + joint.findall("child"):
            end.set("link", renamed.get(end.get("link"), end.get("link")))
    hands = HandsParameters(links=["base_link"], load_limit=1.0)
    parameters = attrs.evolve(shelver().parameters, name=name, hands=hands)
    text = ElementTree.tostring(root, encoding="unicode")
    return RobotDescription.from_urdf(parameters, text, f"{name}.urdf", "robot.yaml")


@pytest.mark.parametrize("name", PUBLISHED)
def test_mass_and_mass_centre_are_those_published(name: str):
    """Mass and mass centre at zero joints are the published robot's, to the last digit given."""
    description = as_body(name)
    posture = WholeBody(description).posture(np.zeros(description.joint_count))
    mass, center = PUBLISHED[name]
    assert posture.mass == pytest.approx(mass, abs=1e-6)
    np.testing.assert_allclose(posture.center, center, atol=1e-6)


@pytest.mark.parametrize("name", PUBLISHED)
def test_mujoco_agrees_at_random_joints(name: str):
    """At random joint positions the mass centre is the one that MuJoCo finds for the same URDF."""
    description = as_body(name)
    spec = mujoco.MjSpec.from_string(description.urdf_text)
    spec.compiler.fusestatic = False
    spec.compiler.balanceinertia = True
    model = spec.compile()
    data = mujoco.MjData(model)
    body, rng = WholeBody(description), np.random.default_rng(12)
    for _ in range(3):
        position = rng.uniform(-1.0, 1.0, description.joint_count)
        for joint, value in zip(description.joint_names, position, strict=True):
            data.qpos[model.jnt_qposadr[model.joint(joint).id]] = value
        mujoco.mj_kinematics(model, data)
        mujoco.mj_comPos(model, data)
        expected = model.body_mass @ data.xipos / model.body_mass.sum()
        np.testing.assert_allclose(body.posture(position).center, expected, atol=1e-9)


def test_a_fixed_base_would_leave_the_root_out():
    """With a fixed base Pinocchio leaves the root link's mass out, which is why the body is a free-flyer here."""
    text = shelver().urdf_text
    fixed, free = pin.buildModelFromXML(text), shelver().model
    assert pin.computeTotalMass(fixed) < pin.computeTotalMass(free) - 10.0
    assert WholeBody(shelver()).mass == pytest.approx(pin.computeTotalMass(free))
