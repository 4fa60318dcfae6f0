"""A plan with what runs of it have taught, where anybody knows of such and it fits; else the plan as it is."""

from __future__ import annotations

from collections.abc import Callable

import attrs

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_mark import PlanMark, plan_mark
from ballbal_ros.motion.plan_request import PlanRequest
from ballbal_ros.motion.repetition import Learned, plan_with_learned
from ballbal_ros.robot.loads import LoadChanges
from ballbal_ros.robot.whole_body import WholeBody

LearnedBy = Callable[[PlanMark], tuple[Learned | None, str]]
"""What runs of the plan with a mark have taught, or None; and in words what that is, or why it is nothing."""


def taught(
    ask: LearnedBy,
    body: WholeBody,
    request: PlanRequest,
    plan: LeanPlan,
    told: LoadChanges,
    now: float,
    parameters: CompensationParameters,
) -> tuple[LeanPlan | None, str]:
    """``plan`` for a request and what the ``body`` believes to hold, made better by what runs have taught, if within
    the limits; None where nothing has, or it doesn't fit. With it, in words, why. ``told``: the loads that somebody
    told of, not those that the robot found, for plans are known again by these; ``now``: the plan's start, s.
    """
    if request.start is not None:
        return None, ""
    said = WholeBody(body.description, told.held_at(now))
    coming = attrs.evolve(request, loads=[(stamp - now, load) for stamp, load in told.after(now)])
    mark = plan_mark(body.description, said.loads.values(), coming, parameters)
    learned, words = ask(mark)
    if learned is None:
        return None, words
    try:
        better = plan_with_learned(learned, said, body, request, plan, parameters)
        better.refuse_beyond_limits("what was learnt")
    except BallbalError as error:
        return None, f"planned without {words}: {error}"
    return better, words
