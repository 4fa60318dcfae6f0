"""Node ``arm_compensation``: what somebody wants the arms to do becomes a lean plan and, once that is taken up, an arm
command.
"""

from __future__ import annotations

import math
import time
from collections import deque
from collections.abc import Mapping
from typing import Any

import attrs
import numpy as np
from rclpy.clock import Clock as RosClock
from rclpy.clock import ClockType
from rclpy.node import Node

from ballbal_ros.balance.guard import BALANCING, ENGAGING, STOPPING
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.arm_schedule import ArmSchedule, ArmState, Proposal, Wanted
from ballbal_ros.motion.lean_planner import BallMotion, HandWrench
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.node_parameters import ArmCompensationNodeParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.arm_streaming import ArmStreaming
from ballbal_ros.nodes.diagnostics import OK, Diagnostics, number_of, values_of
from ballbal_ros.nodes.lean_trajectory import lean_plan_message
from ballbal_ros.nodes.messages import BILLION, JointReader, load_of, seconds, stamp_text, to_time
from ballbal_ros.nodes.parameters import NodeParameters
from ballbal_ros.nodes.plan_report import PlanReports
from ballbal_ros.nodes.predecessor import LONG_SETTLED, Predecessor
from ballbal_ros.nodes.stamp_clock import StampClock
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.trajectories import (
    ArmWaypoints,
    ball_motion_of,
    hand_wrenches_of,
    path_message,
)
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.parameters import RobotParameters

_ATTEND = 0.05
_MOST_WAITING = 10
_FOUND = "hand_load_estimate"
_FOLLOWING = (ENGAGING, BALANCING, STOPPING)


@attrs.frozen(eq=False)
class _Asked:
    """A proposal that waits for the balance node's acknowledgement; ``what`` asked for it, until ``deadline`` of the
    steady clock.

    ``answered``: how many plans the balance node had answered before.
    """

    proposal: Proposal
    what: str
    stamp: str
    deadline: float
    answered: str


@attrs.frozen(eq=False)
class _Sent:
    """A plan of the topic ``what`` that waits to be answered. By ``deadline``, s of the steady clock, balance and arms
    must be heard of; ``earlier``: it may have been sent before this node started.
    """

    what: str
    message: Any
    deadline: float
    earlier: bool


