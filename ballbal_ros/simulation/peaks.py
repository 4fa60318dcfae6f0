"""The greatest values of a simulated run, kept tick by tick."""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.simulation.robot import SimulatedRobot


class Peaks:
    """Peaks of drive torque and friction use of a robot from time ``count_from``, s, on."""

    def __init__(self, robot: SimulatedRobot, count_from: float) -> None:
        self._robot, self._from = robot, count_from
        self._torque = self._friction = 0.0

    def look(self, effort: Array) -> None:
        """Take the instant that the robot has come to with these commanded efforts [n], N m, into account."""
        robot = self._robot
        if robot.time < self._from:
            return
        level = rotation_lean(np.array(robot.lean)) @ (robot.description.drive.torque_map @ effort)
        self._torque = max(self._torque, math.hypot(float(level[0]), float(level[1])))
        self._friction = max(self._friction, robot.friction_use)

    def values(self) -> dict[str, float | bool]:
        """Greatest commanded drive torque about a level axis, N m; greatest share of the floor's friction; whether it
        fell.
        """
        return {"drive torque peak": self._torque, "friction use peak": self._friction, "fell": self._robot.fell}
