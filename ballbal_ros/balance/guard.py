"""The guard: whether the loop may send torque, and how much of it.

States, and the share of the loop's torque that each may send:

- ``standby``: 0. Active, waiting to be upright, still and measured.
- ``engaging``: 0 rising to 1 over ``ramp_time``.
- ``balancing``: 1.
- ``stopping``: 1. A controlled stop (IEC 60204-1 category 1): it stays balanced, takes no new motion, and lets go
once held.
- ``released``: 0. Held by a stand or gantry after a controlled stop; latched until reset.
- ``tripped``: 0. Leaned too far to come back, or lost its senses; latched until reset.
"""

from __future__ import annotations

from ballbal_ros.balance.parameters import BalanceParameters

STANDBY, ENGAGING, BALANCING = "standby", "engaging", "balancing"
STOPPING, RELEASED, TRIPPED = "stopping", "released", "tripped"
_STILL = 0.3


class Guard:
    """The state machine; one :meth:`update` a tick. It reads no clock: stamps are handed to it, s."""

    def __init__(self, parameters: BalanceParameters) -> None:
        self._parameters = parameters
        self.state = STANDBY
        self.reason = "waiting to be upright and still"
        self._since = 0.0
        self._stop_asked = False

    def _go(self, state: str, reason: str, stamp: float) -> None:
        self.state, self.reason, self._since = state, reason, stamp

    def reset(self) -> None:
        """A person's reset: back to standby from wherever it was latched."""
        self._stop_asked = False
        self._go(STANDBY, "waiting to be upright and still", 0.0)

    def stop(self, reason: str) -> None:
        """Ask for a controlled stop; latched until :meth:`reset`."""
        if not self._stop_asked:
            self._stop_asked = True
            if self.state in (ENGAGING, BALANCING):
                self._go(STOPPING, reason, self._since)
            elif self.state == STANDBY:
                self._go(RELEASED, reason, self._since)

    def trip(self, reason: str) -> None:
        """Torque off at once; latched until :meth:`reset`."""
        if self.state not in (TRIPPED, RELEASED):
            self._go(TRIPPED, reason, self._since)

    def update(self, stamp: float, lean_error: float, lean_rate: float, measured: bool, supported: bool) -> float:
        """Go on one tick, and return the share of the loop's torque (0 to 1) that may be sent.

        ``lean_error``: distance from the reference lean, rad; ``lean_rate``: its rate's magnitude, rad/s;
        ``measured``: whether this
        tick has IMU and drive data; ``supported``: whether a stand or gantry holds the robot.
        """
        limits = self._parameters.limits
        if self.state == STANDBY:
            if measured and lean_error < limits.engage_lean and lean_rate < _STILL:
                self._go(ENGAGING, "torque comes in", stamp)
            return 0.0
        if self.state in (RELEASED, TRIPPED):
            return 0.0
        if lean_error > limits.trip_lean:
            self._go(TRIPPED, f"leaned {lean_error:.2f} rad off the reference", stamp)
            return 0.0
        if self.state == ENGAGING:
            ramp = self._parameters.ramp_time
            share = 1.0 if ramp <= 0.0 else min(1.0, max(0.0, (stamp - self._since) / ramp))
            if share >= 1.0:
                self._go(BALANCING, "", stamp)
            return share
        if self.state == STOPPING and supported:
            self._go(RELEASED, "held by a stand after a controlled stop", stamp)
            return 0.0
        return 1.0
