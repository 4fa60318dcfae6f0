"""The guard: whether the loop may send torque, and how much of it.

What leads from one state to the next is the table :data:`TRANSITIONS`, and the guard runs on that very table: an
event that it does not name for a state changes nothing. ``docs/safety.md`` is printed from it.
"""

from __future__ import annotations

import attrs

from ballbal_ros.balance.parameters import BalanceParameters

UNCONFIGURED, STANDBY, ENGAGING, BALANCING = "unconfigured", "standby", "engaging", "balancing"
STOPPING, RELEASED, TRIPPED = "stopping", "released", "tripped"


@attrs.frozen
class State:
    """A state: the ``share`` of the loop's torque that it may send (least and most), and what it means."""

    name: str
    share: tuple[float, float]
    meaning: str

    @property
    def sends(self) -> bool:
        """Whether torque may leave in this state."""
        return self.share[1] > 0.0


STATES: dict[str, State] = {
    state.name: state
    for state in (
        State(UNCONFIGURED, (0.0, 0.0), "no model, no gains: the node has not been configured, or not been activated"),
        State(STANDBY, (0.0, 0.0), "waits until every condition of engaging holds; `reason` says what is missing"),
        State(ENGAGING, (0.0, 1.0), "torque comes in over ramp_time"),
        State(BALANCING, (1.0, 1.0), "balances, follows plans, takes commands"),
        State(
            STOPPING,
            (0.0, 1.0),
            "controlled stop (IEC 60204-1 category 1): stays balanced, takes no new motion, and lets go once held",
        ),
        State(RELEASED, (0.0, 0.0), "a controlled stop is over, a stand or gantry holds it; latched until reset"),
        State(TRIPPED, (0.0, 0.0), "torque went off at once, as it could not come back; latched until reset"),
    )
}

CONFIGURE, CLEAN_UP, READY, RAMPED = "configure", "clean_up", "ready", "ramped"
STOP, TRIP, HELD, RESET = "stop", "trip", "held", "reset"
EVENTS: dict[str, str] = {
    CONFIGURE: "configured and activated: the model is loaded, and the loop keeps its margins on it",
    CLEAN_UP: "deactivated, cleaned up, or the process ends",
    READY: "upright, still, every sense fresh, for limits.engage_time",
    RAMPED: "the whole torque has come in",
    STOP: "emergency stop, or an answer of the table below that says stop",
    TRIP: "an answer of the table below that says trip",
    HELD: "support: a stand or a gantry holds it",
    RESET: "a person resets it (and no emergency stop is on)",
}

TRANSITIONS: dict[tuple[str, str], str] = {
    (UNCONFIGURED, CONFIGURE): STANDBY,
    (STANDBY, READY): ENGAGING,
    (STANDBY, STOP): RELEASED,
    (ENGAGING, RAMPED): BALANCING,
    (ENGAGING, STOP): STOPPING,
    (ENGAGING, TRIP): TRIPPED,
    (BALANCING, STOP): STOPPING,
    (BALANCING, TRIP): TRIPPED,
    (STOPPING, HELD): RELEASED,
    (STOPPING, TRIP): TRIPPED,
    (STOPPING, RESET): ENGAGING,
    (RELEASED, RESET): STANDBY,
    (TRIPPED, RESET): STANDBY,
    **{(name, CLEAN_UP): UNCONFIGURED for name in STATES if name != UNCONFIGURED},
}

_WAITING = "waiting to be upright and still"


class Guard:
    """The state machine. It reads no clock: stamps are handed to it, s. ``state`` and ``reason`` say where it is, and
    why.
    """

    def __init__(self, parameters: BalanceParameters, state: str = STANDBY) -> None:
        self._ramp = parameters.ramp_time
        self._engage_time = parameters.limits.engage_time
        self.state = state
        self.reason = _WAITING if state == STANDBY else ""
        self._ready_since: float | None = None
        self._last: float | None = None
        self._share = 0.0

    @property
    def sends(self) -> bool:
        """Whether torque may leave now."""
        return STATES[self.state].sends

    def fire(self, event: str, reason: str) -> bool:
        """Let an event happen; True where the table names it for this state. ``reason`` becomes the state's."""
        after = TRANSITIONS.get((self.state, event))
        if after is None:
            return False
        self.state, self.reason = after, reason
        self._ready_since = None
        if not STATES[after].sends:
            self._share = 0.0
        return True

    def reset(self) -> bool:
        """A person's reset, True where there was something to reset: from where it was latched back to standby; from a
        stop that it still balances in, on with balancing (by way of engaging, with the torque that it has).
        """
        return self.fire(RESET, "" if self.state == STOPPING else _WAITING)

    def stop(self, reason: str) -> bool:
        """Ask for a controlled stop; latched until :meth:`reset`."""
        return self.fire(STOP, reason)

    def trip(self, reason: str) -> bool:
        """Torque off at once; latched until :meth:`reset`."""
        return self.fire(TRIP, reason)

    def update(self, stamp: float, missing: str, supported: bool) -> float:
        """Go on one tick, and return the share of the loop's torque (0 to 1) that may be sent.

        ``missing``: what is missing to engage, in words; "" where nothing is. ``supported``: a stand or gantry holds
        it.
        """
        last, self._last = self._last, stamp
        state = self.state
        if state == STANDBY:
            self._wait(stamp, missing)
            return 0.0
        if not STATES[state].sends:
            return 0.0
        if state == STOPPING and supported:
            self.fire(HELD, "held by a stand after a controlled stop")
            return 0.0
        if self._share < 1.0:
            passed = 0.0 if last is None else max(0.0, stamp - last)
            self._share = min(1.0, self._share + passed / self._ramp) if self._ramp > 0.0 else 1.0
        if state == ENGAGING and self._share >= 1.0:
            self.fire(RAMPED, "")
        return self._share

    def _wait(self, stamp: float, missing: str) -> None:
        if missing:
            self.reason, self._ready_since = missing, None
        elif self._ready_since is None:
            self._ready_since = stamp
        elif stamp - self._ready_since >= self._engage_time - 1e-9:
            self.fire(READY, "torque comes in")