class ArmCompensationNode(Node):
    """Plans, asks the balance node, and only then lets the arms go. One plan after the other; an emergency stop goes
    first. Started anew while a motion is under way, it leaves that one to its end and begins no second one.
    """

    def __init__(self) -> None:
        super().__init__("arm_compensation", **process.NODE_OPTIONS)
        parameters = NodeParameters(
            self,
            {
                "robot.yaml": RobotParameters,
                "compensation.yaml": CompensationParameters,
                "node": ArmCompensationNodeParameters,
            },
        )
        own: ArmCompensationNodeParameters = parameters["node"]
        self.description = process.describe(self, parameters["robot.yaml"], own.robot_description_wait)
        self._schedule = ArmSchedule(self.description, parameters["compensation.yaml"])
        parameters.declare(self._change)
        self._stamp_clock = StampClock(self)
        self._arms = JointReader(self.description.joint_names, "joint_states")
        self._place = (0.0, 0.0, 0.0)
        self._state, self._answered = "", ""
        self._emergency = False
        self._asked: _Asked | None = None
        self._found_other = False
        self._waiting: deque[_Sent] = deque()
        self._before = Predecessor()
        self._ball_plan: Any = None
        self._wrench_plan: Any = None
        self._to_balance = publisher(self, "lean_plan")
        self._to_arms = publisher(self, "arm_command")
        self._reports = PlanReports(self, self.description.name)
        self._diagnostics = Diagnostics(self, self.description.name, self._report)
        self._streaming = ArmStreaming(
            self.description,
            self._schedule,
            self._to_balance,
            self._to_arms,
            self._check_stream,
            self._diagnostics.refuse,
        )
        self._listen()
        steady = RosClock(clock_type=ClockType.STEADY_TIME)
        self._attending = self.create_timer(_ATTEND, self._attend, clock=steady)

    def _listen(self) -> None:
        inputs = self._diagnostics.inputs
        inputs.subscribe("hand_load", self._on_load)
        inputs.subscribe("hand_load_estimate", self._on_found_load)
        inputs.subscribe("joint_states", self._on_joint_states, raw=True)
        inputs.subscribe("odom", self._on_odom)
        inputs.subscribe("balance_state", self._on_balance_state)
        inputs.subscribe("ball_plan", self._on_ball_plan)
        inputs.subscribe("hand_wrench_plan", self._on_wrench_plan)
        inputs.subscribe("emergency_stop", self._on_emergency_stop)
        inputs.subscribe("arm_plan", self._on_arm_plan)
        inputs.subscribe("arm_stream", self._streaming.take)

    def _change(self, parameters: NodeParameters) -> None:
        self._schedule.parameters = parameters["compensation.yaml"]
        self._streaming.change()

    def _check_stream(self) -> Array:
        """Where the arms are [n]; raises :class:`PlanRefused` where nothing may be streamed now."""
        self._check_ready("arm_stream")
        if self._asked is not None or self._schedule.busy_until(self._now) is not None:
            raise PlanRefused("arm_stream", "came while a planned motion is in force", "let that one end first")
        if self._schedule.pulled:
            raise PlanRefused("arm_stream", "came while something pulls at a hand", "that is not reckoned with yet")
        return self._arms.position.copy()

    @property
    def _now(self) -> float:
        return float(self.get_clock().now().nanoseconds) / BILLION

    def _on_load(self, message: Any) -> None:
        try:
            self._schedule.set_load(*load_of(message, self.description), self._now)
        except BallbalError as error:
            self._diagnostics.refuse("hand_load", str(error))
            return
        self._diagnostics.accept("hand_load")

    def _on_found_load(self, message: Any) -> None:
        """What balance found in a hand and believes; with stamp zero it is for information."""
        try:
            stamp, load = load_of(message, self.description, "hand_load_estimate")
            if stamp > 0.0:
                self._schedule.find_load(stamp, load, self._now)
                self._found_other = True
        except BallbalError as error:
            self._diagnostics.refuse("hand_load_estimate", str(error))
            return
        self._diagnostics.accept("hand_load_estimate")
        self._go_on()

    def _plan_anew(self) -> None:
        """A lean plan that still waits for its time is made again from what was found in the hands meanwhile."""
        if self._asked is not None or not self._found_other:
            return
        self._found_other = False
        try:
            proposal = self._schedule.plan_anew(self._now)
        except BallbalError as error:
            self._reports.refuse(_FOUND, stamp_text(to_time(self._now)), f"the plan stays as it was: {error}")
            return
        if proposal is not None:
            self._ask(proposal, _FOUND, stamp_text(to_time(proposal.lean_start)))

    def _on_joint_states(self, raw: bytes) -> None:
        try:
            if self._arms.read(raw):
                self._stamp_clock.go_to(self._arms.stamp)
        except BallbalError as error:
            self._diagnostics.refuse("joint_states", str(error))
            return
        # Streamed arms go by the joint states' pace: theirs is the time that counts.
        self._streaming.go_on(self._arms.stamp / BILLION, self._arms)

    def _on_odom(self, message: Any) -> None:
        place, turn = message.pose.pose.position, message.pose.pose.orientation
        if not (math.isfinite(place.x + place.y) and abs(math.hypot(turn.x, turn.y, turn.z, turn.w) - 1.0) < 5e-3):
            self._diagnostics.refuse("odom", "odom: a place that is not finite, or no unit quaternion: passed over")
            return
        self._diagnostics.accept("odom")
        self._place = (place.x, place.y, lean_and_heading_from_quat_xyzw(turn.x, turn.y, turn.z, turn.w)[2])

    def _on_ball_plan(self, message: Any) -> None:
        self._ball_plan = message if message.points else None

    def _on_wrench_plan(self, message: Any) -> None:
        """With a stamp it is planned for at once, arms at rest; without, it goes with the next arm plan. Empty: nothing
        pulls any more.
        """
        self._wrench_plan = None
        if not message.points:
            self._schedule.forget_wrenches()
        elif message.header.stamp.sec or message.header.stamp.nanosec:
            self._queue("hand_wrench_plan", message)
        else:
            self._wrench_plan = message

    def _on_arm_plan(self, message: Any) -> None:
        self._queue("arm_plan", message)

    def _queue(self, what: str, message: Any) -> None:
        """Plan it now, or when the one before has been answered."""
        if len(self._waiting) >= _MOST_WAITING:
            error = PlanRefused(what, f"came while {_MOST_WAITING} others wait", "wait for their plan_report")
            self._reports.refuse(what, stamp_text(message.header.stamp), str(error))
            return
        now, before = time.monotonic(), self._before
        earlier = before.may_have_heard(now)
        patience = max(self._schedule.parameters.answer_timeout, LONG_SETTLED if earlier else 0.0)
        self._waiting.append(_Sent(what, message, now + patience, earlier))
        self._go_on()

    def _go_on(self) -> None:
        self._plan_anew()
        while self._waiting and self._asked is None:
            sent, now = self._waiting[0], time.monotonic()
            unknown = not self._before.settled(now) or not self._arms.complete
            if unknown and now < sent.deadline:
                # Balance or arms have not been heard of yet: their messages may be on their way.
                return
            self._waiting.popleft()
            stamp = stamp_text(sent.message.header.stamp)
            try:
                proposal = self._answer(sent)
            except BallbalError as error:
                self._reports.refuse(sent.what, stamp, str(error), sent.earlier and self._has_predecessor())
                continue
            if proposal is None:
                self._reports.accept(sent.what, stamp, "nothing moves: nothing to cancel")
            else:
                self._ask(proposal, sent.what, stamp)

    def _answer(self, sent: _Sent) -> Proposal | None:
        if sent.earlier and self._has_predecessor():
            raise self._before.refusal(sent.what)
        return self._proposal(sent.message) if sent.what == "arm_plan" else self._standing(sent.message)

    def _has_predecessor(self) -> bool:
        planned = self._schedule.parameters.compensation == "planned"
        return self._before.was_there(self._answered, planned)

    def _stop(self, what: str) -> Proposal | None:
        proposal = self._schedule.stop(self._now)
        if proposal is None:
            self._before.check_nothing_to_stop(what, self._now)
        return proposal

    def _proposal(self, message: Any) -> Proposal | None:
        if not message.points:
            return self._stop("arm_plan")
        self._check_ready("arm_plan")
        self._streaming.end("an arm_plan came")
        self._streaming.check_over("arm_plan")
        waypoints = ArmWaypoints.of(message, self.description, "arm_plan")

        def path(state: ArmState) -> ArmPath:
            return waypoints.checked_path(state.position, state.rate, state.acceleration)

        wanted = Wanted(waypoints.start, waypoints.duration, path, self._ball(), self._wrenches())
        return self._schedule.plan(wanted, self._now, self._arms.position.copy())

    def _standing(self, message: Any) -> Proposal:
        """The lean for a pull at the hands while the arms rest."""
        self._check_ready("hand_wrench_plan")
        start = seconds(message.header.stamp)
        if self._schedule.busy_until(start) is not None:
            what = f"begins at {start:.3f} s, while the arms move"
            raise PlanRefused("hand_wrench_plan", what, "send it with stamp 0, before the arm_plan that it goes with")
        wrenches = hand_wrenches_of(message, self.description.parameters.hands.links)
        wanted = Wanted(start, 0.0, lambda state: ArmPath.still(state.position), None, wrenches)
        proposal = self._schedule.plan(wanted, self._now, self._arms.position.copy())
        if proposal.arms_start > start + self._schedule.parameters.planner.step:
            what = f"begins at {start:.3f} s, which is too soon"
            raise PlanRefused("hand_wrench_plan", what, f"give a stamp of {proposal.arms_start:.3f} s or later")
        return proposal

    def _check_ready(self, topic: str) -> None:
        if self._emergency:
            raise PlanRefused(topic, "came during an emergency stop", "end that first, and reset the balance")
        if self._state not in (ENGAGING, BALANCING):
            what = f"came while the balance is {self._state or 'not there'}"
            raise PlanRefused(topic, what, "send it once balance_state says balancing")
        if not self._arms.complete:
            raise PlanRefused(
                "joint_states", f"has not told of {', '.join(self._arms.missing())}", "publish them first"
            )
        self._before.check_over(topic, self._now)

    def _ball(self) -> BallMotion | None:
        """The ball plan that goes with the next arm plan; it is used once."""
        message, self._ball_plan = self._ball_plan, None
        return None if message is None else ball_motion_of(message, self._place)

    def _wrenches(self) -> list[HandWrench]:
        message, self._wrench_plan = self._wrench_plan, None
        return [] if message is None else hand_wrenches_of(message, self.description.parameters.hands.links)

    def _ask(self, proposal: Proposal, what: str, stamp: str) -> None:
        """Without a lean plan nobody has to be asked; otherwise the balance node takes it up first."""
        timeout = self._schedule.parameters.answer_timeout
        asked = _Asked(proposal, what, stamp, time.monotonic() + timeout, self._answered)
        if proposal.plan is None or (what == "emergency_stop" and self._state not in _FOLLOWING):
            self._let_go(asked)
            return
        self._asked = asked
        # As it was before this node asked for the first time.
        self._has_predecessor()
        self._to_balance.publish(lean_plan_message(proposal.plan, to_time(proposal.lean_start)))

    def _let_go(self, asked: _Asked) -> None:
        proposal = asked.proposal
        self._asked = None
        self._schedule.accept(proposal)
        if asked.what not in ("hand_wrench_plan", _FOUND):
            start = to_time(proposal.arms_start)
            self._to_arms.publish(path_message(proposal.path, self.description.joint_names, start))
        self._reports.accept_proposal(asked.what, asked.stamp, proposal, self._schedule.load_changes)
        self._go_on()

    def _on_balance_state(self, message: Any) -> None:
        values = values_of(message)
        self._streaming.heard(values)
        self._state, self._answered = message.message, values.get("plans answered", "")
        self._before.heard(time.monotonic(), self._state)
        asked = self._asked
        if asked is None and self._schedule.idle and self._streaming.idle:
            self._before.until = number_of(values.get("plan ends", ""))
        if asked is None or self._answered == asked.answered:
            self._go_on()
            return
        stamp = stamp_text(to_time(asked.proposal.lean_start))
        # A plan that is to replace another has its stamp: when it is refused, the other's is there still.
        if values.get("refused plan") == stamp:
            self._give_up(values.get("refusal", "refused by the balance node"))
        elif values.get("plan") == stamp:
            self._let_go(asked)

    def _give_up(self, reason: str) -> None:
        asked, self._asked = self._asked, None
        if asked is not None:
            self._reports.refuse(asked.what, asked.stamp, reason)
        self._go_on()

    def _attend(self) -> None:
        self._diagnostics.pace.ran_after(_ATTEND)
        if self._asked is not None and time.monotonic() > self._asked.deadline:
            timeout = self._schedule.parameters.answer_timeout
            what = f"lean_plan: no acknowledgement in balance_state within {timeout:g} s"
            self._give_up(f"{what}; nothing moves: is balance active?")
        self._go_on()

    def _on_emergency_stop(self, message: Any) -> None:
        """Bring the arms to rest by a planned stop; what waits is refused, and nothing new is taken until a reset."""
        began = bool(message.data) and not self._emergency
        self._emergency = bool(message.data)
        if not began:
            return
        self._streaming.end("emergency stop")
        stamp = stamp_text(to_time(self._now))
        if self._asked is not None:
            self._give_up("arm_plan: overtaken by an emergency stop")
        try:
            proposal = self._stop("emergency_stop")
        except BallbalError as error:
            self._reports.refuse("emergency_stop", stamp, str(error))
            return
        if proposal is None:
            self._reports.accept("emergency_stop", stamp, "the arms rest")
        else:
            self._ask(proposal, "emergency_stop", stamp)

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        until = self._schedule.busy_until(self._now)
        values: dict[str, object] = {
            "compensation": self._schedule.parameters.compensation,
            "balance": self._state or "not heard of",
            "arms known": bool(np.isfinite(self._arms.position).all()),
            "plans waiting": len(self._waiting) + (self._asked is not None),
            **self._streaming.values(),
        }
        if self._emergency:
            return OK, "emergency stop: no plan is taken", values
        return OK, "idle" if until is None else f"a motion is in force until {until:.3f} s", values


def main() -> None:
    """Run the node."""
    process.main(ArmCompensationNode)


if __name__ == "__main__":
    main()
