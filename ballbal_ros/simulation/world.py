"""The simulated world in MuJoCo: the URDF's body on a rolling ball on a floor.

``base_link`` floats freely, the ball turns about its origin by an exact ball joint, and the only contact is ball on
floor. The ball is a uniform sphere, so that its own orientation means nothing: the simulation sets it back to the
drive's axes after each step (see :class:`World`). Joint torques and rates of the ball joint are then in axes fixed in
the body, where the rotors' reflected inertia is constant, and so exact as the joint's armature.

The contact bears the robot and has friction; what else the floor does is in :mod:`~ballbal_ros.simulation.floor`. While
the ball rolls the contact is exact to microns; once it slips the ball bounces by microns, so that the floor's force is
right on average only.
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from collections.abc import Iterable

import attrs
import mujoco
import numpy as np

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.parameters import BallParameters
from ballbal_ros.simulation.parameters import SimulatedFloorParameters, SimulationParameters
from ballbal_ros.simulation.truth import WHERE, Truth

# A stiff, critically damped contact: the ball sinks in by microns and creeps by microns a second.
_SOLREF = [0.002, 1.0]
_SOLIMP = [0.99, 0.999, 1e-4, 0.5, 2.0]
_IMPRATIO = 100.0
_IMU, _BALL, _STAND, _FLOOR = "simulated_imu", "simulated_ball", "simulated_stand", "simulated_floor"


def set_options(spec: mujoco.MjSpec, physics_step: float) -> None:
    """Set step (s), gravity, integrator and contact solver as the simulated robot uses them."""
    option = spec.option
    option.timestep = physics_step
    option.gravity = [0.0, 0.0, -GRAVITY]
    option.integrator = mujoco.mjtIntegrator.mjINT_EULER
    option.cone = mujoco.mjtCone.mjCONE_ELLIPTIC
    option.impratio = _IMPRATIO
    option.tolerance = 1e-10
    option.jacobian = mujoco.mjtJacobian.mjJAC_SPARSE
    option.disableflags = int(mujoco.mjtDisableBit.mjDSBL_AUTORESET)


def make_ball(spec: mujoco.MjSpec, body: mujoco.MjsBody, ball: BallParameters, floor: SimulatedFloorParameters) -> None:
    """Make a body the ball: a uniform sphere about the body's origin. Adds the floor, and the one contact of both."""
    body.mass, body.inertia, body.ipos, body.explicitinertial = ball.mass, [ball.inertia] * 3, [0.0, 0.0, 0.0], True
    plane = spec.worldbody.add_geom(name=_FLOOR, type=mujoco.mjtGeom.mjGEOM_PLANE, size=[0.0, 0.0, 1.0])
    sphere = body.add_geom(name=_BALL, type=mujoco.mjtGeom.mjGEOM_SPHERE, size=[ball.radius, 0.0, 0.0], mass=0.0)
    for geom in (plane, sphere):
        geom.condim = 3
        geom.friction = [floor.friction, 0.0, 0.0]
        geom.solref, geom.solimp = _SOLREF, _SOLIMP


@attrs.frozen(eq=False)
class RigidBody:
    """Mass (kg), mass centre [3] (m) and inertia [3, 3] about it (kg m²), in the frame of the body it is part of."""

    mass: float
    center: Array
    inertia: Array

    @classmethod
    def of(cls, model: mujoco.MjModel, body: int) -> RigidBody:
        """What the model has for a body."""
        axes = np.zeros(9)
        mujoco.mju_quat2Mat(axes, model.body_iquat[body])
        turn = axes.reshape(3, 3)
        inertia = turn @ np.diag(model.body_inertia[body]) @ turn.T
        return cls(float(model.body_mass[body]), model.body_ipos[body].copy(), inertia)

    def __add__(self, other: RigidBody) -> RigidBody:
        mass = self.mass + other.mass
        center = (self.mass * self.center + other.mass * other.center) / mass
        inertia = self.inertia + other.inertia
        for part in (self, other):
            apart = part.center - center
            inertia = inertia + part.mass * (apart @ apart * np.eye(3) - np.outer(apart, apart))
        return RigidBody(mass, center, inertia)

    def put(self, model: mujoco.MjModel, body: int) -> None:
        """Give the model's body this mass, and bring up to date what follows from it."""
        principal, axes = np.linalg.eigh(self.inertia)
        axes[:, 2] *= np.sign(np.linalg.det(axes))
        model.body_mass[body] = self.mass
        model.body_ipos[body] = self.center
        model.body_inertia[body] = principal
        mujoco.mju_mat2Quat(model.body_iquat[body], axes.ravel())
        # MuJoCo takes short cuts where mass centre and frame are one; so it may have been for the hand alone.
        model.body_sameframe[body] = 0
        # This would also set the stand back to where the model was compiled.
        stand = model.eq_data.copy()
        mujoco.mj_setConst(model, mujoco.MjData(model))
        model.eq_data[:] = stand


