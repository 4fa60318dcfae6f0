"""The headless runner's end of the bus: sends what a story says, brings the balance up, records what is true."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import rclpy
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from nav_msgs.msg import Odometry
from rclpy.context import Context
from rclpy.serialization import deserialize_message
from rclpy.signals import SignalHandlerOptions

from ballbal_ros.balance.guard import BALANCING, STANDBY
from ballbal_ros.commands.processes import Processes, RunFailed
from ballbal_ros.motion.story import Story
from ballbal_ros.nodes import process
from ballbal_ros.nodes.diagnostics import OK, number_of, values_of
from ballbal_ros.nodes.messages import BILLION, load_message, nanoseconds, to_time
from ballbal_ros.nodes.plan_report import EARLIER
from ballbal_ros.nodes.topics import publisher, subscribe
from ballbal_ros.nodes.trajectories import ball_plan_message, hand_wrench_message, path_message
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.timeline import Timeline

_TURN = 0.02
_AT_ONCE = 5
_TRY_AGAIN = 0.2
_STAMP = slice(4, 12)
_LISTENERS = {"hand_load": 3, "arm_plan": 2, "ball_plan": 1, "hand_wrench_plan": 1}


class Bus:
    """A node of the runner's own in one domain and namespace. As a context it is taken down at the end.

    ``state`` is the guard's, BALANCING since the stamp ``balances_from``, s; ``waited``: what it waited for last before
    it engaged.
    """

    def __init__(self, domain: int, namespace: str, processes: Processes, timeout: float) -> None:
        self._processes, self._timeout = processes, timeout
        process.stay_on_this_machine()
        self._context = Context()
        rclpy.init(context=self._context, domain_id=domain, signal_handler_options=SignalHandlerOptions.NO)
        self._node = rclpy.create_node("headless_runner", context=self._context, namespace=namespace or None)
        self._spinner = process.executor(self._context)
        self._namespace, self._simulator = namespace, f"{namespace}/simulated_robot"
        self._refused: dict[str, str] = {}
        self.records: list[bytes] = []
        self.state = self._why = self.waited = ""
        self.balances_from = np.inf
        self._told = self._heard = 0
        self.report: Any = None
        self.peaks: dict[str, str] = {}
        self._publishers = {topic: publisher(self._node, topic) for topic in _LISTENERS}
        self._client: Any = self._node.create_client(ChangeState, "balance/change_state")
        subscribe(self._node, "ground_truth", self._on_truth, raw=True)
        subscribe(self._node, "balance_state", self._on_state)
        subscribe(self._node, "plan_report", self._on_report)
        subscribe(self._node, "/diagnostics", self._on_diagnostics)
        self._spinner.add_node(self._node)

    def __enter__(self) -> Bus:
        return self

    def __exit__(self, *_: object) -> None:
        for step in (self._spinner.shutdown, self._node.destroy_node, self._context.try_shutdown):
            with contextlib.suppress(Exception):
                step()

    def _on_truth(self, raw: bytes) -> None:
        # The first instant is told again and again, until it is left.
        if not self.records or self.records[-1][_STAMP] != raw[_STAMP]:
            self.records.append(raw)

    def _on_state(self, message: Any) -> None:
        values = values_of(message)
        self.state, self._why = message.message, values.get("reason", "")
        self.waited = self._why if self.state == STANDBY else self.waited
        if self.state == BALANCING:
            self.balances_from = min(self.balances_from, number_of(values.get("stamp", "")))
        self._heard = int(number_of(values.get("load changes", "")))

    def _on_report(self, message: Any) -> None:
        for status in message.status:
            again = self.report is not None and EARLIER in values_of(status)
            if status.name == "arm_plan" and not again:
                self.report = status

    def _on_diagnostics(self, message: Any) -> None:
        for status in message.status:
            if status.name == self._simulator:
                self.peaks = values_of(status)
            refused = [pair.value for pair in status.values if pair.key.startswith("refused ")]
            if status.name.rpartition("/")[0] == self._namespace:
                self._refused[status.name] = refused[-1] if refused else ""

    def turn(self, wait: float = _TURN) -> None:
        """Take in what has come, for up to ``wait`` s, and look after the processes."""
        self._spinner.spin_once(timeout_sec=wait)
        self._processes.check()

    def pause(self, time_span: float) -> None:
        """Turn for a while, s."""
        until = time.monotonic() + time_span
        while time.monotonic() < until:
            self.turn()

    def wait_for(self, what: str, happened: Callable[[], bool]) -> None:
        """Turn until something has happened; raises :class:`RunFailed` when it takes longer than the wall-clock
        limit.
        """
        until = time.monotonic() + self._timeout
        while not happened():
            self.turn()
            if time.monotonic() > until:
                why = self._reasons() or "nobody says why"
                raise RunFailed(f"waited {self._timeout:g} s for {what}, in vain; {why}")

    def _reasons(self) -> str:
        """What the nodes have refused, and why balance is in its state."""
        state = {f"{self._namespace}/balance is {self.state}": self._why}
        return "; ".join(f"{who}: {why}" for who, why in {**self._refused, **state}.items() if why)

    def wait_for_nodes(self) -> None:
        """Wait until every node listens."""
        for topic, count in _LISTENERS.items():
            self.wait_for(f"{count} listeners on {topic}", partial(self._has_listeners, topic, count))
        self.wait_for("balance/change_state", self._client.service_is_ready)
        # From the first one heard on, none is lost.
        self.wait_for("the simulated robot's ground_truth", lambda: bool(self.records))

    def _has_listeners(self, topic: str, count: int) -> bool:
        return bool(self._publishers[topic].get_subscription_count() >= count)

    def _tell_loads(self, loads: list[tuple[float, Load]]) -> None:
        """Announce loads (stamp in s, load), a few at a time, as a topic keeps ten; the balance says how many it has
        heard of.
        """
        for first in range(0, len(loads), _AT_ONCE):
            for stamp, load in loads[first : first + _AT_ONCE]:
                self._publishers["hand_load"].publish(load_message(load, stamp))
                self._told += 1
            self.wait_for("balance to take the hand_load", lambda: self._heard >= self._told)

    def send_start(self, story: Story) -> None:
        """Tell what the hands hold at the start."""
        self._tell_loads([(0.0, load) for load in story.start_loads])

    def send_story(self, story: Story, timeline: Timeline, joint_names: tuple[str, ...]) -> None:
        """Announce what is to come: loads, ball motion, pulls, and last the arms' motion, all with the stamps when."""
        self._tell_loads([(timeline.arms + when, load) for when, load in story.announced])
        if story.ball is not None:
            self._publishers["ball_plan"].publish(ball_plan_message(story.ball, to_time(timeline.arms)))
        if story.wrenches:
            # Stamp 0: it goes with the arm plan that follows, and is timed from its start.
            self._publishers["hand_wrench_plan"].publish(hand_wrench_message(story.wrenches, to_time(0.0)))
        self._publishers["arm_plan"].publish(path_message(story.arms, joint_names, to_time(timeline.arms)))

    def change_state(self, transition: int) -> bool:
        """Ask the balance for a lifecycle transition; False where it says no."""
        future = self._client.call_async(ChangeState.Request(transition=Transition(id=transition)))
        self.wait_for("balance to change its state", future.done)
        return bool(future.result().success)

    def bring_up(self) -> None:
        """Configure and activate the balance, and wait until it balances."""

        def configured() -> bool:
            """Whether balance has been configured by now."""
            done = self.change_state(Transition.TRANSITION_CONFIGURE)
            if not done:
                # It may not have heard of everything yet: give it time.
                self.pause(_TRY_AGAIN)
            return done

        self.wait_for("balance to be configured", configured)
        if not self.change_state(Transition.TRANSITION_ACTIVATE):
            raise RunFailed("balance would not be activated")
        self.wait_for("balance to balance", lambda: self.state == BALANCING)

    def wait_for_report(self) -> None:
        """Wait for the answer to the arm plan; raises :class:`RunFailed` with its reason where it is refused."""
        self.wait_for("a plan_report", lambda: self.report is not None)
        if self.report.level != OK:
            raise RunFailed(f"the plan was refused: {self.report.message}")
        heard = self.reported("load changes")
        if heard != str(self._told):
            raise RunFailed(f"arm_compensation planned with {heard} of {self._told} hand_load: the bus lost some")

    def reported(self, key: str) -> str:
        """What the report on the arm plan says of something; "" for nothing."""
        return "" if self.report is None else values_of(self.report).get(key, "")

    def place(self) -> tuple[float, float, float]:
        """(time, x, y) of the newest true ball centre; zeros before the first."""
        if not self.records:
            return 0.0, 0.0, 0.0
        message = deserialize_message(self.records[-1], Odometry)
        at = message.pose.pose.position
        return nanoseconds(message.header.stamp) / BILLION, at.x, at.y

    def truth(self) -> Array:
        """All that was recorded [N, 5]: time (s), ball x, y (m), roll, pitch (rad)."""
        rows = []
        for raw in self.records:
            message = deserialize_message(raw, Odometry)
            at, turn = message.pose.pose.position, message.pose.pose.orientation
            roll, pitch, _ = lean_and_heading_from_quat_xyzw(turn.x, turn.y, turn.z, turn.w)
            rows.append((nanoseconds(message.header.stamp) / BILLION, at.x, at.y, roll, pitch))
        return np.array(rows).reshape(-1, 5)
