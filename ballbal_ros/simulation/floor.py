"""What the floor does to the ball besides bearing it: resistance to rolling, and torsion.

Both are laws of their own, beside MuJoCo's contact, which has the force and its friction. In the contact's cone
a rolling or spinning ball would be lifted in proportion to its rate: by microns, enough to lose so stiff a contact.
"""

from __future__ import annotations

import math

from ballbal_ros.simulation.parameters import SimulationParameters

# Below this speed (m/s) the resistance falls to zero in proportion, as for a real ball that settles in its dent.
_CRAWL = 1e-3
# Twist (rad) of the contact at which torsion is fully built up; more where the step can't follow so stiff a spring.
_TWIST = 2e-3
_DAMPING = 0.7


class FloorMoments:
    """Moments of the floor on the ball, N m in ``odom``; one physics step after the other.

    Rolling: C N r against the rolling. Torsion: a bristle, as in
    :class:`~ballbal_ros.simulation.drive.SimulatedDrive`; it holds the ball up to ``torsion`` N, twisted by a
    milliradian or two, and rubs with that moment when the ball spins. ``clear``: whether it hangs above the
    floor.
    """

    def __init__(self, parameters: SimulationParameters, radius: float, inertia: float, weight: float) -> None:
        floor, self._step = parameters.floor, parameters.physics_step
        self._resistance, self._torsion = floor.rolling_resistance * radius, floor.torsion
        self._twist = max(_TWIST, self._torsion * weight * self._step**2 / (0.04 * inertia))
        stiffness = self._torsion * weight / self._twist
        self._damping = 2.0 * _DAMPING * math.sqrt(stiffness * inertia) / self._step
        self._bent = 0.0
        self.clear = False

    def on_ball(self, load: float, vx: float, vy: float, spin: float) -> tuple[float, float, float]:
        """The moment (3 numbers) in this physics step: load, N, velocity of the ball's centre, m/s, its spin, rad/s."""
        load = 0.0 if self.clear else max(load, 0.0)
        share = self._resistance * load / math.sqrt(vx * vx + vy * vy + _CRAWL**2)
        turned = spin * self._step
        before = self._bent
        bent = (before + turned) / (1.0 + abs(turned) / self._twist)
        self._bent = bent
        torsion = self._torsion * load
        hold = torsion * bent / self._twist + self._damping * (bent - before)
        return share * vy, -share * vx, -min(max(hold, -torsion), torsion)
