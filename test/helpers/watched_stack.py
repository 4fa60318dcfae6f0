"""The whole stack in lock-step with a robot's folder of its own, whose files a test edits while it runs."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import rclpy
from builtin_interfaces.msg import Time
from diagnostic_msgs.msg import DiagnosticArray
from rcl_interfaces.msg import Log
from rcl_interfaces.srv import GetParameters, SetParametersAtomically
from rclpy.context import Context
from rclpy.parameter import Parameter, parameter_value_to_python
from rclpy.qos import DurabilityPolicy, QoSProfile
from rclpy.signals import SignalHandlerOptions
from std_srvs.srv import Trigger

from ballbal_ros.commands.bus import Bus
from ballbal_ros.commands.processes import Processes, environment
from ballbal_ros.motion.spline import path_through_waypoints
from ballbal_ros.motion.story import read_story
from ballbal_ros.nodes import process
from ballbal_ros.nodes.diagnostics import values_of
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.trajectories import path_message
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.stack import RobotFolder, headless_stack
from helpers.rehearsing import files
from helpers.robots import CONFIG, reach

TIMEOUT = 30.0


class WatchedStack:
    """Nodes as processes, and a test's end of the bus. As a context it starts all, brings balance up, and ends all."""

    def __init__(self, home: Path, domain: int, plan: str = "still", duration: float = 600.0) -> None:
        self.folder, self.history = home / "shelver", home / "state"
        shutil.copytree(CONFIG / "shelver", self.folder)
        self._domain, self._plan, self._duration = domain, CONFIG / "plans" / f"{plan}.yaml", duration
        self.lines: list[tuple[float, str]] = []
        self.diagnostics: dict[str, dict[str, str]] = {}
        self.processes = Processes()

    def __enter__(self) -> WatchedStack:
        try:
            self._start()
        except BaseException:
            self.processes.stop()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        for step in (self._spinner.shutdown, self._node.destroy_node, self._context.try_shutdown):
            step()
        self.bus.__exit__()
        self.processes.stop()

    def _start(self) -> None:
        self._context = Context()
        rclpy.init(context=self._context, domain_id=self._domain, signal_handler_options=SignalHandlerOptions.NO)
        self._node = rclpy.create_node("test_end", context=self._context)
        self._spinner = process.executor(self._context)
        kept = QoSProfile(depth=1000, durability=DurabilityPolicy.TRANSIENT_LOCAL)
        self._node.create_subscription(Log, "/rosout", self._on_log, kept)
        self._node.create_subscription(DiagnosticArray, "/diagnostics", self._on_diagnostics, 10)
        self._clients: dict[str, Any] = {}
        self._arm_plan, self._swung, self._at_end = publisher(self._node, "arm_plan"), time.monotonic(), True
        self._spinner.add_node(self._node)
        folder = RobotFolder.checked(self.folder, simulated=True)
        simulated = {"duration": self._duration, "answer_timeout": TIMEOUT, "wait_for_plan": self._plan.stem != "still"}
        simulated["plan"] = str(self._plan)
        self.processes.may_end = "simulated_robot"
        for node in headless_stack(folder, simulated=simulated, watch=True):
            if node.executable == "config_watch":
                node = node.with_parameters(history=str(self.history))
            self.processes.start(node.executable, node.command(), environment(self._domain))
        self.bus = Bus(self._domain, "", self.processes, TIMEOUT)
        story = read_story(self._plan, RobotDescription.load(self.folder))
        self.bus.wait_for_nodes()
        self.bus.send_start(story)
        self.bus.bring_up()
        if story.planned:
            timeline = Timeline.of(story, files().compensation)
            self.bus.send_story(story, timeline, files().description.joint_names)
            self.bus.wait_for_report()
        self.wait("config_watch to begin", self._watches)

    def _watches(self) -> bool:
        return self.diagnostics.get("/config_watch", {}).get("message") == "watching"

    def _on_log(self, message: Log) -> None:
        if message.name == "config_watch":
            self.lines.append((time.monotonic(), message.msg))

    def _on_diagnostics(self, message: DiagnosticArray) -> None:
        for status in message.status:
            self.diagnostics[status.name] = {"message": status.message, **values_of(status)}

    def turn(self, seconds: float = 0.02) -> None:
        """Take in what comes for a while."""
        until = time.monotonic() + seconds
        while (left := until - time.monotonic()) > 0.0:
            self._spinner.spin_once(timeout_sec=left)
            self.bus.turn(0.0)

    def wait(self, what: str, happened: Callable[[], bool], timeout: float = TIMEOUT) -> float:
        """Turn until something has happened, and say how long it took, s; fails after the timeout."""
        began = time.monotonic()
        while not happened():
            assert time.monotonic() - began < timeout, f"waited {timeout:g} s for {what}: {self.lines[-3:]}"
            self.turn(0.005)
        return time.monotonic() - began

    def _call(self, kind: type, name: str, request: Any) -> Any:
        client = self._clients.get(name)
        if client is None:
            client = self._clients[name] = self._node.create_client(kind, name)
            self.wait(name, client.service_is_ready)
        future = client.call_async(request)
        self.wait(f"an answer of {name}", future.done)
        return future.result()

    def get(self, node: str, name: str) -> Any:
        """The value that a node has now."""
        (value,) = self._call(GetParameters, f"{node}/get_parameters", GetParameters.Request(names=[name])).values
        return parameter_value_to_python(value)

    def set(self, node: str, values: Mapping[str, float]) -> tuple[bool, str]:
        """Set values on a node itself, as `ros2 param set` does: whether it took them, and its reason."""
        parameters = [Parameter(name, value=value).to_parameter_msg() for name, value in values.items()]
        request = SetParametersAtomically.Request(parameters=parameters)
        result = self._call(SetParametersAtomically, f"{node}/set_parameters_atomically", request).result
        return bool(result.successful), str(result.reason)

    def trigger(self, name: str) -> tuple[bool, str]:
        """Call one of config_watch's services."""
        answer = self._call(Trigger, f"config_watch/{name}", Trigger.Request())
        return bool(answer.success), str(answer.message)

    def replace(self, file: str, old: str, new: str) -> None:
        """Edit a file as editors do: write beside it, and put it in its place by a rename."""
        text = (self.folder / file).read_text(encoding="utf-8")
        assert text.count(old) == 1, (file, old)
        beside = self.folder / f".{file}.new"
        beside.write_text(text.replace(old, new), encoding="utf-8")
        os.replace(beside, self.folder / file)

    def swing_on(self) -> None:
        """Swing the arms of `reach` back, or forth again, once they rest."""
        rest = self.diagnostics.get("/arm_compensation", {}).get("message") == "idle"
        if rest and time.monotonic() - self._swung > 2.5:
            self._swung, self._at_end = time.monotonic(), not self._at_end
            way = (reach().first, reach().last) if self._at_end else (reach().last, reach().first)
            path = path_through_waypoints([0.0, reach().duration], np.stack(way))
            self._arm_plan.publish(path_message(path, files().description.joint_names, Time()))

    def line_with(self, *words: str, after: float = 0.0) -> str:
        """The first line of config_watch's log after a time that holds all the words; "" where there is none."""
        return next((line for at, line in self.lines if at >= after and all(word in line for word in words)), "")
