"""Node ``arm_compensation``: a wanted arm motion becomes a lean plan and, once that is taken up, an arm command."""

from __future__ import annotations

import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from rclpy.clock import Clock as RosClock
from rclpy.clock import ClockType
from rclpy.node import Node

from ballbal_ros.balance.guard import BALANCING, ENGAGING
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.node_parameters import ArmCompensationNodeParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.arm_proposals import ArmProposals
from ballbal_ros.nodes.arm_stop import ArmStop
from ballbal_ros.nodes.arm_streaming import ArmStreaming
from ballbal_ros.nodes.balance_dialogue import FOUND_LOAD, BalanceDialogue
from ballbal_ros.nodes.diagnostics import OK, Diagnostics, number_of, values_of
from ballbal_ros.nodes.learned_plans import LearnedPlans
from ballbal_ros.nodes.messages import BILLION, JointReader, load_of, stamp_text, to_time
from ballbal_ros.nodes.motion_memory import Recall, memory_of
from ballbal_ros.nodes.parameters import NodeParameters
from ballbal_ros.nodes.plan_queue import PlanQueue, Sent
from ballbal_ros.nodes.plan_report import PlanReports
from ballbal_ros.nodes.predecessor import Predecessor
from ballbal_ros.nodes.stamp_clock import StampClock
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.parameters import RobotParameters

_ATTEND = 0.05


