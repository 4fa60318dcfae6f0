"""What the arms do and will do, and the lean that goes with it: one motion after the other, each planned before it
begins.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np

from ballbal_ros.errors import BallbalError, PlanRefused
from ballbal_ros.motion.arm_motion import ArmState, Proposal, Wanted
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import BallMotion, HandWrench, PlanRequest
from ballbal_ros.motion.pulls import joined
from ballbal_ros.motion.spline import ArmPath, FollowedPath, JointPath, check_path
from ballbal_ros.motion.stopping import Handover, Later, Motion, Spliced, stop_path
from ballbal_ros.motion.taught import LearnedBy, taught
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load, LoadChanges
from ballbal_ros.robot.whole_body import WholeBody

_TOPIC = "arm_plan"
_SOON = 1e-9
_ELSEWHERE = 0.05
# Arms come after their command by their servos' lag, and their measurement by the bus: at most this long, s.
_LAG = 0.2
_FAR_AHEAD = 200.0
_STOPS = (1.0, 1.5, 2.0, 3.0)
# Planning takes a time that grows with the motion: this much for each second of it, on a slow machine.
_PLANNING_SHARE = 0.04


class ArmSchedule:
    """Keeps account of the motion in force and plans the next. Pure: it is told what time it is, s.

    A motion becomes the one in force by :meth:`accept` only; a refused one leaves all as it was.
    """

    def __init__(
        self, description: RobotDescription, parameters: CompensationParameters, learned: LearnedBy | None = None
    ) -> None:
        """``learned``: where to ask what runs of a plan have taught."""
        self.description, self.parameters, self._learned = description, parameters, learned
        # What the robot found by itself is in the one, and not in the other.
        self._loads, self._told = LoadChanges(), LoadChanges()
        self._motion: Proposal | None = None
        self._standing: Sequence[HandWrench] = ()

    def set_load(self, stamp: float, load: Load, now: float = -math.inf) -> None:
        """A hand's load from ``stamp``, s, on; raises :class:`BallbalError` where too many come after ``now``."""
        self._loads.add(stamp, load, now)
        self._told.add(stamp, load, now)

    def find_load(self, stamp: float, load: Load, now: float = -math.inf) -> None:
        """What the robot itself found in a hand, and believes from ``stamp``, s, on; nobody told it so. Raises as
        :meth:`set_load` does.
        """
        self._loads.add(stamp, load, now)

    def forget_wrenches(self) -> None:
        """Nothing pulls at a hand any more, for plans to come."""
        self._standing = ()

    def held_at(self, time: float) -> list[Load]:
        """What the hands hold at a time, s, as far as it was told of or found."""
        return list(self._loads.held_at(time + _SOON))

    @property
    def pulled(self) -> bool:
        """Whether a plan in force, or the last one, leaves something that pulls at a hand."""
        return any(np.any(wrench.force[-1]) or np.any(wrench.moment[-1]) for wrench in self._standing)

    @property
    def load_changes(self) -> int:
        """How many load changes it has been told of."""
        return self._told.count

    @property
    def idle(self) -> bool:
        """Whether it has not let any motion go yet."""
        return self._motion is None

    def follows(self, proposal: Proposal) -> bool:
        """Whether a proposal is the motion in force."""
        return self._motion is proposal

    def busy_until(self, now: float) -> float | None:
        """When the arms of the motion in force come to rest, s; None where they rest already."""
        return self._motion.end if self._motion is not None and self._motion.end > now else None

    def arms_at(self, time: float, measured: Array) -> ArmState:
        """Where the arms are commanded to be at a time, s; where no motion says so, as measured [n] and at rest.

        Arms that rest elsewhere than they were commanded to have been moved by somebody else: then the measurement
        holds.
        """
        still = np.zeros(self.description.joint_count)
        if self._motion is None:
            return ArmState(measured.copy(), still, still)
        since = time - self._motion.command_start
        position, rate, acceleration = (a[0] for a in self._motion.command.sample(np.array([since])))
        rests = since >= self._motion.command.duration
        if rests and np.abs(position - measured).max() > _ELSEWHERE:
            return ArmState(measured.copy(), still, still)
        return ArmState(position, rate, acceleration)

    def plan(self, wanted: Wanted, now: float, measured: Array) -> Proposal:
        """Plan a motion; raises :class:`BallbalError` in one line where it can't be done or would go beyond a limit."""
        settings = self.parameters.planner
        earliest = now + settings.allowance
        if wanted.stamp > now + _FAR_AHEAD:
            what = f"starts at {wanted.stamp:.3f} s, and it is {now:.3f} s"
            raise PlanRefused(_TOPIC, what, f"send it at most {_FAR_AHEAD:g} s ahead")
        if wanted.stamp > 0.0:
            lean_start = max(wanted.stamp - settings.lead_in, earliest)
            arms_start = max(wanted.stamp, lean_start)
        else:
            lean_start = earliest + _PLANNING_SHARE * wanted.duration
            arms_start = lean_start + settings.lead_in
        path = wanted.path(self.arms_at(arms_start, measured))
        check_path(path, self.description, _TOPIC)
        return self._propose(lean_start, arms_start, path, wanted)

    def stop(self, now: float, ahead: float | None = None) -> Proposal | None:
        """Plan the arms' way to rest from the motion in force; None where there is nothing to stop, or it ends before
        that.

        It takes ``stop_time`` from ``ahead`` s after ``now`` (``allowance`` without it), or up to three times as long
        where the limits need that.

        Raises
        :class:`PlanRefused` where none is possible: then the motion in force, which has been checked, should end as
        planned.
        """
        start = now + (self.parameters.planner.allowance if ahead is None else ahead)
        if self._motion is None or self._motion.end <= start:
            return None
        state = self.arms_at(start, np.zeros(self.description.joint_count))
        reason: BallbalError | None = None
        for factor in _STOPS:
            time = factor * self.parameters.planner.stop_time
            low, high = self.description.position_low, self.description.position_high
            path = stop_path(state.position, state.rate, state.acceleration, time, low, high)
            try:
                check_path(path, self.description, "stop")
                return self._propose(start, start, path, None)
            except BallbalError as error:
                reason = error
        what = "can't be cut short within the limits" + (f" ({reason.what})" if reason else "")
        raise PlanRefused("stop", what, f"the motion in force ends by itself at {self._motion.end:.3f} s")

    def plan_anew(self, now: float) -> Proposal | None:
        """The motion in force with a lean plan from what is believed by now of the loads; None where there is none, or
        its lean begins within ``allowance`` or from another plan's. Raises as :meth:`plan` does.
        """
        motion = self._motion
        if motion is None or motion.request is None or motion.request.start is not None:
            return None
        start = motion.lean_start
        if start < now + self.parameters.planner.allowance:
            return None
        request = attrs.evolve(motion.request, loads=self._loads_after(start))
        plan, learned = self._answer(request, start, motion.arms_start, _TOPIC)
        return attrs.evolve(motion, plan=plan, request=request, learned=learned)

    def accept(self, proposal: Proposal) -> None:
        """Take a proposal as the motion in force."""
        self._motion, self._standing = proposal, proposal.wrenches

    def take_over(self, motions: Sequence[Motion], now: float, measured: Array) -> bool:
        """Take motions for those in force that another schedule let go of, in its order; False, and nothing is taken,
        where they are over, or the arms are elsewhere than they would be (``measured`` [n]).
        """
        before = self._motion, self._standing
        for motion in motions:
            lean_start, arms_start, path = motion.lean_start, motion.arms_start, motion.path
            command = self._commanded(lean_start, arms_start, path)
            self.accept(Proposal(lean_start, arms_start, path, motion.plan, *command, motion.wrenches))
        if self.busy_until(now) is not None and self._motion is not None:
            since = np.array([now - self._motion.command_start])
            position, rate, _ = (a[0] for a in self._motion.command.sample(since))
            if (np.abs(position - measured) <= _ELSEWHERE + _LAG * np.abs(rate)).all():
                return True
        self._motion, self._standing = before
        return False

    def _commanded(self, lean_start: float, arms_start: float, path: ArmPath) -> tuple[JointPath, float]:
        """What the arms are commanded to do once this path is let go, and from when on, s."""
        motion = self._motion
        if motion is not None and motion.end > lean_start + _SOON:
            return Spliced(motion.command, path, arms_start - motion.command_start), motion.command_start
        return path, arms_start

    def _propose(self, lean_start: float, arms_start: float, path: ArmPath, wanted: Wanted | None) -> Proposal:
        command, command_start = self._commanded(lean_start, arms_start, path)
        plan, request, learned = None, None, ""
        coming = () if wanted is None else wanted.wrenches
        coming = [attrs.evolve(wrench, times=wrench.times + arms_start) for wrench in coming]
        wrenches = joined(self._standing, coming, lean_start)
        if self.parameters.compensation == "planned":
            request = self._request(lean_start, arms_start, (command, command_start), wanted, wrenches)
            plan, learned = self._answer(request, lean_start, arms_start, _TOPIC if wanted is not None else "stop")
        return Proposal(lean_start, arms_start, path, plan, command, command_start, wrenches, request, learned)

    def _request(
        self,
        lean_start: float,
        arms_start: float,
        commanded: tuple[JointPath, float],
        wanted: Wanted | None,
        wrenches: Sequence[HandWrench],
    ) -> PlanRequest:
        command, command_start = commanded
        arm = self.description.parameters.arm
        arms = FollowedPath.of(command, arm.servo, self.description.servo_bandwidth)
        lead_in = command_start - lean_start
        if lead_in < 0.0:
            arms, lead_in = Later(arms, -lead_in), 0.0
        handover = self._handover(lean_start)
        ball = self._ball(wanted, arms_start - lean_start, handover)
        return PlanRequest(
            arms=arms,
            lead_in=lead_in,
            loads=self._loads_after(lean_start),
            ball=ball,
            wrenches=[attrs.evolve(w, times=w.times - lean_start) for w in wrenches],
            start=None if handover is None else handover.start,
        )

    def _loads_after(self, start: float) -> list[tuple[float, Load]]:
        return [(stamp - start, load) for stamp, load in self._loads.after(start + _SOON)]

    def _answer(self, request: PlanRequest, lean_start: float, arms_start: float, topic: str) -> tuple[LeanPlan, str]:
        """The lean plan for a request, with what the hands hold at its start and what runs before have taught, and the
        latter in words; refused beyond the limits.
        """
        now, words = lean_start + _SOON, ""
        body = WholeBody(self.description, self._loads.held_at(now))
        plan, better = plan_lean(body, request, self.parameters), None
        if self._learned is not None:
            better, words = taught(self._learned, body, request, plan, self._told, now, self.parameters)
        if better is None:
            plan.refuse_beyond_limits(topic)
        plan = better or plan
        return attrs.evolve(plan, ball=plan.ball - plan.ball[0], lead_in=arms_start - lean_start), words

    def _handover(self, time: float) -> Handover | None:
        motion = self._motion
        if motion is None or motion.plan is None or time < motion.lean_start + _SOON:
            return None
        return Handover.at(motion.plan, time - motion.lean_start, self.parameters.planner.stop_time)

    def _ball(self, wanted: Wanted | None, lead_in: float, handover: Handover | None) -> BallMotion | None:
        asked = None if wanted is None or wanted.ball is None else wanted.ball
        rolling = None if handover is None else handover.ball
        if asked is not None and rolling is not None:
            raise PlanRefused(
                "ball_plan", "begins while the ball still rolls by another plan", "let that one end first"
            )
        return rolling if asked is None else attrs.evolve(asked, times=asked.times + lead_in)
