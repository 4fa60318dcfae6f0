"""When things happen in a run of a story: the same for a rehearsal in-process and for the stack over the bus."""

from __future__ import annotations

import attrs

from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.story import Story

RUN_START = 2.5
"""When the ball's travel begins to count, s: the robot has been let go by its stand and stands still."""

# The ball creeps for some seconds until what the drive must bear is known to a few hundredths of a newton metre.
_FINDING_OUT = 8.0


@attrs.frozen
class Timeline:
    """Times of a run, s: it begins on the stand at 0. ``story`` is time 0 of the plan file; arms begin at ``arms``,
    the lean at ``lean``; the ball's travel counts from ``count_from``.
    """

    story: float
    lean: float
    arms: float
    end: float
    count_from: float = RUN_START

    @classmethod
    def of(
        cls, story: Story, parameters: CompensationParameters, lead_in: float | None = None, differs: bool = False
    ) -> Timeline:
        """Lay a story on the run's time. ``lead_in`` replaces the parameter's; the plan file's first wait is
        prolonged to hold it. A robot that ``differs`` from its model is given time to find out how to stand.
        """
        lead = parameters.planner.lead_in if lead_in is None else lead_in
        first = RUN_START + (_FINDING_OUT if differs else 0.0)
        begin = first + max(0.0, lead - story.arms_start)
        arms = begin + story.arms_start
        return cls(begin, arms - lead, arms, begin + story.duration, first)

    @property
    def lead_in(self) -> float:
        """Time from the start of the lean to the start of the arms, s."""
        return self.arms - self.lean
