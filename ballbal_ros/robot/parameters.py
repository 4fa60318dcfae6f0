"""The parameters of robot.yaml: what the robot is."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter, section, sections


@attrs.frozen(kw_only=True)
class BallParameters:
    """The ball."""

    radius: float = parameter("double", unit="m", low=0.02, high=2.0, meaning="radius of the ball")
    mass: float = parameter("double", unit="kg", low=0.01, high=200.0, meaning="mass of the ball")
    inertia: float = parameter(
        "double", unit="kg m²", low=1e-6, high=100.0, meaning="inertia of the ball about any axis"
    )


@attrs.frozen(kw_only=True)
class FloorParameters:
    """What the floor under the ball gives; planning uses these."""

    friction: float = parameter(
        "double", 0.7, unit="-", low=0.01, high=3.0, meaning="friction of the ball on the floor"
    )
    torsion: float = parameter(
        "double",
        0.004,
        unit="m",
        low=0.0,
        high=0.5,
        meaning="greatest spin moment of the floor on the ball, per newton of load",
    )


@attrs.frozen(kw_only=True)
class ContactParameters:
    """One drive actuator that touches the ball in one point."""

    point: list[float] = parameter(
        "double_array", unit="-", length=3, meaning="unit direction from the ball's centre to the contact, in base_link"
    )
    push: list[float] = parameter(
        "double_array",
        unit="-",
        length=3,
        meaning="unit direction in which it pushes the ball when its rate is positive, in base_link",
    )
    effective_radius: float = parameter(
        "double", unit="m", low=1e-3, high=1.0, meaning="radius of the wheel over its gear ratio"
    )
    effort_limit: float = parameter("double", unit="N m", low=1e-3, high=1e3, meaning="greatest effort of the actuator")
    rate_limit: float = parameter("double", unit="rad/s", low=0.1, high=1e4, meaning="greatest rate of the actuator")
    rotor_inertia: float = parameter(
        "double", 0.0, unit="kg m²", low=0.0, high=1.0, meaning="inertia of wheel and rotor, at the actuator's rate"
    )
    stiction: float = parameter("double", 0.0, unit="N m", low=0.0, high=100.0, meaning="dry friction at the actuator")
    encoder_step: float = parameter(
        "double", 4.8e-5, unit="rad", low=0.0, high=0.1, meaning="one count of the encoder, at the actuator's angle"
    )


@attrs.frozen(kw_only=True)
class DriveParameters:
    """The drive: a list of contacts."""

    contacts: list[str] = parameter(
        "string_array", unit="-", meaning="names of the actuators, in the order of drive_effort"
    )
    contact: dict[str, ContactParameters] = sections(ContactParameters, named_by="contacts")


@attrs.frozen(kw_only=True)
class ImuParameters:
    """The IMU and how it is mounted."""

    frame: str = parameter("string", "imu_link", unit="-", meaning="frame_id that its messages carry")
    position: list[float] = parameter("double_array", unit="m", length=3, meaning="where it is, in base_link")
    rpy: list[float] = parameter(
        "double_array",
        [0.0, 0.0, 0.0],
        unit="rad",
        length=3,
        meaning="its rotation in base_link, fixed-axis roll, pitch, yaw",
    )
    rate_range: float = parameter(
        "double", 35.0, unit="rad/s", low=0.1, high=1e3, meaning="end of its rate gyros' range"
    )
    acceleration_range: float = parameter(
        "double", 150.0, unit="m/s²", low=10.0, high=1e4, meaning="end of its accelerometers' range"
    )


@attrs.frozen(kw_only=True)
class HandsParameters:
    """The hands."""

    links: list[str] = parameter("string_array", unit="-", meaning="URDF links that can hold a load")
    load_limit: float = parameter("double", unit="kg", low=0.0, high=500.0, meaning="greatest mass in one hand")


@attrs.frozen(kw_only=True)
class JointServoParameters:
    """One joint's servo."""

    bandwidth: float = parameter(
        "double", unit="rad/s", low=1.0, high=1000.0, meaning="bandwidth of this joint's servo"
    )


