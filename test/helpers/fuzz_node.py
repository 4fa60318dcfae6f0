"""One node in this process, its callbacks called with hostile messages as an executor would call them.

``python fuzz_node.py EXECUTABLE COUNT SEED --ros-args …``: prints what was found as JSON. A callback that raises is a
finding, and so are an input without its answer, a command that may not be sent, and a change of state that nobody asked
for. After each few messages the world goes on by a good one: the simulated robot steps with what the node commands.
"""

from __future__ import annotations

import importlib
import json
import random
import sys
import time
import traceback
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np
import rclpy
from diagnostic_msgs.msg import DiagnosticStatus, KeyValue
from rclpy.serialization import serialize_message
from std_msgs.msg import Bool

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from ballbal_ros.nodes.lean_trajectory import LEAN_JOINTS
from ballbal_ros.nodes.message_age import WithAge
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.simulated_messages import SimulatedMessages
from ballbal_ros.robot.loads import LoadChanges
from ballbal_ros.simulation.robot import SimulatedRobot
from helpers.fuzz import spoilt, spoilt_bytes
from helpers.good_messages import good_messages
from helpers.rehearsing import files
from helpers.resident import resident

ASKS_FOR_A_CHANGE = ("emergency_stop", "imu/data", "drive_states", "joint_states")
WARM_UP = 0.3


