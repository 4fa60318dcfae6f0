"""The simulated arm servos: computed torque that makes each joint follow its command as such servos do."""

from __future__ import annotations

import mujoco
import numpy as np

from ballbal_ros.errors import ParameterError
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation import compiled
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.world import World

_OLD_MUJOCO = int(mujoco.__version__.split(".")[0]) < 4


class ArmServo:
    """Joint servos with a critically damped bandwidth w, updated once a tick; the torque is held until the next.

    Wanted acceleration: ``ideal`` q'' = a + 2w (v_ref - v) + w² (q_ref - q); ``position_velocity`` without a;
    ``position`` q'' = -2w v + w² (q_ref - q), which lags by 2/w. URDF effort limits hold.

    With the arms' wanted acceleration a_a and all else free (f: base and ball), M_ff a_f = (applied + contact - bias)_f
    - M_fa a_a gives what base and ball do, and M_aa a_a + M_af a_f + bias_a the arms' torque. (To take a_f from the
    last step instead runs away once the arms are heavy against the base.) The contact's part is that of the last step.
    """

    def __init__(
        self, description: RobotDescription, parameters: SimulationParameters, world: World, data: mujoco.MjData
    ) -> None:
        arm = description.parameters.arm
        self._servo = arm.servo if parameters.arm_servo == "as_described" else parameters.arm_servo
        given = parameters.arm_servo_bandwidth
        # In the description's order of the joints.
        self.bandwidth = np.full(description.joint_count, given) if given else description.servo_bandwidth
        self._period = 1.0 / parameters.loop_rate
        if self.bandwidth.max() * self._period > 0.5:
            raise ParameterError(
                "simulation.yaml",
                f"arm_servo_bandwidth is {self.bandwidth.max():g} rad/s at a loop_rate of {parameters.loop_rate:g} Hz",
                f"it takes at most {0.5 / self._period:g} rad/s",
            )
        self._model, self._data = world.model, data
        # The world's own order of the arm joints, in which they are neighbours.
        self._order = np.argsort(world.arm_rate)
        self._first, first_at, count = int(world.arm_rate.min()), int(world.arm_position.min()), len(self._order)
        self._position = data.qpos[first_at : first_at + count]
        self._rate = data.qvel[self._first : self._first + count]
        self._set_gains(parameters.physics_step)
        size = world.model.nv
        free = np.setdiff1d(np.arange(size), np.arange(self._first, self._first + count))
        inertia = np.zeros((size, size))
        # MuJoCo 4 takes the inertia from the data; before, one passed it.
        at = inertia.ctypes.data
        full = (at, data.qM.ctypes.data) if _OLD_MUJOCO else (data._address, at)
        highest = description.effort_limit[self._order]
        self._before_command = (world.model._address, data._address, *full, self._first)
        self._after_command = (
            np.stack((self._gain, self._rate_gain, highest)),
            free,
            self._position,
            self._rate,
            data.qfrc_applied,
            data.qfrc_bias,
            data.qfrc_constraint,
            np.zeros((3, size)),
            inertia,
        )
        self._commands: list[tuple[int, Array]] = [(0, (self._gain * self._position)[None])]

    def _set_gains(self, step: float) -> None:
        """The law holds in the tick's middle: its q and v there are those of now, carried on with the q'' sought.

        MuJoCo's rates are half a step old, as its integrator's positions and rates are staggered.
        """
        w, period = self.bandwidth[self._order], self._period
        ahead, further = 0.5 * (period + step), 0.25 * period * (step + 0.5 * period)
        self._share = 1.0 / (1.0 + 2.0 * w * ahead + w * w * further)
        self._gain = w * w * self._share
        self._rate_gain = (2.0 * w + 0.5 * period * w * w) * self._share

    def command(self, path: JointPath, start: float, tick: int) -> None:
        """Follow a path from time ``start`` (s) on in place of what was commanded; hold its end. Now is ``tick``."""
        first = max(tick, int(np.ceil(start / self._period - 1e-6)))
        last = max(first, int(np.ceil((start + path.duration) / self._period)))
        times = (np.arange(first, last + 1) + 0.5) * self._period - start
        w = self.bandwidth
        position, rate, acceleration = path.sample(np.asarray(times, dtype=np.float64))
        pull = w * w * position
        if self._servo != "position":
            pull += 2.0 * w * rate
        if self._servo == "ideal":
            pull += acceleration
        pull = np.ascontiguousarray(pull[:, self._order] * self._share)
        self._commands = [(at, table) for at, table in self._commands if at < first]
        self._commands.append((first, pull))

    def act(self, tick: int) -> None:
        """Set the arm joints' torques for this tick. Kinematics, mass matrix and bias must be those of now."""
        commands = self._commands
        while len(commands) > 1 and commands[1][0] <= tick:
            del commands[0]
        first, table = commands[0]
        compiled.arm_torque(*self._before_command, table[min(tick - first, len(table) - 1)], *self._after_command)