def rotor_axes(reflected_inertia: Array) -> tuple[Array, Array]:
    """Principal axes of the rotors' reflected inertia: rotation [3, 3] to ``base_link`` and values [3], kg m²."""
    if np.allclose(reflected_inertia, np.diag(np.diag(reflected_inertia)), atol=1e-9):
        return np.eye(3), np.diag(reflected_inertia).copy()
    values, axes = np.linalg.eigh(reflected_inertia)
    axes[:, 2] *= np.sign(np.linalg.det(axes))
    return axes, np.maximum(values, 0.0)


@attrs.frozen(eq=False)
class World:
    """The compiled model with the indices that the simulation needs.

    ``arm_position``, ``arm_rate`` [n]: where the arm joints are in ``qpos`` and ``qvel``, in the description's order.
    ``ball``: the ball's body; ``rolling`` and ``ball_quat``: where the ball joint is in ``qvel`` and ``qpos``. Its
    rates and torques are in the drive's axes, ``rotation_drive_in_base``, as long as ``ball_quat`` is set to (1, 0,
    0, 0) after each step. ``bodies``: where the URDF's links are among the bodies.
    """

    model: mujoco.MjModel
    arm_position: Array
    arm_rate: Array
    ball: int
    rolling: slice
    ball_quat: slice
    rotation_drive_in_base: Array
    bodies: dict[str, int]
    _bare: dict[str, RigidBody]

    @classmethod
    def build(cls, description: RobotDescription, parameters: SimulationParameters, truth: Truth) -> World:
        """Compile the world; raises :class:`ModelError` where MuJoCo can't, or truth names what is not there."""
        mujoco.set_mju_user_warning(_keep_quiet)
        try:
            spec = mujoco.MjSpec.from_string(_bare_urdf(description.urdf_text))
            axes, armature = rotor_axes(description.drive.reflected_inertia)
            _assemble(spec, description, parameters, truth, axes)
            model = spec.compile()
        except (ValueError, mujoco.FatalError) as error:
            raise ModelError(description.urdf_path, f"MuJoCo can't simulate it: {error}", "mend the URDF") from error
        joints = [model.joint(name) for name in description.joint_names]
        rolling, ball_quat = int(model.joint(_BALL).dofadr[0]), int(model.joint(_BALL).qposadr[0])
        model.dof_armature[rolling : rolling + 3] = armature
        links = [model.body(index).name for index in range(1, model.nbody)]
        bodies = {link: index for index, link in enumerate(links, start=1) if link != _BALL}
        world = cls(
            model=model,
            arm_position=read_only(np.array([joint.qposadr[0] for joint in joints])),
            arm_rate=read_only(np.array([joint.dofadr[0] for joint in joints])),
            ball=int(model.body(_BALL).id),
            rolling=slice(rolling, rolling + 3),
            ball_quat=slice(ball_quat, ball_quat + 4),
            rotation_drive_in_base=read_only(axes),
            bodies=bodies,
            bare={hand: RigidBody.of(model, bodies[hand]) for hand in description.parameters.hands.links},
        )
        mujoco.mj_setConst(model, mujoco.MjData(model))
        return world

    @property
    def base(self) -> int:
        """The body of ``base_link``."""
        return self.bodies["base_link"]

    @property
    def mass(self) -> float:
        """Mass of all, ball and loads included, kg."""
        return float(self.model.body_mass.sum())

    def set_load(self, load: Load) -> None:
        """Put a load truly into a hand, in place of what it held; kg, m, kg m²."""
        held = self._bare[load.hand]
        if load.mass > 0.0:
            held = held + RigidBody(load.mass, load.center, load.inertia)
        held.put(self.model, self.bodies[load.hand])

    def hold(self, data: mujoco.MjData) -> None:
        """Make the stand hold ``base_link`` where it is."""
        weld = self.model.eq_data[0]
        weld[:3] = 0.0
        weld[3:10] = data.qpos[:7]
        weld[10] = 1.0
        data.eq_active[0] = 1


