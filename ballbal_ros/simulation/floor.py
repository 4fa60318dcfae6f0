"""What the floor does to the ball besides bearing it: resistance to rolling, and torsion.

Both are laws of their own, beside MuJoCo's contact, which has the force and its friction. In the contact's cone
a rolling or spinning ball would be lifted in proportion to its rate: by microns, enough to lose so stiff a contact.
"""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation import compiled
from ballbal_ros.simulation.parameters import SimulationParameters

# Twist (rad) of the contact at which torsion is fully built up; more where the step can't follow so stiff a spring.
_TWIST = 2e-3
_DAMPING = 0.7


class FloorMoments:
    """Moments of the floor on the ball, N m in ``odom``; one physics step after the other.

    Rolling: C N r against the rolling. Torsion: a bristle, as in
    :class:`~ballbal_ros.simulation.drive.SimulatedDrive`; it holds the ball up to ``torsion`` N, twisted by a
    milliradian or two, and rubs with that moment when the ball spins. Below a speed of 1 mm/s rolling meets less,
    in proportion, as for a real ball that settles in its dent.
    """

    def __init__(self, parameters: SimulationParameters, radius: float, inertia: float, weight: float) -> None:
        floor, step = parameters.floor, parameters.physics_step
        twist = max(_TWIST, floor.torsion * weight * step**2 / (0.04 * inertia))
        damping = 2.0 * _DAMPING * math.sqrt(floor.torsion * weight / twist * inertia) / step
        # What `compiled` takes: the last number is how far the contact is twisted.
        self.values = np.array([floor.rolling_resistance * radius, floor.torsion, twist, damping, step, 0.0])

    def clear(self) -> None:
        """The ball hangs above it: it does nothing from now on."""
        self.values[[0, 1, 3]] = 0.0

    def on_ball(self, load: float, vx: float, vy: float, spin: float) -> Array:
        """The moment [3] in this physics step: load, N, velocity of the ball's centre, m/s, its spin, rad/s."""
        moment = np.empty(3)
        compiled.floor_moment(self.values, load, vx, vy, spin, moment)
        return moment
