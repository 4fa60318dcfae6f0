"""The robot as described: robot.yaml and its URDF, read, checked, and made into one read-only object."""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from pathlib import Path

import attrs
import numpy as np
import pinocchio as pin

from ballbal_ros.declaration import load
from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.attitude import rotation_lean, rotation_rpy
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.drive import Drive
from ballbal_ros.robot.loads import check_inertia
from ballbal_ros.robot.mass_model import weighed_urdf
from ballbal_ros.robot.parameters import ArmParameters, MassModelParameters, RobotParameters

MOVING = ("revolute", "prismatic", "continuous")


@attrs.frozen(eq=False)
class RobotDescription:
    """What the robot is; everything in it has been checked.

    Joint arrays are in ``joint_names``' order (the model's, depth first). ``urdf_text`` has the masses of
    ``mass_model`` in it, ``drawn_urdf_text`` those of the file. ``servo_bandwidth`` [n] in rad/s.
    """

    parameters: RobotParameters
    urdf_path: str
    urdf_text: str
    drawn_urdf_text: str
    model: pin.Model
    drive: Drive
    joint_names: tuple[str, ...]
    position_low: Array
    position_high: Array
    velocity_limit: Array
    effort_limit: Array
    rotation_imu_in_base: Array
    servo_bandwidth: Array

    @property
    def name(self) -> str:
        """The robot's name."""
        return self.parameters.name

    @property
    def joint_count(self) -> int:
        """How many arm joints there are."""
        return len(self.joint_names)

    @property
    def ball_apparent_mass(self) -> float:
        """m_b + I_b / r², kg: what the rolling ball adds to x and y."""
        ball = self.parameters.ball
        return ball.mass + ball.inertia / ball.radius**2

    @classmethod
    def load(cls, folder: Path) -> RobotDescription:
        """Read ``robot.yaml`` in a robot's folder and the URDF it names; raises a :class:`BallbalError` in one line."""
        path = Path(folder)
        file = path / "robot.yaml" if path.is_dir() else path
        parameters = load(RobotParameters, file)
        return cls.from_parameters(parameters, file)

    @classmethod
    def from_parameters(cls, parameters: RobotParameters, file: Path) -> RobotDescription:
        """Make the description from checked parameters; the URDF is looked for beside ``file``."""
        urdf = file.parent / parameters.urdf
        try:
            text = urdf.read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            raise ModelError(
                str(file), f"urdf is {parameters.urdf}, which can't be read", f"put the URDF at {urdf}"
            ) from error
        return cls.from_urdf(parameters, text, str(urdf), str(file))

    @classmethod
    def from_urdf(cls, parameters: RobotParameters, urdf_text: str, urdf: str, file: str) -> RobotDescription:
        """Make the description from checked parameters and a URDF's text; ``urdf`` and ``file`` name them in errors."""
        drawn = checked_urdf(urdf_text, urdf)
        text = weighed_urdf(drawn, parameters.mass_model, file)
        try:
            model = pin.buildModelFromXML(text, pin.JointModelFreeFlyer())
        except Exception as error:
            raise ModelError(urdf, f"is no URDF that makes a robot: {error}", "mend the URDF") from error
        model.gravity.linear = np.array([0.0, 0.0, -GRAVITY])
        _check_links(parameters, model, urdf, file)
        ball = parameters.ball
        if ball.inertia > 2.0 / 3.0 * ball.mass * ball.radius**2 * 1.001:
            most = 2.0 / 3.0 * ball.mass * ball.radius**2
            raise ModelError(
                file,
                f"ball.inertia is {ball.inertia:g} kg m²",
                f"a ball of this mass has at most {most:.4g} (a thin shell)",
            )
        return cls(
            parameters=parameters,
            urdf_path=urdf,
            urdf_text=text,
            drawn_urdf_text=drawn,
            model=model,
            drive=Drive.from_parameters(parameters.drive, parameters.ball.radius, file),
            joint_names=tuple(model.names)[2:],
            position_low=read_only(np.array(model.lowerPositionLimit[7:], float)),
            position_high=read_only(np.array(model.upperPositionLimit[7:], float)),
            velocity_limit=read_only(np.array(model.velocityLimit[6:], float)),
            effort_limit=read_only(np.array(model.effortLimit[6:], float)),
            rotation_imu_in_base=read_only(
                rotation_lean(np.array(parameters.mass_model.imu_tilt)) @ rotation_rpy(np.array(parameters.imu.rpy))
            ),
            servo_bandwidth=read_only(_servo_bandwidth(parameters.arm, tuple(model.names)[2:], file)),
        )

    def with_mass_model(self, mass_model: MassModelParameters, file: str = "robot.yaml") -> RobotDescription:
        """The same robot with other findings of weighing laid over its URDF; raises :class:`ModelError`."""
        parameters = attrs.evolve(self.parameters, mass_model=mass_model)
        return self.from_urdf(parameters, self.drawn_urdf_text, self.urdf_path, file)

    def as_drawn(self) -> RobotDescription:
        """The same robot as its URDF and imu.rpy say, without what weighing has found."""
        return self.with_mass_model(MassModelParameters(link={}, spread=self.parameters.mass_model.spread))

    def joint_index(self, name: str, where: str) -> int:
        """The index of an arm joint; raises :class:`ModelError` with the known names for one that is not there."""
        try:
            return self.joint_names.index(name)
        except ValueError as error:
            raise ModelError(where, f"unknown joint {name}", nearest(name, self.joint_names)) from error


