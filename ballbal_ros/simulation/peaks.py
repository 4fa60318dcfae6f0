"""The greatest values of a simulated run, kept tick by tick."""

from __future__ import annotations

import math

from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.robot import SimulatedRobot


class Peaks:
    """Peaks of drive torque and friction use of a robot from time ``count_from``, s, on."""

    def __init__(self, robot: SimulatedRobot, count_from: float) -> None:
        self._robot, self._from = robot, count_from
        self._torque = self._friction = 0.0
        self._torque_map = robot.description.drive.torque_map
        # base_link in odom: the heading in it does not change what is level.
        self._level = robot.data.xmat[robot.world.base].reshape(3, 3)

    def look(self, effort: Array) -> None:
        """Take the instant that the robot has come to with these commanded efforts [n], N m, into account."""
        robot = self._robot
        if robot.time < self._from:
            return
        x, y, _ = self._level.dot(self._torque_map.dot(effort)).tolist()
        self._torque = max(self._torque, math.hypot(x, y))
        self._friction = max(self._friction, robot.friction_use)

    def values(self) -> dict[str, float | bool]:
        """Greatest commanded drive torque about a level axis, N m; greatest share of the floor's friction; whether it
        fell.
        """
        return {"drive torque peak": self._torque, "friction use peak": self._friction, "fell": self._robot.fell}
