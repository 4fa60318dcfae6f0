"""The stack as real processes over a real bus, as the tests in test/ros want it."""

from __future__ import annotations

import contextlib
import ctypes
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import rclpy
from rclpy.context import Context
from rclpy.serialization import deserialize_message
from rclpy.signals import SignalHandlerOptions

from ballbal_ros.commands.processes import Processes, environment
from ballbal_ros.nodes.process import executor
from ballbal_ros.nodes.topics import TOPICS, publisher, subscribe
from ballbal_ros.stack import RobotFolder, headless_stack
from helpers.robots import CONFIG

ROOT = CONFIG.parent
SHELVER = CONFIG / "shelver"
_CAPBSET_DROP, _SYS_NICE = 24, 23
# A short story: the runs of these tests are of a few seconds.
NOD = """\
name: nod
start:
  loads: [{hand: left_hand, mass: 1.0, center: [0.0, 0.0, -0.05]}]
steps:
  - wait: 0.4
  - move: {left_shoulder_pitch: -0.4, right_shoulder_pitch: -0.35}
    during: 0.8
  - wait: 0.4
"""


def environment_of(domain: int) -> dict[str, str]:
    """What a process of a test needs to find this package, in a ROS domain."""
    return {**environment(domain), "PYTHONPATH": os.pathsep.join([str(ROOT), os.environ.get("PYTHONPATH", "")])}


def without_priority() -> None:
    """Have this process, and those that it starts, go before no others, whoever runs it."""
    resource.setrlimit(resource.RLIMIT_RTPRIO, (0, 0))
    # root would be granted it all the same; nobody else may, or need, call this.
    ctypes.CDLL(None).prctl(_CAPBSET_DROP, _SYS_NICE, 0, 0, 0)


def ballbal(
    *words: str, domain: int, stdin: int = subprocess.DEVNULL, first: Callable[[], None] | None = None
) -> subprocess.Popen[str]:
    """Start the command line as a process of its own, which does ``first`` before anything else."""
    return subprocess.Popen(
        [sys.executable, "-m", "ballbal_ros.commands.main", *words],
        env=environment_of(domain),
        cwd=ROOT,
        stdin=stdin,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=first,
    )


def node_process(executable: str, *words: str, domain: int) -> subprocess.Popen[str]:
    """Start one node with the demo robot's files."""
    node = next(n for n in headless_stack(RobotFolder.checked(SHELVER, simulated=True)) if n.executable == executable)
    return subprocess.Popen(
        [*node.command(), *words], env=environment_of(domain), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )


def children_of(pid: int) -> list[int]:
    """All processes that a process has started, and they in turn."""
    with contextlib.suppress(FileNotFoundError):
        own = [int(p) for task in Path(f"/proc/{pid}/task").iterdir() for p in (task / "children").read_text().split()]
        return own + [further for child in own for further in children_of(child)]
    return []


def alive(pid: int) -> bool:
    """Whether a process runs still (one that has ended but was not waited for does not)."""
    with contextlib.suppress(FileNotFoundError, ProcessLookupError):
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    return False


def wait_until(happened: Callable[[], bool], timeout: float, what: str) -> None:
    """Wait for something of another process."""
    until = time.monotonic() + timeout
    while not happened():
        assert time.monotonic() < until, f"{what} did not happen within {timeout} s"
        time.sleep(0.05)


class Listener:
    """A node of the test's own: keeps the newest of each topic, and all of those asked for.

    Messages stay serialised until they are looked at, so that listening costs the stack little.
    """

    def __init__(self, domain: int, namespace: str = "") -> None:
        self.context = self._context = Context()
        rclpy.init(context=self._context, domain_id=domain, signal_handler_options=SignalHandlerOptions.NO)
        self.node = rclpy.create_node("test_listener", context=self._context, namespace=namespace or None)
        self._executor = executor(self._context)
        self._executor.add_node(self.node)
        self._newest: dict[str, bytes] = {}
        self.watched: Processes | None = None

    def close(self) -> None:
        """Leave the bus."""
        self._executor.shutdown()
        self.node.destroy_node()
        self._context.try_shutdown()

    def hear(self, *topics: str) -> None:
        """Keep the newest message of each topic."""
        for topic in topics:
            keep = self._newest.__setitem__
            subscribe(self.node, topic, lambda raw, topic=topic, keep=keep: keep(topic, raw), raw=True)

    def newest(self, topic: str) -> Any:
        """The newest message of a topic that it hears; None before the first."""
        raw = self._newest.get(topic)
        return None if raw is None else deserialize_message(raw, TOPICS[topic][0])

    def record(self, topic: str, raw: bool = False) -> list[Any]:
        """Keep all messages of a topic from now on."""
        kept: list[Any] = []
        subscribe(self.node, topic, kept.append, raw=raw)
        return kept

    def sender(self, topic: str) -> Any:
        """A publisher of a topic of the stack."""
        return publisher(self.node, topic)

    def turn(self, span: float = 0.05) -> None:
        """Take in what comes for a while, s of wall time; a process that is watched and has ended is an error."""
        if self.watched is not None:
            self.watched.check()
        until = time.monotonic() + span
        while True:
            left = until - time.monotonic()
            if left <= 0.0:
                return
            self._executor.spin_once(timeout_sec=left)

    def wait(self, happened: Callable[[], Any], timeout: float = 20.0, what: str = "it") -> Any:
        """Turn until something has happened, and return what it gave."""
        until = time.monotonic() + timeout
        while True:
            found = happened()
            if found:
                return found
            assert time.monotonic() < until, f"{what} did not happen within {timeout} s"
            self.turn(0.02)

    def call(self, kind: type, service: str, request: Any, timeout: float = 20.0) -> Any:
        """Call a service and return its answer."""
        client = self.node.create_client(kind, service)
        self.wait(client.service_is_ready, timeout, f"{service}")
        future = client.call_async(request)
        self.wait(future.done, timeout, f"an answer of {service}")
        return future.result()


@contextlib.contextmanager
def listening(domain: int, namespace: str = "") -> Iterator[Listener]:
    """A listener while the test lasts."""
    listener = Listener(domain, namespace)
    try:
        yield listener
    finally:
        listener.close()


@contextlib.contextmanager
def running_stack(
    domain: int, simulated: dict[str, Any], changes: Sequence[tuple[str, dict[str, Any]]] = ()
) -> Iterator[Processes]:
    """All nodes of the demo robot's stack as processes; ``changes`` are further parameters by executable."""
    with Processes() as processes:
        for node in headless_stack(RobotFolder.checked(SHELVER, simulated=True), simulated=simulated):
            for executable, parameters in changes:
                if node.executable == executable:
                    node = node.with_parameters(**parameters)
            processes.start(node.executable, node.command(), environment_of(domain))
        yield processes