def _keep_quiet(message: str) -> None:
    """Keep MuJoCo from writing a log file into the working directory; ``data.warning`` counts its warnings."""


def _bare_urdf(text: str) -> str:
    """The URDF with its masses and joints alone: no shapes, so that no mesh is looked for and no bodies touch."""
    root = ElementTree.fromstring(text)
    for link in root.iter("link"):
        for tag in ("visual", "collision"):
            for element in link.findall(tag):
                link.remove(element)
    for tag in ("material", "mujoco", "gazebo", "transmission"):
        for element in root.findall(tag):
            root.remove(element)
    return ElementTree.tostring(root, encoding="unicode")


def _assemble(
    spec: mujoco.MjSpec, description: RobotDescription, parameters: SimulationParameters, truth: Truth, axes: Array
) -> None:
    set_options(spec, parameters.physics_step)
    # Fixed links stay bodies of their own (MuJoCo 3.3 misplaces masses when it fuses several into one).
    spec.compiler.fusestatic = False
    robot, base = description.parameters, spec.body("base_link")
    base.add_freejoint(name="simulated_body")
    quat_wxyz = np.zeros(4)
    mujoco.mju_mat2Quat(quat_wxyz, axes.ravel())
    ball = base.add_body(name=_BALL, quat=quat_wxyz)
    ball.add_joint(name=_BALL, type=mujoco.mjtJoint.mjJNT_BALL)
    make_ball(spec, ball, robot.ball, parameters.floor)
    _falsify_masses(spec, truth)
    _add_imu(spec, base, description, truth)
    weld = spec.add_equality(
        name=_STAND, type=mujoco.mjtEq.mjEQ_WELD, objtype=mujoco.mjtObj.mjOBJ_BODY, name1="world", name2="base_link"
    )
    weld.solref, weld.solimp = _SOLREF, _SOLIMP
    weld.active = False


def _falsify_masses(spec: mujoco.MjSpec, truth: Truth) -> None:
    for link in {*truth.mass_factor, *truth.center}:
        body = spec.body(link)
        if body is None or not body.mass > 0.0:
            what = f"{link} is no link with a mass"
            raise ModelError(WHERE, what, "name a link of the URDF that has an inertial part")
        factor = truth.mass_factor.get(link, 1.0)
        body.mass *= factor
        body.inertia = body.inertia * factor
        body.fullinertia = body.fullinertia * factor
        body.ipos = body.ipos + np.array(truth.center.get(link, (0.0, 0.0, 0.0)))


def _add_imu(spec: mujoco.MjSpec, base: mujoco.MjsBody, description: RobotDescription, truth: Truth) -> None:
    tilt = rotation_lean(np.array(truth.imu_tilt))
    quat_wxyz = np.zeros(4)
    mujoco.mju_mat2Quat(quat_wxyz, (tilt @ description.rotation_imu_in_base).ravel())
    base.add_site(name=_IMU, pos=description.parameters.imu.position, quat=quat_wxyz)
    kinds: Iterable[mujoco.mjtSensor] = (
        mujoco.mjtSensor.mjSENS_GYRO,
        mujoco.mjtSensor.mjSENS_ACCELEROMETER,
        mujoco.mjtSensor.mjSENS_FRAMEQUAT,
    )
    for kind in kinds:
        spec.add_sensor(name=f"simulated_imu_{kind.value}", type=kind, objtype=mujoco.mjtObj.mjOBJ_SITE, objname=_IMU)
