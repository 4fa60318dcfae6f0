"""What the balance node finds in the hands as it stands: weighed between ticks, told on ``hand_load_estimate``."""

from __future__ import annotations

from rclpy.node import Node

from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.nodes.messages import BILLION, load_message
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.loads import Load
from ballbal_ros.weighing.standing import StandingWatch

# Before a plan that waits begins, s: time enough to plan it anew; and when that must have been done.
_AHEAD, _LAST_MOMENT = 2.0, 0.1


class HandLoads:
    """Watches a loop that stands. An estimate goes out after each reading: with the stamp from which on the loop
    believes it, so that planners do too, or with stamp zero where it is not good enough for that or a plan is in force.

    A plan that waits for its time is to be made anew then, by who sent it. Where it is not, what was believed when it
    came is believed again: plan and model must be of one mind.
    """

    def __init__(self, node: Node) -> None:
        self._publisher = publisher(node, "hand_load_estimate")
        self._watch: StandingWatch | None = None
        self._told = 0
        self._believed: set[str] = set()
        self._plan: Array | None = None
        self._planned_with: dict[str, Load] = {}

    def begin(self, loop: BalanceLoop, ns: int) -> None:
        """Another loop from ``ns`` on: nothing has been found yet, and planners are told what it believes."""
        self._watch, self._told = StandingWatch(loop), 0
        for hand in self._believed:
            load = loop.body.loads.get(hand) or Load(hand, 0.0)
            self._publisher.publish(load_message(load, max(ns, 1) / BILLION))
        self._believed.clear()
        self._plan = None

    def see(self, ns: int, loop: BalanceLoop) -> None:
        """Look at the loop after the tick ``ns``; every :data:`~ballbal_ros.weighing.standing.EVERY` s will do."""
        watch = self._watch
        if watch is None:
            return
        held = dict(loop.body.loads)
        found = {load.hand: load for load in watch.see(ns / BILLION) if loop.adopt_load(load, _AHEAD)}
        self._mind_plan(ns, loop, {hand: held.get(hand) or Load(hand, 0.0) for hand in found})
        watch.adopted(found.values())
        self._believed.update(found)
        if watch.readings == self._told:
            return
        self._told = watch.readings
        for hand, estimate in watch.estimates.items():
            load = found.get(hand)
            told = load or Load(hand, min(max(estimate.mass, 0.0), estimate.limit), estimate.center)
            self._publisher.publish(load_message(told, ns / BILLION if load is not None else 0.0))

    def _mind_plan(self, ns: int, loop: BalanceLoop, replaced: dict[str, Load]) -> None:
        """Keep what the loads of a waiting plan were before others took their place (``replaced``, by hand); believe
        them again where that plan is about to begin as it was.
        """
        coming = loop.reference.next_plan(ns / BILLION)
        plan = None if coming is None else coming[1]
        if plan is not self._plan:
            self._plan = None
        if replaced and plan is not None:
            self._planned_with = {**replaced, **(self._planned_with if self._plan is not None else {})}
            self._plan = plan
        if coming is None or self._plan is None or coming[0] - ns / BILLION > _LAST_MOMENT or self._watch is None:
            return
        for load in self._planned_with.values():
            if loop.adopt_load(load, 0.0):
                self._watch.adopted([load])
                self._publisher.publish(load_message(load, ns / BILLION))
        self._plan = None

    @property
    def notes(self) -> dict[str, str]:
        """For ``balance_state``: by hand the mass found with its standard error, and what happened last."""
        if self._watch is None:
            return {}
        notes = {}
        for hand, found in self._watch.estimates.items():
            notes[f"{hand} load"] = f"{found.mass:.3f}"
            notes[f"{hand} load error"] = f"{found.mass_error:.3f}"
            notes[f"{hand} center error"] = " ".join(f"{error:.4f}" for error in found.center_error.tolist())
        if self._watch.events:
            last = self._watch.events[-1]
            notes["hand event"] = f"{last.what} {last.hand} {last.mass:.2f} kg at {last.time:.2f} s".replace("  ", " ")
        return notes
