"""A second node of a process, spun by a thread of its own: what it answers may take its time, the fast loop goes on."""

from __future__ import annotations

import contextlib
import sys
import threading

import rclpy
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.node import Node

_LOOK = 0.5
# A thread that computes holds the interpreter for 5 ms at a time by default: two and a half ticks of the loop.
_SWITCH = 5e-4


class Beside:
    """The second node, in the namespace of the first, named after it. Its callbacks run in its thread, one at a time.

    ``node`` is there to make services on, before :meth:`start`. The thread has no lower priority than the first on
    purpose: whoever waits for the interpreter would wait for a thread that does not get to run.
    """

    def __init__(self, first: Node, purpose: str) -> None:
        self.node = Node(
            f"{first.get_name()}_{purpose}",
            context=first.context,
            namespace=first.get_namespace(),
            use_global_arguments=False,
            start_parameter_services=False,
            enable_rosout=False,
        )
        self._first = first
        self._ends = threading.Event()
        self._thread = threading.Thread(target=self._run, name=purpose, daemon=True)

    def name_of(self, service: str) -> str:
        """The full name that a service of the first node has."""
        return f"{self._first.get_fully_qualified_name()}/{service}"

    def start(self) -> None:
        """Begin to answer."""
        sys.setswitchinterval(_SWITCH)
        self._thread.start()

    def _run(self) -> None:
        with contextlib.suppress(ExternalShutdownException, KeyboardInterrupt):
            executor = SingleThreadedExecutor(context=self._first.context)
            executor.add_node(self.node)
            while rclpy.ok(context=self._first.context) and not self._ends.is_set():
                executor.spin_once(timeout_sec=_LOOK)
            executor.remove_node(self.node)
            executor.shutdown()

    def leave(self) -> None:
        """End the thread, and take the node down."""
        self._ends.set()
        if self._thread.is_alive():
            self._thread.join(timeout=2.0 * _LOOK + 2.0)
        with contextlib.suppress(Exception):
            self.node.destroy_node()
