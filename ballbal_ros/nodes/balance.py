"""Node ``balance`` (lifecycle): one tick of the balance loop for each measurement, as soon as it is complete."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from rclpy.lifecycle import LifecycleNode, TransitionCallbackReturn

from ballbal_ros.balance.clock import is_looked_at
from ballbal_ros.balance.gains import checked_design, least_margins
from ballbal_ros.balance.guard import BALANCING, STANDBY
from ballbal_ros.balance.hand_force import PullWatch
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.errors import BallbalError
from ballbal_ros.memory import settle_memory
from ballbal_ros.node_parameters import BalanceNodeParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.balance_messages import BalanceMessages, pull_values, running_values
from ballbal_ros.nodes.balance_requests import BalanceRequests
from ballbal_ros.nodes.balance_tuning import BalanceTuning
from ballbal_ros.nodes.diagnostics import ERROR, OK, WARN, Diagnostics
from ballbal_ros.nodes.hand_loads import HandLoads
from ballbal_ros.nodes.messages import BILLION
from ballbal_ros.nodes.overload import why_not_engage, why_stop
from ballbal_ros.nodes.parameters import NodeParameters
from ballbal_ros.nodes.priority import Scheduling
from ballbal_ros.nodes.senses import Senses
from ballbal_ros.nodes.stamp_clock import StampClock
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.robot.whole_body import WholeBody

_STATE_EVERY = BILLION // 5
_SUCCESS, _FAILURE = TransitionCallbackReturn.SUCCESS, TransitionCallbackReturn.FAILURE


class BalanceNode(LifecycleNode):
    """Keeps the robot on its ball while it is active. The tick runs in the callback of the message that completes
    it.
    """

    def __init__(self) -> None:
        super().__init__("balance", **process.NODE_OPTIONS)
        parameters = NodeParameters(
            self, {"robot.yaml": RobotParameters, "balance.yaml": BalanceParameters, "node": BalanceNodeParameters}
        )
        own: BalanceNodeParameters = parameters["node"]
        self.parameters: BalanceParameters = parameters["balance.yaml"]
        self.description = process.describe(self, parameters["robot.yaml"], own.robot_description_wait)
        self._stamp_clock = StampClock(self)
        self.loop: BalanceLoop | None = None
        self.active = False
        self.ns = -1
        self._period_ns = round(self.parameters.loop.period * BILLION)
        self._odom_every = max(1, round(self.parameters.loop.rate / own.odom_rate))
        self._ticks = 0
        self.margins: Mapping[str, float] = {}
        self._most_torque = 0.0
        self._lock_step = own.lock_step
        self._answer = np.zeros(len(self.description.drive.names))
        self._said, self._said_at = "", 0
        self._messages = BalanceMessages(self, self.description, None if own.lock_step else own.command_lifespan)
        self.diagnostics = Diagnostics(self, self.description.name, self._report)
        self.requests = BalanceRequests(self)
        self.hand_loads = HandLoads(self)
        self._senses = Senses(self.description, self.parameters, own.lock_step, self._tick, self.diagnostics)
        self._tuning = BalanceTuning(self, parameters)
        inputs = self.diagnostics.inputs
        inputs.subscribe("joint_states", self._senses.on_arms, raw=True)
        inputs.subscribe("drive_states", self._senses.on_drive, raw=True)
        inputs.subscribe(own.imu_topic, self._senses.on_imu, raw=True)

    def _tick(self, ns: int) -> None:
        """Answer the measurement of ``ns``; one that came before is answered as before."""
        loop = self.loop
        if loop is None or not self.active:
            return
        if ns <= self.ns:
            if ns == self.ns:
                self._messages.command(ns, self._answer)
            return
        self.ns = ns
        self._answer = loop.tick(self._senses.measurement)
        self._messages.command(ns, self._answer)
        self.diagnostics.pace.ran(ns / BILLION, loop.period)
        self._most_torque = max(self._most_torque, math.hypot(loop.output.sent[0], loop.output.sent[1]))
        self._ticks += 1
        if self._ticks % self._odom_every == 0:
            self._stamp_clock.go_to(ns)
            self.requests.go_on(ns)
            self._messages.odometry(ns, loop)
            self._see_pull(ns, loop)
            with self.diagnostics.taking("hand_load_estimate"):
                self.hand_loads.see(ns, loop)
            if not self._lock_step:
                self._look_at_pace(loop)
        state = loop.guard.state
        due = state != self._said or ns - self._said_at >= _STATE_EVERY
        if due or (state in ("standby", "engaging") and is_looked_at(ns, self._period_ns)):
            self.say_state()

    def _look_at_pace(self, loop: BalanceLoop) -> None:
        pace = self.diagnostics.pace
        loop.held_back = why_not_engage(pace, loop.parameters, Scheduling.granted)
        overload = why_stop(pace)
        if overload and loop.guard.sends:
            loop.stop(overload)

    def _see_pull(self, ns: int, loop: BalanceLoop) -> None:
        """Keep account of the motion that tells what pulls at a hand: the numbers alone, it is worked out on demand."""
        if loop.guard.state == BALANCING:
            ball, rates = loop.ball, loop.attitude.rates
            self._pull.see(ns / BILLION, loop.lean, rates[:2], (ball.vx, ball.vy), loop.senses.arm_position)
        else:
            self._pull.forget()

    def arm_position(self) -> Array:
        """Where the arms are [n], as far as is known; rad."""
        return self._senses.arms.position.copy()

    def say_state(self) -> None:
        """Publish ``balance_state`` now."""
        self._said = "inactive" if self.loop is None or not self.active else self.loop.guard.state
        self._said_at = self.ns
        self._messages.state(self.ns, self.loop, self.active, {**self.requests.notes, **self.hand_loads.notes})

    def _make_loop(self) -> BalanceLoop:
        arms = self._senses.arms
        if not arms.complete:
            raise BallbalError(
                "joint_states", f"has not told of {', '.join(arms.missing())}", "publish the arms' joint states first"
            )
        if self._lock_step and self.requests.supported is None:
            # The first tick depends on it.
            raise BallbalError("support", "has not been heard of", "start the simulated robot first")
        loads, to_come = self.requests.loads_at(arms.stamp)
        posture = WholeBody(self.description, loads).posture(arms.position)
        _, found = checked_design(posture, self.description, self.parameters)
        self.margins = least_margins(found)
        loop = BalanceLoop(self.description, self.parameters, arms.position.copy(), loads)
        for stamp, load in to_come:
            loop.set_load(load, stamp)
        loop.supported = bool(self.requests.supported)
        if not self._lock_step:
            self._look_at_pace(loop)
        return loop

    def on_configure(self, state: Any) -> TransitionCallbackReturn:
        """Make the loop for the posture and loads of now; refused where the gains don't keep their margins there."""
        return self._try("configure", self._configure)

    def _configure(self) -> None:
        self.loop = self._make_loop()
        self._watch_pull(self.loop)
        self.ns = -1
        settle_memory()

    def _watch_pull(self, loop: BalanceLoop) -> None:
        self._pull = PullWatch(loop.body, every=self._odom_every / self.parameters.loop.rate)
        self.hand_loads.begin(loop, self.ns)

    def on_activate(self, state: Any) -> TransitionCallbackReturn:
        """From the next measurement on the guard may let torque out."""
        return self._try("activate", self._activate)

    def _activate(self) -> None:
        if self.ns >= 0:
            self.loop = self._make_loop()
            self._watch_pull(self.loop)
        self.active = True
        self.requests.begin()

    def on_deactivate(self, state: Any) -> TransitionCallbackReturn:
        """Torque off."""
        return self._try("deactivate", self._let_go)

    def on_cleanup(self, state: Any) -> TransitionCallbackReturn:
        """Forget the loop."""
        return self._try("cleanup", self._forget)

    def on_shutdown(self, state: Any) -> TransitionCallbackReturn:
        """Torque off, and forget the loop."""
        return self._try("shutdown", self._forget)

    def _let_go(self) -> None:
        was_active, self.active = self.active, False
        if was_active and self.ns >= 0:
            self._answer = np.zeros_like(self._answer)
            self._messages.command(self.ns, self._answer)

    def _forget(self) -> None:
        self._let_go()
        self.loop = None

    def _try(self, what: str, step: Any) -> TransitionCallbackReturn:
        try:
            step()
        except Exception as error:  # rclpy would pass over it in silence
            reason = str(error) if isinstance(error, BallbalError) else f"{type(error).__name__}: {error}"
            self.diagnostics.refuse(what, reason)
            self.get_logger().error(f"{what}: {reason}")
            return _FAILURE
        self.diagnostics.accept(what)
        self.say_state()
        return _SUCCESS

    def leave(self) -> None:
        """Torque off before the process ends."""
        self._let_go()
        self._tuning.leave()

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        values: dict[str, object] = {
            "clock": "lock_step" if self._lock_step else "real_time",
            "tf": "yes" if self._messages.has_tf else "no tf2_msgs here",
        }
        loop, ticks = self.loop, self.diagnostics.pace.count
        if loop is None or not self.active:
            return OK, "inactive", values
        state = loop.guard.state
        values.update(running_values(loop, self._messages.torque_limit, self._most_torque), **self.margins)
        values.update(self.hand_loads.notes)
        values["last tick"] = max(self.ns, 0) / BILLION
        self._most_torque = 0.0
        values.update(pull_values(self._pull, self.description.parameters.hands.links))
        if state == "tripped":
            return ERROR, state, values
        looked_at = ticks == 0 or state in ("stopping", "released") or (state == STANDBY and loop.held_back)
        return (WARN if looked_at else OK), state, values


def main() -> None:
    """Run the node."""
    process.main(BalanceNode)


if __name__ == "__main__":
    main()