class ArmCompensationNode(Node):
    """Plans, asks the balance node, and only then lets the arms go. One plan after the other; an emergency stop goes
    first. Started anew while a motion is under way, it goes on from that one where it can be sure of it, else it leaves
    it to its end and begins no second one.
    """

    def __init__(self) -> None:
        super().__init__("arm_compensation", **process.NODE_OPTIONS)
        self._before = Predecessor(time.monotonic())
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
        learned = LearnedPlans(Path(own.learned)) if own.learned else None
        self._schedule = ArmSchedule(self.description, parameters["compensation.yaml"], learned)
        parameters.declare(self._change)
        self._stamp_clock = StampClock(self)
        self._arms = JointReader(self.description.joint_names, "joint_states")
        self._proposals = ArmProposals(self.description, self._schedule)
        self._found_other = False
        self._waiting = PlanQueue()
        to_balance, to_arms = publisher(self, "lean_plan"), publisher(self, "arm_command")
        self._reports = PlanReports(self, self.description.name)
        self._memory = memory_of(self, self.description, own.memory)
        self._recall = Recall(self._memory, self._schedule, self._before, self._arms)
        self._balance = BalanceDialogue(
            self._schedule, self._arms.names, to_balance, to_arms, self._reports, self._memory.keep
        )
        self._stop = ArmStop(
            self._schedule, self._balance, self._reports, self._before, lambda: self._now, lambda: self._recall.done
        )
        self._diagnostics = Diagnostics(self, self.description.name, self._report)
        self._streaming = ArmStreaming(
            self.description, self._schedule, to_balance, to_arms, self._check_stream, self._diagnostics.refuse
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
        inputs.subscribe_with_age("ball_plan", self._on_ball_plan)
        inputs.subscribe_with_age("hand_wrench_plan", self._on_wrench_plan)
        inputs.subscribe("emergency_stop", self._on_emergency_stop)
        inputs.subscribe_with_age("arm_plan", self._on_arm_plan)
        inputs.subscribe("arm_stream", self._streaming.take)

    def _change(self, parameters: NodeParameters) -> None:
        self._schedule.parameters = parameters["compensation.yaml"]
        self._streaming.change()

    def _check_stream(self) -> Array:
        """Where the arms are [n]; raises :class:`PlanRefused` where nothing may be streamed now."""
        self._check_ready("arm_stream")
        if self._balance.waits or self._schedule.busy_until(self._now) is not None:
            raise PlanRefused("arm_stream", "came while a planned motion is in force", "let that one end first")
        if self._schedule.pulled:
            raise PlanRefused("arm_stream", "came while something pulls at a hand", "that is not reckoned with yet")
        # As it was before this node asks for the first time.
        self._has_predecessor()
        return self._arms.position.copy()

    @property
    def _now(self) -> float:
        return float(self.get_clock().now().nanoseconds) / BILLION

    def _on_load(self, message: Any) -> None:
        with self._diagnostics.taking("hand_load"):
            self._schedule.set_load(*load_of(message, self.description), self._now)

    def _on_found_load(self, message: Any) -> None:
        """What balance found in a hand and believes; with stamp zero it is for information."""
        with self._diagnostics.taking(FOUND_LOAD):
            stamp, load = load_of(message, self.description, FOUND_LOAD)
            if stamp > 0.0:
                self._schedule.find_load(stamp, load, self._now)
                self._found_other = True
        self._go_on()

    def _plan_anew(self) -> None:
        """A lean plan that still waits for its time is made again from what was found in the hands meanwhile."""
        if self._balance.waits or not self._found_other or self._stop.under_way:
            return
        self._found_other = False
        try:
            proposal = self._schedule.plan_anew(self._now)
        except BallbalError as error:
            self._reports.refuse(FOUND_LOAD, stamp_text(to_time(self._now)), f"the plan stays as it was: {error}")
            return
        if proposal is not None:
            self._ask(proposal, FOUND_LOAD, stamp_text(to_time(proposal.lean_start)))

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
        with self._diagnostics.taking("odom"):
            self._proposals.see(message)

    def _on_ball_plan(self, message: Any, age: float) -> None:
        self._proposals.put_beside("ball_plan", message if message.points else None, self._earlier(age))

    def _on_wrench_plan(self, message: Any, age: float) -> None:
        """With a stamp it is planned for at once, arms at rest; without, it goes with the next arm plan. Empty: nothing
        pulls any more.
        """
        stamped = bool(message.header.stamp.sec or message.header.stamp.nanosec)
        beside = message if message.points and not stamped else None
        self._proposals.put_beside("hand_wrench_plan", beside, self._earlier(age))
        if not message.points:
            self._schedule.forget_wrenches()
        elif stamped:
            self._queue("hand_wrench_plan", message, age)

    def _on_arm_plan(self, message: Any, age: float) -> None:
        self._queue("arm_plan", message, age)

    def _earlier(self, age: float) -> bool:
        return self._before.may_have_heard(time.monotonic(), age)

    def _queue(self, what: str, message: Any, age: float) -> None:
        """Plan it now, or when the one before has been answered."""
        patience = self._schedule.parameters.answer_timeout
        try:
            self._waiting.add(what, message, time.monotonic(), patience, self._earlier(age))
        except PlanRefused as error:
            self._reports.refuse(what, stamp_text(message.header.stamp), str(error))
            return
        self._go_on()

    def _go_on(self) -> None:
        self._stop.go_on()
        self._plan_anew()
        while not self._balance.waits:
            now = time.monotonic()
            sent = self._waiting.next(now, self._before.settled(now) and self._arms.complete)
            if sent is None:
                return
            self._answer(sent)

    def _answer(self, sent: Sent) -> None:
        stamp = stamp_text(sent.message.header.stamp)
        again = sent.earlier and self._has_predecessor()
        try:
            if again:
                raise self._before.refusal(sent.what)
            proposal = self._proposal(sent.message) if sent.what == "arm_plan" else self._standing(sent.message)
        except BallbalError as error:
            self._reports.refuse(sent.what, stamp, str(error), again)
            return
        if proposal is None:
            self._reports.accept(sent.what, stamp, "nothing moves: nothing to cancel")
        else:
            self._ask(proposal, sent.what, stamp)

    def _has_predecessor(self) -> bool:
        planned = self._schedule.parameters.compensation == "planned"
        return self._before.was_there(self._balance.answered, planned)

    def _proposal(self, message: Any) -> Proposal | None:
        if not message.points:
            proposal = self._schedule.stop(self._now)
            if proposal is None:
                self._before.check_nothing_to_stop("arm_plan", self._now)
            return proposal
        self._check_ready("arm_plan")
        self._streaming.end("an arm_plan came")
        self._streaming.check_over("arm_plan")
        if self._has_predecessor():
            for topic in self._proposals.drop_earlier():
                self._diagnostics.refuse(topic, str(self._before.refusal(topic)))
        return self._proposals.moved(message, self._now, self._arms.position.copy())

    def _standing(self, message: Any) -> Proposal:
        self._check_ready("hand_wrench_plan")
        return self._proposals.pulled(message, self._now, self._arms.position.copy())

    def _check_ready(self, topic: str) -> None:
        if self._stop.on or self._stop.under_way:
            raise PlanRefused(topic, "came during an emergency stop", "end that first, and reset the balance")
        if self._balance.state not in (ENGAGING, BALANCING):
            what = f"came while the balance is {self._balance.state or 'not there'}"
            raise PlanRefused(topic, what, "send it once balance_state says balancing")
        if not self._arms.complete:
            raise PlanRefused(
                "joint_states", f"has not told of {', '.join(self._arms.missing())}", "publish them first"
            )
        self._before.check_over(topic, self._now)

    def _ask(self, proposal: Proposal, what: str, stamp: str) -> None:
        # As it was before this node asks for the first time.
        self._has_predecessor()
        self._balance.ask(proposal, what, stamp)

    def _on_balance_state(self, message: Any) -> None:
        values = values_of(message)
        self._streaming.heard(values)
        self._before.heard(time.monotonic(), message.message)
        self._recall.followed = values.get("plan", "")
        if not self._balance.waits and self._schedule.idle and self._streaming.idle:
            self._before.until = number_of(values.get("plan ends", ""))
        self._balance.hear(message.message, values)
        self._go_on()

    def _attend(self) -> None:
        self._diagnostics.pace.ran_after(_ATTEND)
        self._balance.check_time()
        self._memory.write_down()
        self._recall.look(self._streaming.idle, self._now, self._diagnostics)
        self._go_on()

    def _on_emergency_stop(self, message: Any) -> None:
        """Bring the arms to rest by a planned stop; what waits is refused, and nothing new is taken until a reset."""
        if message.data:
            self._streaming.end("emergency stop")
        self._stop.take(bool(message.data))
        self._go_on()

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        until = self._schedule.busy_until(self._now)
        values: dict[str, object] = {
            "compensation": self._schedule.parameters.compensation,
            "balance": self._balance.state or "not heard of",
            "arms known": bool(np.isfinite(self._arms.position).all()),
            "plans waiting": len(self._waiting) + self._balance.waits,
            **self._streaming.values(),
            **({"motion memory": self._memory.warning} if self._memory.warning else {}),
        }
        if self._stop.on:
            return OK, "emergency stop: no plan is taken", values
        return OK, "idle" if until is None else f"a motion is in force until {until:.3f} s", values


def main() -> None:
    """Run the node."""
    process.main(ArmCompensationNode)


if __name__ == "__main__":
    main()
