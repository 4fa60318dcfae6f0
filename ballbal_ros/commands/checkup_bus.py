"""``ballbal checkup``'s end of the bus: listens for a while, sends nothing."""

from __future__ import annotations

import contextlib
import time
from typing import Any, TypeVar

import rclpy
from rclpy.context import Context
from rclpy.signals import SignalHandlerOptions

from ballbal_ros.commands.checkup_stack import NEEDED, Heard, Told
from ballbal_ros.nodes import process
from ballbal_ros.nodes.diagnostics import values_of
from ballbal_ros.nodes.topics import TOPICS, subscribe, why_unheard

_TURN = 0.05
_TWICE = 2
_DISCOVERY = 1.5


_Ear = TypeVar("_Ear", bound="Ear")


class Ear:
    """A node that hears the diagnostics of one namespace. As a context it leaves the bus at the end."""

    def __init__(self, domain: int, namespace: str) -> None:
        process.stay_on_this_machine()
        self._namespace = namespace
        self._context = Context()
        rclpy.init(context=self._context, domain_id=domain, signal_handler_options=SignalHandlerOptions.NO)
        self.node: Any = rclpy.create_node("ballbal_checkup", context=self._context, namespace=namespace or None)
        self._spinner = process.executor(self._context)
        self._nodes: dict[str, list[Told]] = {}
        subscribe(self.node, "/diagnostics", self._on_diagnostics)
        self._spinner.add_node(self.node)

    def __enter__(self: _Ear) -> _Ear:
        return self

    def __exit__(self, *_: object) -> None:
        for step in (self._spinner.shutdown, self.node.destroy_node, self._context.try_shutdown):
            with contextlib.suppress(Exception):
                step()

    def _on_diagnostics(self, message: Any) -> None:
        for status in message.status:
            space, _, name = status.name.rpartition("/")
            if space == self._namespace and name:
                told = Told(time.monotonic(), int.from_bytes(status.level, "little"), status.message, values_of(status))
                self._nodes.setdefault(name, []).append(told)

    def turn(self) -> None:
        """Take in what has come."""
        self._spinner.spin_once(timeout_sec=_TURN)

    def listen(self, wait: float) -> Heard:
        """Listen for up to ``wait`` s; less where every node has told of itself twice, or nobody is there at all."""
        began = time.monotonic()
        while time.monotonic() - began < wait:
            self.turn()
            there = set(self.present())
            if all(len(self._nodes.get(name, ())) >= _TWICE for name in {*NEEDED, *there & self._nodes.keys()}):
                break
            if time.monotonic() - began > _DISCOVERY and not there and not self._nodes:
                break
        return Heard(
            self._nodes,
            self.present(),
            [f"{i.node_namespace.rstrip('/')}/{i.node_name}" for i in self._publishers("drive_command")],
            self._unheard(),
            time.monotonic() - began,
        )

    def present(self) -> list[str]:
        """Names of the nodes in this namespace, but this one's."""
        here = self._namespace or "/"
        named = self.node.get_node_names_and_namespaces()
        return [name for name, space in named if space == here and name != self.node.get_name()]

    def _publishers(self, topic: str) -> list[Any]:
        return list(self.node.get_publishers_info_by_topic(f"{self._namespace}/{topic}"))

    def _unheard(self) -> dict[str, str]:
        found = {}
        for topic in (name for name in TOPICS if not name.startswith("/")):
            for info in self._publishers(topic):
                why = why_unheard(topic, info.qos_profile)
                if why:
                    found[topic] = f"nothing is heard of {info.node_name}: {why}"
        return found


def listen(domain: int, namespace: str, wait: float) -> Heard:
    """Hear the stack of one domain and namespace; see :meth:`Ear.listen`."""
    with Ear(domain, namespace) as ear:
        return ear.listen(wait)
