"""What the balance node is asked for: lean plans, loads, velocities, goals, stops, a reset."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from std_srvs.srv import Trigger

from ballbal_ros.balance.acceptance import check_plan
from ballbal_ros.balance.goal import Goal
from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.nodes.lean_trajectory import lean_plan_of
from ballbal_ros.nodes.messages import BILLION, load_of, seconds, stamp_text
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.loads import Load, LoadChanges

if TYPE_CHECKING:
    from ballbal_ros.nodes.balance import BalanceNode

_VELOCITY_LASTS = BILLION // 2
_FARTHEST = 1e4


class BalanceRequests:
    """Takes requests in, checks them, and hands them to the loop. What is refused is told in ``/diagnostics``."""

    def __init__(self, node: BalanceNode) -> None:
        self._node = node
        self.supported: bool | None = None
        self._answers: dict[str, str] = {}
        self._answered = 0
        self._emergency = False
        self._loads = LoadChanges()
        self._goal: Goal | None = None
        self._velocity_until = -1
        inputs = node.diagnostics.inputs
        inputs.subscribe("hand_load", self._on_load)
        inputs.subscribe("lean_plan", self._on_lean_plan)
        inputs.subscribe("cmd_vel", self._on_velocity)
        inputs.subscribe("goal_pose", self._on_goal)
        inputs.subscribe("emergency_stop", self._on_emergency_stop)
        inputs.subscribe("support", self._on_support)
        node.create_service(Trigger, "~/reset", self._on_reset)

    def begin(self) -> None:
        """The loop starts anew: nothing asked before holds, but an emergency stop does."""
        self._answers.clear()
        self._goal, self._velocity_until = None, -1
        if self._emergency:
            self._stop()

    @property
    def notes(self) -> dict[str, str]:
        """What ``balance_state`` tells of requests: the plan taken up last, or refused and why; how many were
        answered.
        """
        counts = {"plans answered": str(self._answered), "load changes": str(self._loads.count)}
        return {**self._answers, **counts}

    def loads_at(self, now: int) -> tuple[list[Load], list[tuple[float, Load]]]:
        """What the hands hold at ``now``, in ns, and the changes to come."""
        time = now / BILLION + 1e-9
        return self._loads.held_at(time), self._loads.after(time)

    def go_on(self, now: int) -> None:
        """Follow the goal, or the commanded velocity until it is too old; ``now`` in ns."""
        loop = self._node.loop
        if loop is None:
            return
        if self._goal is not None and loop.guard.state == BALANCING:
            reference = loop.reference
            wanted = self._goal.velocity((reference.station[0], reference.station[1]), reference.frame_heading)
            reference.set_velocity(*wanted)
            if wanted == (0.0, 0.0, 0.0):
                self._goal = None
        elif 0 <= self._velocity_until < now:
            self._velocity_until = -1
            loop.reference.set_velocity(0.0, 0.0, 0.0)

    def _refuse(self, topic: str, error: BallbalError) -> None:
        self._node.diagnostics.refuse(topic, str(error))

    def _on_load(self, message: Any) -> None:
        try:
            stamp, load = load_of(message, self._node.description)
            self._loads.add(stamp, load, self._node.ns / BILLION)
        except BallbalError as error:
            self._refuse("hand_load", error)
            return
        self._node.diagnostics.accept("hand_load")
        if self._node.loop is not None:
            self._node.loop.set_load(load, stamp)
        self._node.say_state()

    def _on_lean_plan(self, message: Any) -> None:
        """Take a plan, and acknowledge it by its stamp in ``balance_state``; or say there why not. One without points
        takes back the plan of its stamp, where that waits still.
        """
        node, start = self._node, stamp_text(message.header.stamp)
        if not message.points:
            self._withdraw(seconds(message.header.stamp), start)
            return
        try:
            if node.loop is None or not node.active:
                raise PlanRefused("lean_plan", "came while balance is not active", "activate it first")
            plan = lean_plan_of(message)
            check_plan(plan, seconds(message.header.stamp), max(node.ns, 0) / BILLION, node.loop)
            node.loop.add_plan(seconds(message.header.stamp), plan)
        except BallbalError as error:
            self._refuse("lean_plan", error)
            self._answers.update({"refused plan": start, "refusal": str(error)})
        else:
            node.diagnostics.accept("lean_plan")
            self._answers = {"plan": start, "plan ends": f"{seconds(message.header.stamp) + plan.duration:.3f}"}
            self._goal = None
        self._answered += 1
        node.say_state()

    def _withdraw(self, stamp: float, start: str) -> None:
        loop, now = self._node.loop, max(self._node.ns, 0) / BILLION
        if loop is not None and loop.reference.withdraw(stamp, now):
            if self._answers.get("plan") == start:
                del self._answers["plan"], self._answers["plan ends"]
            self._node.diagnostics.accept("lean_plan")
        else:
            what = f"takes back the plan of {start}, and none of that stamp waits"
            self._refuse("lean_plan", PlanRefused("lean_plan", what, "one that has begun goes on"))
        self._answered += 1
        self._node.say_state()

    def _loop_that_balances(self, topic: str) -> BalanceLoop | None:
        loop = self._node.loop
        if loop is not None and self._node.active and loop.guard.state == BALANCING:
            return loop
        self._refuse(
            topic, BallbalError(topic, "came while it does not balance", "wait for balance_state to say balancing")
        )
        return None

    def _on_velocity(self, message: Any) -> None:
        twist, frame = message.twist, message.header.frame_id
        wanted = (twist.linear.x, twist.linear.y, twist.angular.z)
        limits = self._node.description.parameters.limits
        loop = self._loop_that_balances("cmd_vel")
        if loop is None:
            return
        within = math.hypot(wanted[0], wanted[1]) <= limits.ball_speed and abs(wanted[2]) <= limits.heading_rate
        if frame not in ("", "base_footprint") or not within:
            most = f"at most {limits.ball_speed:g} m/s and {limits.heading_rate:g} rad/s"
            what = f"is {wanted} in frame {frame!r}"
            self._refuse("cmd_vel", BallbalError("cmd_vel", what, f"it takes base_footprint and {most}"))
            return
        self._node.diagnostics.accept("cmd_vel")
        self._goal, self._velocity_until = None, self._node.ns + _VELOCITY_LASTS
        loop.reference.set_velocity(*wanted)

    def _on_goal(self, message: Any) -> None:
        place, turn, frame = message.pose.position, message.pose.orientation, message.header.frame_id
        values = (place.x, place.y, turn.x, turn.y, turn.z, turn.w)
        if self._loop_that_balances("goal_pose") is None:
            return
        far = not math.hypot(place.x, place.y) <= _FARTHEST
        if frame != "odom" or far or not abs(sum(v * v for v in values[2:]) - 1.0) <= 1e-2:
            what = f"is {values} in frame {frame!r}"
            remedy = f"it takes a place within {_FARTHEST:g} m and a unit quaternion in odom"
            self._refuse("goal_pose", BallbalError("goal_pose", what, remedy))
            return
        self._node.diagnostics.accept("goal_pose")
        self._goal = Goal(place.x, place.y, lean_and_heading_from_quat_xyzw(turn.x, turn.y, turn.z, turn.w)[2])

    def _on_support(self, message: Any) -> None:
        self.supported = bool(message.data)
        if self._node.loop is not None:
            self._node.loop.supported = bool(message.data)

    def _on_emergency_stop(self, message: Any) -> None:
        """Latched: false alone does not end it, a person's reset does."""
        self._emergency = bool(message.data)
        if self._emergency:
            self._stop()
            self._node.say_state()

    def _stop(self) -> None:
        self._goal, self._velocity_until = None, -1
        if self._node.loop is not None:
            self._node.loop.stop("emergency stop")

    def _on_reset(self, _: Any, response: Any) -> Any:
        loop = self._node.loop
        if loop is None or self._emergency:
            response.success = False
            response.message = "emergency_stop is still true: release it first" if self._emergency else "not configured"
            return response
        there = loop.reset()
        self._node.say_state()
        told = "it engages by itself once it is upright and still" if there else f"nothing to reset: {loop.guard.state}"
        response.success, response.message = True, told
        return response
