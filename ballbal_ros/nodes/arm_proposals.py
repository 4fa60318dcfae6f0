"""From the messages that want something of the arms to proposals: an arm plan with the ball's and the hands' plan that
go with it, or a pull at arms that rest.
"""

from __future__ import annotations

import math
from typing import Any

from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.arm_motion import ArmState, Proposal, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.nodes.messages import seconds
from ballbal_ros.nodes.trajectories import ArmWaypoints, ball_motion_of, hand_wrenches_of
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw
from ballbal_ros.robot.description import RobotDescription


class ArmProposals:
    """Makes proposals with an :class:`ArmSchedule`. Times are stamps, s; arm positions [n], rad.

    ``place``: where the ball is, x and y in ``odom``, m, and the heading, rad.
    """

    def __init__(self, description: RobotDescription, schedule: ArmSchedule) -> None:
        self._description, self._schedule = description, schedule
        self.place = (0.0, 0.0, 0.0)
        self._beside: dict[str, tuple[Any, bool]] = {}

    def see(self, odom: Any) -> None:
        """Where the ball is; raises :class:`BallbalError` for a place that can't be."""
        place, turn = odom.pose.pose.position, odom.pose.pose.orientation
        if not (math.isfinite(place.x + place.y) and abs(math.hypot(turn.x, turn.y, turn.z, turn.w) - 1.0) < 5e-3):
            raise BallbalError("odom", "a place that is not finite, or no unit quaternion", "passed over")
        self.place = (place.x, place.y, lean_and_heading_from_quat_xyzw(turn.x, turn.y, turn.z, turn.w)[2])

    def put_beside(self, topic: str, message: Any, earlier: bool) -> None:
        """Keep a ``ball_plan`` or ``hand_wrench_plan`` for the next arm plan, which uses it up; None: there is none.

        ``earlier``: it was sent before this node started.
        """
        self._beside.pop(topic, None)
        if message is not None:
            self._beside[topic] = message, earlier

    def drop_earlier(self) -> list[str]:
        """Forget what was sent before this node started, and say of which topics that is."""
        dropped = [topic for topic, (_, earlier) in self._beside.items() if earlier]
        for topic in dropped:
            del self._beside[topic]
        return dropped

    def moved(self, message: Any, now: float, arms: Array) -> Proposal:
        """What an arm plan asks for, from ``arms`` where nothing is under way."""
        waypoints = ArmWaypoints.of(message, self._description, "arm_plan")

        def path(state: ArmState) -> ArmPath:
            """The path from where the arms will be, checked."""
            return waypoints.checked_path(state.position, state.rate, state.acceleration)

        ball, _ = self._beside.pop("ball_plan", (None, False))
        motion = None if ball is None else ball_motion_of(ball, self.place)
        pull, _ = self._beside.pop("hand_wrench_plan", (None, False))
        wrenches = [] if pull is None else hand_wrenches_of(pull, self._description.parameters.hands.links)
        return self._schedule.plan(Wanted(waypoints.start, waypoints.duration, path, motion, wrenches), now, arms)

    def pulled(self, message: Any, now: float, arms: Array) -> Proposal:
        """The lean for a pull at the hands while the arms rest."""
        start = seconds(message.header.stamp)
        if self._schedule.busy_until(start) is not None:
            what = f"begins at {start:.3f} s, while the arms move"
            raise PlanRefused("hand_wrench_plan", what, "send it with stamp 0, before the arm_plan that it goes with")
        wrenches = hand_wrenches_of(message, self._description.parameters.hands.links)
        wanted = Wanted(start, 0.0, lambda state: ArmPath.still(state.position), None, wrenches)
        proposal = self._schedule.plan(wanted, now, arms)
        if proposal.arms_start > start + self._schedule.parameters.planner.step:
            what = f"begins at {start:.3f} s, which is too soon"
            raise PlanRefused("hand_wrench_plan", what, f"give a stamp of {proposal.arms_start:.3f} s or later")
        return proposal