class Bench:
    """A node under test, with what a robot would do around it."""

    def __init__(self, executable: str, seed: int) -> None:
        module = importlib.import_module(f"ballbal_ros.nodes.{executable}")
        name = "".join(part.title() for part in executable.split("_")) + "Node"
        self.node: Any = getattr(module, name)()
        self.executable, self.rng = executable, random.Random(seed)
        self.robot_files = files()
        self.found: Counter[str] = Counter()
        self.ends: Counter[str] = Counter()
        self.sent: Counter[str] = Counter()
        self.commands = self.reports = 0
        self.subscriptions = {s.topic.lstrip("/"): s for s in self.node.subscriptions}
        self.names = [
            *self.robot_files.description.joint_names,
            *self.robot_files.description.drive.names,
            *LEAN_JOINTS,
        ]
        left_out = self.subscriptions.keys() - good_messages(self.robot_files, 0.0).keys() - {"imu/data"}
        if left_out:
            raise RuntimeError(f"nothing hostile is known for {', '.join(sorted(left_out))}")
        self._set_up()

    def _set_up(self) -> None:
        node, description = self.node, self.robot_files.description
        if self.executable == "simulated_robot":
            return
        self.sensors: dict[str, bytes] = {}
        self._fake = SimulatedMessages(node, description, "imu/data")
        topics = ("clock", "joint_states", "drive_states", "imu/data", "ground_truth")
        self._fake._publishers = [Catcher(self.sensors, topic) for topic in topics]
        self._new_world()
        if self.executable == "balance":
            node._messages.command = self._command
            self._bring_up()
        if self.executable == "arm_compensation":
            node._reports._publisher.publish = lambda message: self._report(message)
            node._balance._to_balance.publish = lambda message: self._acknowledge(message)
            self.deliver("joint_states", self.sensors["joint_states"])
            self._say_balancing("0")

    def _new_world(self) -> None:
        description = self.robot_files.description
        still = np.zeros(description.joint_count)
        self.world = SimulatedRobot(description, self.robot_files.simulation, still, (), 1, None)
        self.effort = np.zeros(len(description.drive.names))
        self._sense()

    def _bring_up(self) -> None:
        """Configure and activate, and let go once it balances."""
        node = self.node
        self.call("emergency_stop", Bool(data=False))
        self.call("support", Bool(data=True))
        # What was announced for later is no load of the robot that comes now.
        node.requests._loads = LoadChanges()
        self.deliver("joint_states", self.sensors["joint_states"])
        for step in (node.on_configure, node.on_activate):
            if "SUCCESS" not in str(step(None)):
                raise RuntimeError(f"balance does not come up: {node.diagnostics.refusals}")
        self.states: dict[str, str] = {}
        for _ in range(3000):
            self.world_goes_on()
            self.states.setdefault(node.loop.guard.state, node.loop.guard.reason)
            if node.loop.guard.state == "balancing":
                break
        else:
            raise RuntimeError(f"balance does not engage: {self.states}")
        self.call("support", Bool(data=False))
        self.world.support = False

    def begin_anew(self) -> None:
        """After a stop or a trip: another robot on its stand, so that most messages meet one that balances."""
        if self.executable != "balance" or self.node.loop.guard.state in ("balancing", "engaging"):
            return
        self.ends[f"{self.node.loop.guard.state}: {self.node.loop.guard.reason[:40]}"] += 1
        self.node.on_deactivate(None)
        self.node.on_cleanup(None)
        self._new_world()
        self._bring_up()

    def _command(self, ns: int, effort: Any) -> None:
        most = self.robot_files.description.drive.effort_limit * (1.0 + 1e-9)
        if not np.isfinite(effort).all() or (np.abs(effort) > most).any():
            self.found[f"command {effort.tolist()}"] += 1
        if effort.any() and not self.node.loop.guard.sends:
            self.found[f"a command in {self.node.loop.guard.state}"] += 1
        self.effort, self.commands = effort.copy(), self.commands + 1

    def _report(self, message: Any) -> None:
        self.reports += message.status[0].name in ("arm_plan", "hand_wrench_plan")

    def _acknowledge(self, message: Any) -> None:
        self._asked = stamp_text(message.header.stamp)

    def _say_balancing(self, answered: str, **values: str) -> None:
        said = DiagnosticStatus(message="balancing")
        pairs = {"plans answered": answered, **{k.replace("_", " "): v for k, v in values.items()}}
        said.values = [KeyValue(key=k, value=v) for k, v in pairs.items()]
        self.call("balance_state", said)

    def _sense(self) -> None:
        self._fake.publish(self.world, round(self.world.time * 1e9))

    def world_goes_on(self) -> None:
        """One good tick."""
        if self.executable == "simulated_robot":
            node = self.node
            stamp = divmod(node._ns, 10**9)
            good = good_messages(self.robot_files, 0.0)["drive_command"]
            good.header.stamp.sec, good.header.stamp.nanosec = stamp
            self.call("drive_command", good)
            return
        count = self.commands
        for topic in ("joint_states", "drive_states", "imu/data"):
            if topic in self.subscriptions:
                self.deliver(topic, self.sensors[topic])
        if self.executable == "balance" and self.commands == count:
            self.found["a tick without an answer"] += 1
        if self.executable == "arm_compensation" and self.node._balance.waits:
            self._say_balancing(str(self.rng.randrange(10**6)), plan=self._asked)
        if not self.world.fell:
            self.world.step(self.effort)
        self._sense()

    def call(self, topic: str, message: Any) -> None:
        """A message as the node gets it."""
        subscription = self.subscriptions[topic]
        self.deliver(topic, serialize_message(message) if subscription.raw else message)

    def deliver(self, topic: str, what: Any) -> None:
        """What the middleware hands over."""
        try:
            callback = self.subscriptions[topic].callback
            # As the events executor calls one that wants to know more of a message.
            callback((what, {"source_timestamp": time.time_ns()}) if isinstance(callback, WithAge) else what)
        except Exception:
            lines = traceback.format_exc().splitlines()
            self.found[f"{topic}: {lines[-1]} at {lines[-3].strip()}"] += 1

    def now(self) -> float:
        return float(self.node._robot.time if self.executable == "simulated_robot" else self.world.time)

    def hostile(self) -> None:
        """One hostile message on any topic that the node hears."""
        rng, good = self.rng, good_messages(self.robot_files, self.now())
        known = [t for t in self.subscriptions if t in good or t == "imu/data"]
        # Sensors and stops lead to a stop soon: mostly what comes should meet a robot that balances.
        topic = rng.choices(
            known, [1 if t in ASKS_FOR_A_CHANGE and self.executable == "balance" else 12 for t in known]
        )[0]
        subscription = self.subscriptions[topic]
        state = self.node.loop.guard.state if self.executable == "balance" else ""
        self.sent[topic] += 1
        if subscription.raw:
            raw = self.sensors[topic] if topic == "imu/data" else serialize_message(self._stamped(good[topic]))
            if rng.random() < 0.5 or topic == "imu/data":
                raw = spoilt_bytes(rng, raw)
            else:
                raw = serialize_message(spoilt(rng, good[topic], self.names))
            self.deliver(topic, raw)
        else:
            self.deliver(topic, spoilt(rng, self._stamped(good[topic]), self.names))
        if self.executable == "balance" and topic not in ASKS_FOR_A_CHANGE and self.node.loop.guard.state != state:
            self.found[f"{topic} led from {state} to {self.node.loop.guard.state}"] += 1

    def _stamped(self, message: Any) -> Any:
        if hasattr(message, "header") and self.rng.random() < 0.3:
            message.header.stamp = to_time(self.rng.choice((0.0, self.now(), self.now() + 1.0)))
        return message

    def answered(self) -> None:
        """Every plan has had its report, every lean plan its answer."""
        if self.executable == "arm_compensation":
            wanted = self.sent["arm_plan"]
            for _ in range(200):
                if not self.node._waiting and not self.node._balance.waits:
                    break
                self.world_goes_on()
                self.node._attend()
            if self.reports < wanted:
                self.found[f"{wanted} plans, {self.reports} reports"] += 1
        if self.executable == "balance":
            notes = self.node.requests.notes
            if int(notes["plans answered"]) != self.sent["lean_plan"]:
                self.found[f"{self.sent['lean_plan']} lean plans, {notes['plans answered']} answers"] += 1


class Catcher:
    """Stands for a publisher: keeps what it is given."""

    def __init__(self, kept: dict[str, bytes], topic: str) -> None:
        self._kept, self._topic = kept, topic

    def publish(self, raw: bytes) -> None:
        self._kept[self._topic] = raw


def main() -> None:
    """Run as the module says."""
    executable, count, seed = sys.argv[1], int(sys.argv[2]), int(sys.argv[3])
    sys.argv = [sys.argv[0], *sys.argv[4:]]
    rclpy.init(args=sys.argv)
    bench = Bench(executable, seed)
    warm = before = 0.0
    for number in range(count):
        bench.hostile()
        if number % 4 == 0:
            bench.world_goes_on()
        if number % 100 == 0:
            bench.begin_anew()
        if number == int(WARM_UP * count):
            before = resident()
    bench.answered()
    warm = resident()
    told = {"found": dict(bench.found), "sent": dict(bench.sent), "grown": warm - before, "resident": warm}
    told["ends"] = dict(bench.ends)
    print(json.dumps(told))
    sys.stdout.flush()
    if hasattr(bench.node, "leave"):
        bench.node.leave()
    bench.node.destroy_node()
    rclpy.try_shutdown()


if __name__ == "__main__":
    main()
