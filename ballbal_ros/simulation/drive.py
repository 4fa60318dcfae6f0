"""The simulated drive: delay, limits, dry friction and encoders of the actuators on the ball."""

from __future__ import annotations

import math
from collections import deque

import numpy as np

from ballbal_ros.errors import BallbalError, ParameterError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
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
        self._limit = drive.effort_limit.tolist()
        self._scale = parameters.drive.torque_scale
        self._steps_a_tick = whole_steps(1.0 / parameters.loop_rate, step, "1 / loop_rate")
        whole, self._late_steps = divmod(whole_steps(parameters.drive.delay, step, "drive.delay"), self._steps_a_tick)
        nothing = [0.0] * self._count
        self._commands = deque([nothing] * (whole + 2), maxlen=whole + 2)
        rate_map = drive.rate_map @ rotation_drive_in_base
        self._stiffness, damping = _bristles(description, parameters)
        self._presliding = parameters.drive.presliding
        # Plain numbers: for so few they are several times faster than arrays.
        self._actuators = list(
            zip(
                range(self._count), *(rate_map * step).T.tolist(), *rate_map.T.tolist(),
                (drive.rate_limit * step).tolist(), self._stiffness.tolist(), (damping / step).tolist(),
            )
        )
        self.angle, self._turn, self._bristle = nothing[:], nothing[:], nothing[:]
        self._friction = nothing[:]
        self.torque_on_ball = (0.0, 0.0, 0.0)

    def command(self, effort: Array) -> None:
        """Take the command [n] of this tick, N m; raises :class:`BallbalError` unless it is n finite numbers."""
        given = effort.tolist()
        if len(given) != self._count or not math.isfinite(sum(given)):
            raise BallbalError("drive_effort", f"is {given}", f"it takes {self._count} finite efforts")
        scale = self._scale
        self._commands.append([scale * min(max(value, -most), most) for value, most in zip(given, self._limit)])

    def torque(self, step_in_tick: int) -> tuple[float, float, float]:
        """Torque (3 numbers) on the ball in this physics step of the tick, N m."""
        efforts = self._commands[0 if step_in_tick < self._late_steps else 1]
        turn, friction = self._turn, self._friction
        x = y = z = 0.0
        for i, _, _, _, torque_x, torque_y, torque_z, fastest, _, _ in self._actuators:
            effort = efforts[i]
            if abs(turn[i]) > fastest and effort * turn[i] > 0.0:
                effort = 0.0
            effort -= friction[i]
            x += torque_x * effort
            y += torque_y * effort
            z += torque_z * effort
        self.torque_on_ball = (x, y, z)
        return self.torque_on_ball

    def turn(self, x: float, y: float, z: float) -> None:
        """Take the ball's rate relative to the body (3 numbers) during the physics step just done, rad/s."""
        angles, turn, bristle, friction = self.angle, self._turn, self._bristle, self._friction
        slides_at = self._presliding
        for i, turn_x, turn_y, turn_z, _, _, _, _, stiffness, damping in self._actuators:
            d = turn_x * x + turn_y * y + turn_z * z
            turn[i] = d
            angles[i] += d
            before = bristle[i]
            bent = (before + d) / (1.0 + abs(d) / slides_at)
            bristle[i] = bent
            friction[i] = stiffness * bent + damping * (bent - before)


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
