"""What ``arm_compensation`` let go of, kept in a file: the one that is started anew knows the motion in force by it.

What it published is gone with it, as the middleware keeps messages for late joiners only as long as their sender lives.
"""

from __future__ import annotations

import json
import math
import os
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import attrs
import numpy as np
from rclpy.node import Node
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.plan_request import HandWrench
from ballbal_ros.motion.stopping import Motion
from ballbal_ros.nodes.diagnostics import Diagnostics
from ballbal_ros.nodes.lean_trajectory import lean_plan_message, lean_plan_of
from ballbal_ros.nodes.messages import JointReader, seconds, stamp_text, to_duration, to_time
from ballbal_ros.nodes.parameters import robot_file
from ballbal_ros.nodes.predecessor import Predecessor
from ballbal_ros.nodes.trajectories import ArmWaypoints, path_message
from ballbal_ros.parameter_history import state_folder, write_whole
from ballbal_ros.robot.description import RobotDescription

_LARGEST = 50_000_000
_TOPIC = "motion memory"


class MotionMemory:
    """Keeps the motions that are not over yet, and gives them back where they are still those in force.

    ``file``: where; ``balance`` says which balance node is on the bus: what another one had taken up is of no use.
    ``warning``: why nothing could be kept, "" for no reason.
    """

    def __init__(self, description: RobotDescription, file: Path, balance: Callable[[], str]) -> None:
        self._description, self._file, self._balance = description, file, balance
        self._kept: list[Proposal | Motion] = []
        self._new = False
        self.warning = ""

    def keep(self, proposal: Proposal) -> None:
        """A motion has been let go. One without a lean plan is not kept: nobody could say later whether it is in
        force.
        """
        self._kept = [motion for motion in self._kept if motion.end > proposal.lean_start]
        self._kept.append(proposal)
        if proposal.plan is None:
            self._kept.clear()
        self._new = True

    def write_down(self) -> None:
        """Write what is new: not in a message's callback, which has no business with files."""
        if not self._new:
            return
        self._new = False
        motions = [_as_data(motion, self._description.joint_names) for motion in self._kept]
        try:
            self._file.parent.mkdir(parents=True, exist_ok=True)
            write_whole(self._file, json.dumps({"balance": self._balance(), "motions": motions}))
        except OSError as error:
            why = f"can't be written ({error.strerror})"
            self.warning = f"{self._file} {why}: after a restart a motion under way can't be cut short"
        else:
            self.warning = ""

    def recall(self, plan: str) -> list[Motion]:
        """The motions that the node before this one let go of, in order, where ``plan``, the stamp of what the balance
        node follows, is the last one's; none where it is not, or another balance node took it up.

        Raises :class:`BallbalError` where the file can't be read.
        """
        if not plan or not self._file.is_file():
            return []
        if self._file.stat().st_size > _LARGEST:
            raise BallbalError(_TOPIC, f"{self._file} has {self._file.stat().st_size} bytes", "take it away")
        try:
            data = json.loads(self._file.read_text(encoding="utf-8"))
            if data["balance"] != self._balance() or not data["balance"]:
                return []
            motions = [_from_data(entry, self._description) for entry in data["motions"]]
        except (OSError, ValueError, KeyError, TypeError, AttributeError, AssertionError) as error:
            raise BallbalError(_TOPIC, f"{self._file} can't be read ({error})", "it is left alone") from error
        if not motions or stamp_text(to_time(motions[-1].lean_start)) != plan:
            return []
        # Should this node end, too, while they are under way.
        self._kept = list(motions)
        return motions


class Recall:
    """Goes on, once, from the motion that the node before let go of. ``followed``: the stamp of the plan that the
    balance node follows; ``done``: whether it has looked.
    """

    def __init__(self, memory: MotionMemory, schedule: ArmSchedule, before: Predecessor, arms: JointReader) -> None:
        self._memory, self._schedule, self._before, self._arms = memory, schedule, before, arms
        self.done, self.followed = False, ""

    def look(self, idle: bool, now: float, diagnostics: Diagnostics) -> None:
        """Look, if all that is kept for late joiners is here and nothing moves yet (``idle``: nothing is streamed);
        ``now`` is the stamp, s. A file that can't be read is told of in ``diagnostics``.
        """
        if self.done or not (self._before.settled(time.monotonic()) and self._arms.complete):
            return
        self.done = True
        if not self._schedule.idle or not idle:
            return
        with diagnostics.taking(_TOPIC):
            motions = self._memory.recall(self.followed)
            if motions and self._schedule.take_over(motions, now, self._arms.position):
                self._before.until = 0.0


def memory_of(node: Node, description: RobotDescription, file: str) -> MotionMemory:
    """A node's memory: in ``file``, or, where that is empty, in one of its ROS domain and namespace among the robot's
    state.
    """
    space = node.get_namespace().rstrip("/").replace("/", "_")
    name = f"motion_{node.context.get_domain_id()}{space}.json"
    kept = Path(file).expanduser() if file else state_folder(robot_file().resolve().parent, os.environ) / name

    def balance() -> str:
        """The balance node's own number: that of another one, or of the same started anew, differs."""
        found = node.get_publishers_info_by_topic("balance_state")
        return "+".join(sorted(bytes(end.endpoint_gid).hex() for end in found))

    return MotionMemory(description, kept, balance)


def _as_data(motion: Proposal | Motion, names: Sequence[str]) -> dict[str, Any]:
    assert motion.plan is not None
    return {
        "lean_plan": _message_data(lean_plan_message(motion.plan, to_time(motion.lean_start))),
        "arm_command": _message_data(path_message(motion.path, names, to_time(motion.arms_start))),
        "wrenches": [{k: np.asarray(v).tolist() for k, v in attrs.asdict(w).items()} for w in motion.wrenches],
    }


def _message_data(message: JointTrajectory) -> dict[str, Any]:
    points = [
        [seconds(p.time_from_start), list(p.positions), list(p.velocities), list(p.accelerations), list(p.effort)]
        for p in message.points
    ]
    return {"start": seconds(message.header.stamp), "joints": list(message.joint_names), "points": points}


def _from_data(data: dict[str, Any], description: RobotDescription) -> Motion:
    """One motion, checked as its messages are where they come; raises what a reader of foreign data may."""
    lean, arms = _message(data["lean_plan"]), _message(data["arm_command"])
    still = np.zeros(description.joint_count)
    path = ArmWaypoints.of(arms, description, "arm_command").path(still, still, still)
    wrenches = [
        HandWrench(str(w["hand"]), *(np.array(w[key], float) for key in ("times", "force", "moment")))
        for w in data["wrenches"]
    ]
    if not all(np.isfinite(part).all() for w in wrenches for part in (w.times, w.force, w.moment)):
        raise ValueError("a force is not finite")
    lean_start, arms_start = (float(data[key]["start"]) for key in ("lean_plan", "arm_command"))
    return Motion(lean_start, arms_start, path, lean_plan_of(lean), wrenches)


def _message(data: dict[str, Any]) -> JointTrajectory:
    start = float(data["start"])
    if not 0.0 <= start < 2.0**31 or not math.isfinite(start):
        raise ValueError(f"starts at {start}")
    message = JointTrajectory(joint_names=[str(name) for name in data["joints"]])
    message.header.stamp = to_time(start)
    for since, positions, velocities, accelerations, effort in data["points"]:
        message.points.append(
            JointTrajectoryPoint(
                positions=positions,
                velocities=velocities,
                accelerations=accelerations,
                effort=effort,
                time_from_start=to_duration(float(since)),
            )
        )
    return message