@attrs.frozen(kw_only=True)
class ArmParameters:
    """The arm servos: how a commanded motion becomes the motion that happens."""

    servo: str = parameter(
        "string",
        "ideal",
        unit="-",
        choices=("ideal", "position_velocity", "position"),
        meaning="what the joint servo follows: position, rate and acceleration; position and rate; position alone",
    )
    servo_bandwidth: float = parameter(
        "double", 80.0, unit="rad/s", low=1.0, high=1000.0, meaning="bandwidth of the critically damped joint servo"
    )
    joints: list[str] = parameter(
        "string_array", [], unit="-", meaning="joints whose servos have a bandwidth of their own"
    )
    joint: dict[str, JointServoParameters] = sections(JointServoParameters, named_by="joints")


@attrs.frozen(kw_only=True)
class LinkMassParameters:
    """What weighing has found of one link, in place of the URDF's."""

    mass: float = parameter("double", unit="kg", low=1e-6, high=1e3, meaning="mass of the link")
    center: list[float] = parameter("double_array", unit="m", length=3, meaning="its mass centre, in the link's axes")
    inertia: list[float] = parameter(
        "double_array",
        unit="kg m²",
        length=6,
        meaning="inertia about the mass centre in the link's axes: ixx, ixy, ixz, iyy, iyz, izz",
    )


@attrs.frozen(kw_only=True)
class SpreadParameters:
    """How far the URDF may be from the robot, as standard deviations: what weighing begins with."""

    mass: float = parameter(
        "double", 0.15, unit="-", low=1e-3, high=1.0, meaning="of a link's mass, as a share of the URDF's"
    )
    center: float = parameter(
        "double", 0.01, unit="m", low=1e-4, high=0.5, meaning="of each coordinate of a link's mass centre"
    )
    shape: float = parameter(
        "double", 0.1, unit="-", low=1e-3, high=1.0, meaning="of a link's radii of gyration, as a share of the URDF's"
    )
    imu_tilt: float = parameter(
        "double", 0.0175, unit="rad", low=1e-4, high=0.2, meaning="of the IMU's mounting, about x and about y"
    )


@attrs.frozen(kw_only=True)
class MassModelParameters:
    """What weighing has found, laid over the URDF; ``ballbal weigh-in`` writes it."""

    links: list[str] = parameter("string_array", [], unit="-", meaning="links whose masses are given here")
    link: dict[str, LinkMassParameters] = sections(LinkMassParameters, named_by="links")
    imu_tilt: list[float] = parameter(
        "double_array",
        [0.0, 0.0],
        unit="rad",
        length=2,
        meaning="(roll, pitch) about base_link's axes by which the IMU sits otherwise than imu.rpy says",
    )
    spread: SpreadParameters = section(SpreadParameters)


@attrs.frozen(kw_only=True)
class LimitParameters:
    """What the machine may be asked for."""

    lean: float = parameter("double", 0.35, unit="rad", low=0.01, high=1.2, meaning="greatest planned lean")
    drive_torque: float = parameter(
        "double", 40.0, unit="N m", low=0.1, high=1e3, meaning="greatest drive torque about any axis"
    )
    ball_speed: float = parameter("double", 1.5, unit="m/s", low=0.01, high=10.0, meaning="greatest speed of the ball")
    heading_rate: float = parameter(
        "double", 1.0, unit="rad/s", low=0.01, high=10.0, meaning="greatest rate of the heading that it is asked for"
    )


@attrs.frozen(kw_only=True)
class RobotParameters:
    """robot.yaml as a whole."""

    name: str = parameter("string", unit="-", meaning="the robot's name")
    urdf: str = parameter("string", unit="-", meaning="URDF file, beside robot.yaml or an absolute path")
    ball: BallParameters = section(BallParameters)
    floor: FloorParameters = section(FloorParameters)
    drive: DriveParameters = section(DriveParameters)
    imu: ImuParameters = section(ImuParameters)
    hands: HandsParameters = section(HandsParameters)
    arm: ArmParameters = section(ArmParameters)
    mass_model: MassModelParameters = section(MassModelParameters)
    limits: LimitParameters = section(LimitParameters)
