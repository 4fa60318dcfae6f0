"""Whether the lean agrees with the accelerometer: over a while, and whatever pushes the robot.

Over a time T the accelerometer's specific force, turned level by the measured lean, must have made the IMU's change of
velocity, which encoders and gyro know. A lean off by ε shows as

    ∫ f dt - Δv = g T ε

and so does an accelerometer that is off. A push is in both f and Δv, and cancels.
"""

from __future__ import annotations

import math

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription

_WINDOW = 0.1


class TiltWitness:
    """Adds up tick by tick; ``off`` is the last window's ε (about y, about x), rad, ``agrees`` whether not two were
    too far off in a row.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters) -> None:
        self._period = parameters.loop.period
        self._ticks = max(5, round(_WINDOW / self._period))
        self._most = parameters.limits.tilt
        self._height = description.parameters.imu.position[2]
        self.agrees = True
        self.restart()

    def restart(self) -> None:
        """Begin a new window: something was not measured."""
        self._count = 0
        self._force = [0.0, 0.0]
        self._begun: tuple[float, float] | None = None
        self._step = (0.0, 0.0)
        self.off = (0.0, 0.0)

    def trust(self) -> None:
        """A person has seen to it."""
        self.agrees = True
        self.restart()

    def see(
        self,
        force: tuple[float, float, float],
        roll: float,
        pitch: float,
        lean_rate: tuple[float, float, float],
        moved: tuple[float, float],
    ) -> None:
        """Take one tick: specific force (``base_link``, m/s²), lean and its rate, and how far the ball moved (heading
        axes, m).
        """
        fx, fy, fz = force
        sr, cr = math.sin(roll), math.cos(roll)
        down = sr * fy + cr * fz
        total = self._force
        total[0] += math.cos(pitch) * fx + math.sin(pitch) * down
        total[1] += cr * fy - sr * fz
        self._count += 1
        before, self._step = self._step, moved
        if self._count < 2 or (self._begun is not None and self._count < self._ticks):
            return
        half, height = 0.5 / self._period, self._height
        # The rates lag the mean of two steps by half a period: nothing beside the window.
        velocity = (
            half * (before[0] + moved[0]) + height * lean_rate[1],
            half * (before[1] + moved[1]) - height * lean_rate[0],
        )
        if self._begun is not None:
            self._judge(velocity, self._begun)
        self._begun = velocity
        self._count = 0
        total[0] = total[1] = 0.0

    def _judge(self, velocity: tuple[float, float], begun: tuple[float, float]) -> None:
        weight = 1.0 / (GRAVITY * self._period * self._count)
        x = weight * (self._period * self._force[0] - velocity[0] + begun[0])
        y = weight * (self._period * self._force[1] - velocity[1] + begun[1])
        before, self.off = self.off, (x, y)
        if not math.hypot(x, y) < self._most and not math.hypot(*before) < self._most:
            self.agrees = False
