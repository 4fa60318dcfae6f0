"""The simulated drive: delay, limits, dry friction and encoders of the actuators on the ball."""

from __future__ import annotations

import math
from collections import deque

import numpy as np

from ballbal_ros.errors import BallbalError, ParameterError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation import compiled
from ballbal_ros.simulation.parameters import SimulationParameters

_PRESLIDING_DAMPING = 0.7


def whole_steps(duration: float, physics_step: float, key: str) -> int:
    """How many physics steps (s each) a duration (s) is; raises :class:`ParameterError` unless it is a whole number."""
    steps = round(duration / physics_step)
    if abs(steps * physics_step - duration) > 1e-9:
        raise ParameterError(
            "simulation.yaml", f"{key} is {duration:g} s", f"it takes a multiple of physics_step, {physics_step:g} s"
        )
    return steps


class SimulatedDrive:
    """Commanded efforts [n] in, torque on the ball out; encoder angles [n] from the ball's rate relative to the body.

    Rates and torques [3] are in the drive's axes (see :class:`~ballbal_ros.simulation.world.World`). A command takes
    effect ``drive.delay`` after the tick at which it was given. An actuator beyond its rate limit gives no torque
    that would speed it up.

    Dry friction at each actuator is the bristle model (Canudas de Wit et al. 1995, IEEE TAC 40(3) 419, from memory;
    without its Stribeck and viscous terms): z' = v - |v| z / z_s, friction = σ z + σ_1 z', where z_s =
    ``drive.presliding`` and σ z_s is the stiction. σ_1 damps what swings on the bristles at 0.7 of critical. The step
    in z is implicit: stable at every rate.
    """

    def __init__(
        self, description: RobotDescription, parameters: SimulationParameters, rotation_drive_in_base: Array
    ) -> None:
        drive, step = description.drive, parameters.physics_step
        self._count = len(drive.names)
        steps = whole_steps(1.0 / parameters.loop_rate, step, "1 / loop_rate")
        whole, self.late_steps = divmod(whole_steps(parameters.drive.delay, step, "drive.delay"), steps)
        self._commands = deque([np.zeros(self._count)] * (whole + 2), maxlen=whole + 2)
        rate_map = drive.rate_map @ rotation_drive_in_base
        stiffness, damping = _bristles(description, parameters)
        self.presliding = parameters.drive.presliding
        # What `compiled` takes: a row for each actuator; angle, turn, bristle and friction of them all.
        scale = np.full(self._count, parameters.drive.torque_scale)
        columns = (
            rate_map * step,
            rate_map,
            drive.rate_limit * step,
            stiffness,
            damping / step,
            drive.effort_limit,
            scale,
        )
        self.actuators = np.column_stack(columns)
        self.state = np.zeros((4, self._count))
        self.torque_on_ball = np.zeros(3)

    @property
    def angle(self) -> Array:
        """What the encoders would count [n], had they no steps, rad."""
        return self.state[0]

    def command(self, effort: Array) -> None:
        """Take the command [n] of this tick, N m; raises :class:`BallbalError` unless it is n finite numbers."""
        given = effort.tolist()
        if len(given) != self._count or not math.isfinite(sum(given)):
            raise BallbalError("drive_effort", f"is {given}", f"it takes {self._count} finite efforts")
        self._commands.append(np.array(given))

    @property
    def efforts(self) -> tuple[Array, Array]:
        """Efforts [n], N m, of this tick's first :attr:`late_steps` physics steps, and of its others."""
        return self._commands[0], self._commands[1]

    def torque(self, step_in_tick: int) -> Array:
        """Torque [3] on the ball in this physics step of the tick, N m."""
        effort = self._commands[0 if step_in_tick < self.late_steps else 1]
        compiled.drive_torque(self.actuators, self.state, effort, self.torque_on_ball)
        return self.torque_on_ball.copy()

    def turn(self, x: float, y: float, z: float) -> None:
        """Take the ball's rate relative to the body (3 numbers) during the physics step just done, rad/s."""
        compiled.drive_turn(self.actuators, self.state, self.presliding, x, y, z)


def _bristles(description: RobotDescription, parameters: SimulationParameters) -> tuple[Array, Array]:
    """Stiffness σ (N m/rad) and damping σ_1 (N m s/rad) of each actuator's bristles; raises if the step is too long."""
    drive, step, presliding = description.drive, parameters.physics_step, parameters.drive.presliding
    stiffness = drive.stiction / presliding
    turning = np.eye(3) * description.parameters.ball.inertia + drive.reflected_inertia
    inertia = 1.0 / np.einsum("ij,jk,ik->i", drive.rate_map, np.linalg.inv(turning), drive.rate_map)
    stiffest = np.linalg.eigvalsh(drive.rate_map.T @ np.diag(stiffness) @ drive.rate_map)[-1]
    swing = math.sqrt(stiffest / np.linalg.eigvalsh(turning)[0])
    if swing * step > 0.5:
        raise ParameterError(
            "simulation.yaml",
            f"drive.presliding is {presliding:g} rad, too stiff for a physics_step of {step:g} s",
            f"it takes at least {presliding * (swing * step / 0.5) ** 2:.2g} rad",
        )
    return stiffness, 2.0 * _PRESLIDING_DAMPING * np.sqrt(stiffness * inertia)
