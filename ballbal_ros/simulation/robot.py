"""The simulated robot: the whole machine on its ball, stepped one loop period at a time."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable, Sequence

import mujoco
import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading, lean_and_heading_from_quat_xyzw, quat_xyzw, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation import compiled
from ballbal_ros.simulation.arms import ArmServo
from ballbal_ros.simulation.drive import SimulatedDrive, whole_steps
from ballbal_ros.simulation.floor import FloorMoments
from ballbal_ros.simulation.outside import OutsideForces
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.sensors import SimulatedSensors
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.simulation.world import World


class SimulatedRobot:
    """The robot of a description, as it would truly behave.

    It starts at rest on its stand (``support`` is true) at arm ``posture`` [n], heading 0, ball centre above odom's
    origin, at the equilibrium lean of the **model** with ``loads``, as its IMU shows it. ``truth`` says where the
    simulated robot differs from the model. All that is random comes from ``seed``: two runs with one seed and the same
    calls are the same to the bit.

    Order within a tick at time t: :meth:`measurement` is that of t; :meth:`step` takes the efforts that answer it and
    goes on to t + 1/loop_rate. Positions and forces are in ``odom``, SI units, rad. Once :attr:`fell` it stays as it
    lies.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: SimulationParameters,
        posture: Array,
        loads: Iterable[Load] = (),
        seed: int = 0,
        truth: Truth | None = None,
    ) -> None:
        self.truth = truth or Truth()
        self.parameters = self.truth.of_parameters(parameters)
        model = description
        description = self.description = description.as_drawn() if self.parameters.built == "as_drawn" else description
        step = self.parameters.physics_step
        self._steps = whole_steps(1.0 / self.parameters.loop_rate, step, "1 / loop_rate")
        self.world = World.build(description, self.parameters, self.truth)
        self._model, self.data = self.world.model, mujoco.MjData(self.world.model)
        held = list(loads)
        for load in held:
            self._put(load)
        self._radius = description.parameters.ball.radius
        self._set_start(WholeBody(model, held), np.asarray(posture, float))
        self._drive = SimulatedDrive(description, self.parameters, self.world.rotation_drive_in_base)
        self._floor = FloorMoments(
            self.parameters, self._radius, description.parameters.ball.inertia, self.world.mass * GRAVITY
        )
        self._servo = ArmServo(description, self.parameters, self.world, self.data)
        self._tick, self._fell = 0, False
        self._outside = OutsideForces(self.world, self.data)
        whole, late = divmod(whole_steps(self.parameters.sensor_delay, step, "sensor_delay"), self._steps)
        self._find_views(self._steps - 1 - late)
        start = self._look()
        self._samples = deque([start] * (whole + 1), maxlen=whole + 1)
        self._sensors = SimulatedSensors(description, self.parameters, np.random.default_rng(seed), start)
        self._measurement = self._sensors.measure(0.0, start)

    def _find_views(self, look_after: int) -> None:
        """What MuJoCo has, and what is ours, as `compiled` takes it."""
        data, world, drive = self.data, self.world, self._drive
        self._qpos, self._qvel, self._qfrc_constraint = data.qpos, data.qvel, data.qfrc_constraint
        sensed, turning = data.sensordata, data.qacc[3:6]
        felt = sensed[3:6] * float(self._steps)
        half_step = np.array(0.5 * self._model.opt.timestep * self.description.rotation_imu_in_base.T, order="C")
        arms = np.array(world.arm_position, np.int64)
        self._sampled = 10 + len(drive.angle) + len(world.arm_position)
        self._looking = (
            sensed,
            felt,
            float(self._steps),
            turning,
            half_step,
            drive.state,
            data.qpos,
            arms,
        )
        at = self._steps, drive.late_steps, look_after, world.rolling.start, world.ball_quat.start
        sizes = np.array([drive.presliding, self._radius])
        self._before_efforts = (self._model._address, data._address, np.array(at), sizes)
        self._after_efforts = (
            drive.actuators,
            drive.state,
            drive.torque_on_ball,
            self._floor.values,
            data.xfrc_applied[world.ball, 3:6],
            data.qpos,
            data.qvel,
            data.qfrc_applied,
            data.qfrc_constraint,
            sensed,
            turning,
            data.xmat[world.base][6:9],
            np.array(world.rotation_drive_in_base, order="C"),
            half_step,
            felt,
            arms,
        )

    def _set_start(self, model_body: WholeBody, posture: Array) -> None:
        """Stand at the model's equilibrium lean as the IMU shows it, sunk into the floor just so far that it carries
        all.
        """
        roll, pitch = model_body.posture(posture).equilibrium_lean
        mounted = rotation_lean(np.array(self.truth.imu_tilt)) @ self.description.rotation_imu_in_base
        believed = model_body.description.rotation_imu_in_base
        if not np.array_equal(mounted, believed):
            wanted = rotation_lean(np.array((roll, pitch))) @ believed @ mounted.T
            roll, pitch, _ = lean_and_heading(wanted)
        x, y, z, w = quat_xyzw(roll, pitch, 0.0)
        data, radius = self.data, self.description.parameters.ball.radius
        data.qpos[3:7] = w, x, y, z
        data.qpos[self.world.arm_position] = posture
        weight, force = self.world.mass * GRAVITY, np.zeros(6)
        low, high = 0.0, 1e-3 * radius
        for _ in range(60):
            sunk = 0.5 * (low + high)
            data.qpos[2] = radius - sunk
            self.world.hold(data)
            mujoco.mj_forward(self._model, data)
            data.qfrc_applied[self.world.arm_rate] = data.qfrc_bias[self.world.arm_rate]
            mujoco.mj_forward(self._model, data)
            force[:] = 0.0
            if data.ncon:
                mujoco.mj_contactForce(self._model, data, 0, force)
            low, high = (sunk, high) if force[0] < weight else (low, sunk)

    def _put(self, load: Load) -> None:
        hands = self.description.parameters.hands.links
        if load.hand not in hands:
            raise ModelError("load", f"unknown hand {load.hand}", nearest(load.hand, hands))
        true = self.truth.of_load(load)
        true.check("load")
        self.world.set_load(true)

    def _look(self) -> Array:
        sample = np.empty(self._sampled)
        compiled.look(*self._looking, sample)
        return sample

    def measurement(self) -> Measurement:
        """What the sensors say now."""
        return self._measurement

    @property
    def drive_rate(self) -> Array:
        """Actuator rates [actuators] as the drive reports them beside its angles, rad/s."""
        return self._sensors.drive_rate

    def step(self, effort: Array) -> None:
        """Go on by one loop period with these efforts [actuators], N m; raises :class:`BallbalError` unless finite."""
        self._drive.command(effort)
        if not self._fell:
            self._servo.act(self._tick)
            self._move()
        self._tick += 1
        self._measurement = self._sensors.measure(self._tick / self.parameters.loop_rate, self._samples[0])

    def _move(self) -> None:
        if self._outside.there:
            self._outside.apply()
        sample = np.empty(self._sampled)
        stands = compiled.go_on(*self._before_efforts, *self._drive.efforts, *self._after_efforts, sample)
        self._samples.append(sample)
        self._fell = not stands

    def command_arms(self, path: JointPath, start: float) -> None:
        """Have the arms follow a path from time ``start`` (s; at once where that is past) on; its end is held."""
        self._servo.command(path, start, self._tick)

    def push(self, link: str, at: Sequence[float], force: Sequence[float]) -> None:
        """Push with a force [3], N in ``odom``, on the point ``at`` [3], m in the link, until :meth:`release_push`."""
        self._outside.push(link, at, force)

    def release_push(self) -> None:
        """End the push."""
        self._outside.release_push()

    def pull(self, hand: str, force: Array, moment: Array) -> None:
        """Exert a force [3], N, and a moment [3], N m, ``base_footprint`` axes, at a hand's origin until told else."""
        self._outside.pull(hand, force, moment)

    def set_load(self, load: Load) -> None:
        """Put a load into a hand now, in place of what it held; ``truth`` decides what is truly there. Mass 0: none."""
        self._put(load)
        mujoco.mj_step1(self._model, self.data)

    @property
    def support(self) -> bool:
        """Whether the stand holds the body; when it takes hold, it does so where the body is."""
        return bool(self.data.eq_active[0])

    @support.setter
    def support(self, holds: bool) -> None:
        """Have the stand take hold, or let go."""
        if holds and not self.support:
            self.world.hold(self.data)
        elif not holds:
            self.data.eq_active[0] = 0
        mujoco.mj_step1(self._model, self.data)

    def hang(self, height: float) -> None:
        """Hang it up from its stand, the ball ``height`` m clear of the floor and free to turn in its cage."""
        self._floor.clear()
        self.data.qpos[2] += height
        self.world.hold(self.data)
        mujoco.mj_step1(self._model, self.data)

    @property
    def time(self) -> float:
        """Now, s since the start."""
        return self._tick / self.parameters.loop_rate

    @property
    def fell(self) -> bool:
        """Whether it has fallen: the body was more than 45° from upright, or the ball off the floor by its radius."""
        return self._fell

    @property
    def ball_position(self) -> Array:
        """The ball's centre [3], m."""
        return self._qpos[:3].copy()

    @property
    def ball_velocity(self) -> Array:
        """Velocity of the ball's centre [3], m/s."""
        return self._qvel[:3].copy()

    @property
    def body_quat_xyzw(self) -> tuple[float, float, float, float]:
        """Orientation of ``base_link``."""
        w, x, y, z = self._qpos[3:7].tolist()
        return x, y, z, w

    @property
    def body_rate(self) -> Array:
        """Rate [3] of ``base_link``, rad/s, in its own axes."""
        return self._qvel[3:6].copy()

    @property
    def lean(self) -> tuple[float, float]:
        """(roll, pitch) of the body, rad."""
        return lean_and_heading_from_quat_xyzw(*self.body_quat_xyzw)[:2]

    @property
    def heading(self) -> float:
        """Heading of the body, rad."""
        return lean_and_heading_from_quat_xyzw(*self.body_quat_xyzw)[2]

    @property
    def arm_position(self) -> Array:
        """True arm positions [n], rad."""
        return self._qpos[self.world.arm_position]

    @property
    def arm_rate(self) -> Array:
        """True arm rates [n], rad/s."""
        return self._qvel[self.world.arm_rate]

    @property
    def drive_torque(self) -> Array:
        """Torque [3] of the actuators on the body, less friction, in ``base_link``, N m, in the last physics step."""
        return -self.world.rotation_drive_in_base @ self._drive.torque_on_ball

    @property
    def floor_force(self) -> Array:
        """Force [3] of floor (and stand) on the robot in the last physics step, N."""
        return self._qfrc_constraint[:3].copy()

    @property
    def friction_use(self) -> float:
        """Share of the floor's friction that the last physics step used: tangential over normal force over friction."""
        x, y, z = self._qfrc_constraint[:3].tolist()
        return math.hypot(x, y) / (self.parameters.floor.friction * z) if z > 0.0 else 0.0