def _servo_bandwidth(arm: ArmParameters, joints: tuple[str, ...], file: str) -> Array:
    for name in arm.joints:
        if name not in joints:
            raise ModelError(file, f"arm.joints names {name}, which is no joint of the URDF", nearest(name, joints))
    own = arm.joint
    return np.array([own[name].bandwidth if name in own else arm.servo_bandwidth for name in joints], float)


def checked_urdf(text: str, urdf: str) -> str:
    """Check a URDF's joints, masses and inertias link by link, and return it with continuous joints as unlimited
    revolute ones.

    Raises :class:`ModelError` that names the link or joint. (A continuous joint would be a pair of numbers in
    Pinocchio.)
    """
    try:
        root = ElementTree.fromstring(text)
    except ElementTree.ParseError as error:
        raise ModelError(urdf, f"is no XML: {error}", "mend the URDF") from error
    if root.tag != "robot":
        raise ModelError(urdf, f"has the root element <{root.tag}>", "a URDF's root element is <robot>")
    links = {link.get("name", "") for link in root.findall("link")}
    if "base_link" not in links:
        raise ModelError(urdf, "has no link base_link", "name the link whose origin is the ball's centre base_link")
    for link in root.findall("link"):
        _check_link(link, urdf)
    for joint in root.findall("joint"):
        _check_joint(joint, links, urdf)
    children = {child.get("link") for child in root.findall("joint/child")}
    roots = sorted(links - {name for name in children if name})
    if roots != ["base_link"]:
        raise ModelError(urdf, f"has the root links {', '.join(roots)}", "the one root link is base_link")
    return ElementTree.tostring(root, encoding="unicode")


def _numbers(element: ElementTree.Element | None, key: str, urdf: str, owner: str) -> float:
    text = None if element is None else element.get(key)
    try:
        value = float(text if text is not None else "nan")
    except ValueError:
        value = float("nan")
    if not np.isfinite(value):
        raise ModelError(urdf, f"{owner}: {key} is {text!r}", "it takes a finite number")
    return value


def _check_link(link: ElementTree.Element, urdf: str) -> None:
    inertial = link.find("inertial")
    if inertial is None:
        return
    owner = f"link {link.get('name')}"
    mass = _numbers(inertial.find("mass"), "value", urdf, f"{owner}: mass")
    keys = ("ixx", "ixy", "ixz", "iyy", "iyz", "izz")
    xx, xy, xz, yy, yz, zz = (_numbers(inertial.find("inertia"), key, urdf, f"{owner}: inertia") for key in keys)
    inertia = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    # Without any inertia it is a point, or without mass a mere frame: many URDFs have them.
    point = not inertia.any()
    if mass < 0.0 or (mass == 0.0 and not point):
        raise ModelError(urdf, f"{owner}: mass is {mass:g} kg", "a link with an inertial part has a positive mass")
    check_inertia(inertia, urdf, f"{owner}: inertia", point_allowed=point)


def _check_joint(joint: ElementTree.Element, links: set[str], urdf: str) -> None:
    name, kind = joint.get("name", ""), joint.get("type")
    if kind != "fixed" and kind not in MOVING:
        raise ModelError(urdf, f"joint {name} has the type {kind}", f"it takes fixed, {', '.join(MOVING)}")
    if joint.find("mimic") is not None:
        raise ModelError(
            urdf, f"joint {name} mimics another", "this program takes independent joints only: fix it in the URDF"
        )
    for role in ("parent", "child"):
        element = joint.find(role)
        link = "" if element is None else element.get("link", "")
        if link not in links:
            raise ModelError(urdf, f"joint {name}: {role} link {link!r} is not there", nearest(link, links))
    if kind == "fixed":
        return
    limit = joint.find("limit")
    if limit is None:
        raise ModelError(urdf, f"joint {name} has no <limit>", "give lower, upper, velocity and effort")
    for key in ("velocity", "effort"):
        if _numbers(limit, key, urdf, f"joint {name}: limit") <= 0.0:
            raise ModelError(urdf, f"joint {name}: limit {key} is {limit.get(key)}", "it takes a positive number")
    if kind == "continuous":
        joint.set("type", "revolute")
        limit.set("lower", "-1e6")
        limit.set("upper", "1e6")
    elif _numbers(limit, "lower", urdf, f"joint {name}: limit") >= _numbers(
        limit, "upper", urdf, f"joint {name}: limit"
    ):
        raise ModelError(
            urdf, f"joint {name}: lower {limit.get('lower')} ≥ upper {limit.get('upper')}", "give lower < upper"
        )


def _check_links(parameters: RobotParameters, model: pin.Model, urdf: str, file: str) -> None:
    frames = {frame.name for frame in model.frames if frame.type == pin.FrameType.BODY}
    for hand in parameters.hands.links:
        if hand not in frames:
            raise ModelError(file, f"hands.links names {hand}, which is no link of {urdf}", nearest(hand, frames))
    if model.nq - 7 != model.nv - 6:
        raise ModelError(urdf, "has joints of more than one axis", "use revolute and prismatic joints")
    if model.inertias[1].mass <= 0.0:
        raise ModelError(urdf, "base_link and what is fixed to it have no mass", "give base_link an inertial part")
