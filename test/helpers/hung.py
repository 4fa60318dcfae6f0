"""The demo robot's drive with the robot hung up: the ball free in its cage, and whatever is wrong with the wiring."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import attrs
import numpy as np

from ballbal_ros.bring_up.hand_turns import TURNS, HandTurns
from ballbal_ros.bring_up.moves import SmallMoves
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.drive import SimulatedDrive
from helpers.robots import shelver
from helpers.simulated import simulation

TICK = 0.002


@attrs.define(eq=False)
class Wiring:
    """How the drive is wired, [n] each: which contact a command and an encoder belong to, and what factor they have;
    ``step``: what the encoders count by, rad at the wheel.
    """

    command: Sequence[int]
    encoder: Sequence[int]
    gain: Array
    scale: Array
    step: Array

    @classmethod
    def right(cls, description: RobotDescription | None = None) -> Wiring:
        drive = (description or shelver()).drive
        order = range(len(drive.names))
        ones = np.ones(len(drive.names))
        return cls(list(order), list(order), ones.copy(), ones.copy(), np.array(drive.encoder_step))


class HungDrive:
    """The simulated drive on a ball that nothing else holds: J ω' = torque on the ball, J with wheels and rotors."""

    def __init__(self, wiring: Wiring, description: RobotDescription | None = None, **changes: float) -> None:
        self._description = description or shelver()
        self.parameters = simulation(changes)
        self._drive = SimulatedDrive(self._description, self.parameters, np.eye(3))
        drive = self._description.drive
        self._turning = self._description.parameters.ball.inertia * np.eye(3) + drive.reflected_inertia
        self.wiring, self.time = wiring, 0.0
        self.rate = np.zeros(3)
        self.sent: list[Array] = []

    @property
    def reading(self) -> Array:
        """What the encoders say [n], rad."""
        wiring = self.wiring
        angle = np.array(self._drive.angle)[list(wiring.encoder)]
        return np.round(angle / wiring.step) * wiring.step * wiring.scale

    def go_on(self, effort: Array) -> None:
        """One tick with commanded efforts [n], N m."""
        self.sent.append(effort.copy())
        true = np.zeros(len(effort))
        for contact, gain, value in zip(self.wiring.command, self.wiring.gain, effort):
            true[contact] += gain * value
        self._drive.command(true)
        step = self.parameters.physics_step
        for k in range(round(TICK / step)):
            torque = np.array(self._drive.torque(k))
            self.rate = self.rate + step * np.linalg.solve(self._turning, torque)
            self._drive.turn(*self.rate.tolist())
        self.time += TICK

    def turn_by_hand(self, axis: Sequence[float], turns: float, see: Callable[[Array], None]) -> None:
        """Turn the ball about an axis, in a second; ``see`` gets what the encoders say."""
        steps = round(1.0 / self.parameters.physics_step)
        rate = 2.0 * math.pi * turns * np.array(axis)
        for k in range(steps):
            self._drive.turn(*rate.tolist())
            if k % 10 == 0:
                see(self.reading)
        self.rate = np.zeros(3)


def turned(hung: HungDrive, errors: Sequence[float] = (0.0, 0.0, 0.0)) -> HandTurns:
    """A person turns the ball as asked for, each turn off by a share."""
    turns = HandTurns(hung._description.drive)
    turns.see(hung.reading)
    for turn, error in zip(TURNS, errors):
        hung.turn_by_hand(turn.axis, 1.0 + error, turns.see)
        turns.see(hung.reading)
        turns.done()
    return turns


def moved(hung: HungDrive, moves: SmallMoves, limit: float = 60.0) -> None:
    """Run the small moves to their end."""
    while not moves.done:
        hung.go_on(moves.tick(hung.time, hung.reading))
        assert hung.time < limit
