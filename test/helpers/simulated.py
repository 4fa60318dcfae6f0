"""The simulated demo robot, as the tests of the simulation want it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from functools import cache
from typing import Any

import attrs
import mujoco
import numpy as np

from ballbal_ros.declaration import build, flatten, load
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw, quat_xyzw
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.simulation.world import World
from helpers.robots import CONFIG, reach, shelver

NO_EFFORT = np.zeros(3)
NO_LOSS = {"floor.rolling_resistance": 0.0, "floor.torsion": 0.0}
NO_NOISE = {
    "imu.gyro_noise": 0.0,
    "imu.gyro_walk": 0.0,
    "imu.gyro_bias": 0.0,
    "imu.accelerometer_noise": 0.0,
    "imu.attitude_noise": 0.0,
}


@cache
def _from_file() -> SimulationParameters:
    return load(SimulationParameters, CONFIG / "shelver" / "simulation.yaml")


def simulation(changes: dict[str, Any] | None = None) -> SimulationParameters:
    """simulation.yaml of the demo robot, with some values changed."""
    return build(SimulationParameters, {**flatten(_from_file()), **(changes or {})}, "test")


def robot(
    changes: dict[str, Any] | None = None,
    posture: Array | None = None,
    loads: Sequence[Load] | None = None,
    seed: int = 0,
    truth: Truth | None = None,
    description: RobotDescription | None = None,
) -> SimulatedRobot:
    """The simulated demo robot; posture and loads are those of `reach` unless others are given."""
    first = reach().first if posture is None else posture
    held = reach().loads if loads is None else loads
    return SimulatedRobot(description or shelver(), simulation(changes), first, held, seed, truth)


def without_stiction() -> RobotDescription:
    """The demo robot with drives that have no dry friction."""
    drive = attrs.evolve(shelver().drive, stiction=np.zeros(3))
    return attrs.evolve(shelver(), drive=drive)


@attrs.frozen
class Moment:
    """A state of the bare world and the accelerations in it: qpos, qvel, qacc as MuJoCo has them before a step."""

    qpos: Array
    qvel: Array
    qacc: Array


def moving(
    world: World, generator: np.random.Generator, steps: int, arm_torque: Array, ball_torque: Array
) -> Iterator[Moment]:
    """The world on from a random moving state without slip, heading 0.8; arms and ball under constant torques."""
    model, data = world.model, mujoco.MjData(world.model)
    radius = shelver().parameters.ball.radius
    roll, pitch = generator.uniform(-0.25, 0.25, 2)
    x, y, z, w = quat_xyzw(roll, pitch, 0.8)
    data.qpos[:7] = 0.3, -0.2, radius - 1e-6, w, x, y, z
    data.qpos[world.arm_position] = generator.uniform(-0.8, 0.0, len(world.arm_position))
    data.qvel[world.arm_rate] = generator.normal(size=len(world.arm_rate))
    data.qvel[3:6] = 0.4 * generator.normal(size=3)
    ball_rate = 2.0 * generator.normal(size=3)
    data.qvel[0:2] = radius * ball_rate[1], -radius * ball_rate[0]
    turn = np.zeros(9)
    mujoco.mju_quat2Mat(turn, data.qpos[3:7])
    in_base = turn.reshape(3, 3).T @ ball_rate
    data.qvel[world.rolling] = world.rotation_drive_in_base.T @ (in_base - data.qvel[3:6])
    data.qfrc_applied[world.arm_rate] = arm_torque
    data.qfrc_applied[world.rolling] = ball_torque
    mujoco.mj_step1(model, data)
    for _ in range(steps):
        qpos, qvel = data.qpos.copy(), data.qvel.copy()
        mujoco.mj_step2(model, data)
        yield Moment(qpos, qvel, data.qacc.copy())
        data.qpos[world.ball_quat] = 1.0, 0.0, 0.0, 0.0
        mujoco.mj_step1(model, data)


def lean_and_heading(qpos: Array) -> tuple[Array, float]:
    """Lean [2] and heading of the body in a state of the world, rad."""
    w, x, y, z = qpos[3:7].tolist()
    roll, pitch, heading = lean_and_heading_from_quat_xyzw(x, y, z, w)
    return np.array([roll, pitch]), heading
