"""``plan_report``: the answer to each plan, with what it is predicted to use."""

from __future__ import annotations

from collections.abc import Mapping

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from rclpy.node import Node

from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.nodes.diagnostics import ERROR, OK, key_values
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.topics import publisher

EARLIER = "sent before the start"


class PlanReports:
    """Publishes one report a plan. ``what`` is who asked (arm_plan, emergency_stop), ``stamp`` the stamp that it asked
    with.
    """

    def __init__(self, node: Node, hardware: str) -> None:
        self._node, self._hardware = node, hardware
        self._publisher = publisher(node, "plan_report")

    def refuse(self, what: str, stamp: str, reason: str, earlier: bool = False) -> None:
        """A plan was refused, in one line; nothing moves because of it.

        ``earlier``: it was sent before this node started, and may have been answered by the one before it.
        """
        mark = {EARLIER: "yes"} if earlier else {}
        self._publish(ERROR, what, reason, {"requested": stamp, "accepted": "no", **mark})

    def accept(self, what: str, stamp: str, message: str, values: Mapping[str, object] | None = None) -> None:
        """A plan was accepted."""
        self._publish(OK, what, message, {"requested": stamp, "accepted": "yes", **(values or {})})

    def accept_proposal(self, what: str, stamp: str, proposal: Proposal, load_changes: int) -> None:
        """A plan was accepted and goes ahead: when it starts, and what it will use of each limit."""
        plan = proposal.plan
        values: dict[str, object] = {
            "lean_plan": "none" if plan is None else stamp_text(to_time(proposal.lean_start)),
            "arm_command": "none" if what == "hand_wrench_plan" else stamp_text(to_time(proposal.arms_start)),
            "lead-in s": proposal.arms_start - proposal.lean_start,
            "duration s": proposal.path.duration,
            "load changes": load_changes,
        }
        for use in () if plan is None else plan.uses:
            name = f"{use.name} {use.unit}".strip()
            values[name] = use.value
            values[f"{name} limit"] = use.limit
        if proposal.learned:
            values["learned"] = proposal.learned
        way = "without a lean plan" if plan is None else f"leans from {proposal.lean_start:.3f} s on"
        self.accept(what, stamp, f"{way}, arms move from {proposal.arms_start:.3f} to {proposal.end:.3f} s", values)

    def _publish(self, level: bytes, what: str, message: str, values: Mapping[str, object]) -> None:
        status = DiagnosticStatus(level=level, name=what, message=message, hardware_id=self._hardware)
        status.values = key_values(values)
        report = DiagnosticArray(status=[status])
        report.header.stamp = self._node.get_clock().now().to_msg()
        self._publisher.publish(report)
