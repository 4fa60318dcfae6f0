"""A process beside the balance node's that checks and designs gains, so that the loop keeps its interpreter to itself.

In a thread of the same process the check, a tenth of a second of work, would hold ticks up for milliseconds. A
request is a line of JSON; the answer is a line of JSON and, where there are gains, their numbers as bytes. The child
(``python -m ballbal_ros.nodes.designer``) needs no ROS, and ends when its standard input does.
"""

from __future__ import annotations

import contextlib
import json
import os
import select
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Mapping
from typing import Any

import attrs
import numpy as np

from ballbal_ros.balance.changeover import PreparedChange, prepare
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.schedule import GainSchedule, PostureRange
from ballbal_ros.declaration import build, flatten
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.robot.whole_body import Posture

_TIMEOUT = 10.0
_CHUNK = 1 << 16


class Designer:
    """Prepares changes of parameters in a process of its own, started anew should it have ended.

    :meth:`start` may be called from any thread, the rest from one.
    """

    def __init__(self, description: RobotDescription, where: str) -> None:
        """``where``: how refusals name the parameter file."""
        self._description, self._where = description, where
        self._child: subprocess.Popen[bytes] | None = None
        self._starting = threading.Lock()

    def start(self) -> None:
        """Start the process, if it does not run. It takes a second until it can answer: the sooner the better."""
        with self._starting:
            if self._child is None or self._child.poll() is not None:
                self.leave()
                self._start()

    def _start(self) -> None:
        self._child = subprocess.Popen(
            [sys.executable, "-m", __name__],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
        )
        robot = flatten(self._description.parameters)
        self._send({"robot": robot, "urdf": self._description.urdf_text, "where": self._where})

    def prepare(
        self, reach: PostureRange, old: BalanceParameters, new: BalanceParameters, posture: Posture
    ) -> PreparedChange:
        """What :func:`ballbal_ros.balance.changeover.prepare` gives or raises; :class:`BallbalError` also where the
        process does not answer within 10 s.
        """
        self.start()
        body = [posture.mass, posture.center.tolist(), posture.inertia.tolist()]
        self._send({"reach": attrs.asdict(reach), "old": flatten(old), "new": flatten(new), "posture": body})
        until = time.monotonic() + _TIMEOUT
        answer = b""
        while b"\n" not in answer:
            answer += self._read(until)
        line, _, numbers = answer.partition(b"\n")
        try:
            head = json.loads(line)
        except ValueError as error:
            # Whatever follows can't be told from an answer any more.
            raise self._lost("says what is no answer") from error
        if "refused" in head:
            raise BallbalError(*head["refused"])
        while len(numbers) < head["size"]:
            numbers += self._read(until)
        if not head["size"]:
            return PreparedChange(new, None)
        return PreparedChange(new, GainSchedule.unpacked(head["schedule"], numbers), head["margins"])

    def _send(self, request: Mapping[str, Any]) -> None:
        child = self._child
        if child is None or child.stdin is None:
            raise self._lost("does not run")
        try:
            child.stdin.write(json.dumps(request).encode() + b"\n")
            child.stdin.flush()
        except OSError as error:
            raise self._lost("has ended") from error

    def _read(self, until: float) -> bytes:
        child = self._child
        if child is None or child.stdout is None:
            raise self._lost("does not run")
        ready, _, _ = select.select([child.stdout], [], [], max(0.0, until - time.monotonic()))
        if not ready:
            raise self._lost(f"does not answer within {_TIMEOUT:g} s")
        part = os.read(child.stdout.fileno(), _CHUNK)
        if not part:
            raise self._lost("has ended")
        return part

    def _lost(self, how: str) -> BallbalError:
        """What it answers later belongs to nobody: it is started anew the next time."""
        self.leave()
        return BallbalError(self._where, f"can't be checked: the process that designs gains {how}", "set it again")

    def leave(self) -> None:
        """End the process."""
        child, self._child = self._child, None
        if child is None:
            return
        for pipe in (child.stdin, child.stdout):
            with contextlib.suppress(OSError):
                if pipe is not None:
                    pipe.close()
        try:
            child.wait(timeout=1.0)
        except subprocess.TimeoutExpired:
            child.kill()
            child.wait()


def answered(request: Mapping[str, Any], description: RobotDescription, where: str) -> bytes:
    """The child's answer to one request."""
    old, new = (build(BalanceParameters, request[which], where) for which in ("old", "new"))
    mass, center, inertia = request["posture"]
    posture = Posture(float(mass), np.array(center), np.array(inertia))
    try:
        prepared = prepare(PostureRange.of_numbers(request["reach"]), description, old, new, posture, where)
    except BallbalError as error:
        return json.dumps({"refused": [error.where, error.what, error.remedy]}).encode() + b"\n"
    if prepared.schedule is None:
        return json.dumps({"size": 0}).encode() + b"\n"
    head, numbers = prepared.schedule.pack()
    answer = {"size": len(numbers), "schedule": head, "margins": prepared.margins}
    return json.dumps(answer).encode() + b"\n" + numbers


def main() -> None:
    """Answer requests from standard input until it ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    with contextlib.suppress(OSError, AttributeError):
        # The loop's priority is not for this.
        os.sched_setscheduler(0, os.SCHED_OTHER, os.sched_param(0))
    robot = json.loads(sys.stdin.buffer.readline())
    where = str(robot["where"])
    parameters = build(RobotParameters, robot["robot"], "robot.yaml")
    description = RobotDescription.from_urdf(parameters, robot["urdf"], "robot_description", "robot.yaml")
    for line in sys.stdin.buffer:
        sys.stdout.buffer.write(answered(json.loads(line), description, where))
        sys.stdout.buffer.flush()


if __name__ == "__main__":
    main()
