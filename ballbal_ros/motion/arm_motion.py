"""An arm motion on its way: as it is wanted, and as it is ready to go with the lean that goes with it."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import attrs

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.plan_request import BallMotion, HandWrench, PlanRequest
from ballbal_ros.motion.spline import ArmPath, JointPath
from ballbal_ros.robot.arrays import Array


@attrs.frozen(eq=False)
class ArmState:
    """Positions, rates and accelerations [n] of the arms at one time, as commanded."""

    position: Array
    rate: Array
    acceleration: Array


@attrs.frozen(eq=False)
class Wanted:
    """An arm motion that somebody wants. ``stamp``: when the arms should start, s; 0: as soon as possible.

    ``path`` makes it from where the arms will be then; it takes ``duration`` s. The ball's motion and the outside
    forces are timed from the arms' start; what pulls at a hand at their end goes on in the plans that follow.
    """

    stamp: float
    duration: float
    path: Callable[[ArmState], ArmPath]
    ball: BallMotion | None = None
    wrenches: Sequence[HandWrench] = ()


@attrs.frozen(eq=False)
class Proposal:
    """A motion ready to go: the arms' path from ``arms_start``, s, on, and the lean plan from ``lean_start`` on (or
    none). ``wrenches``: what the world is then planned to exert on the hands, their times as ours. ``request``: what
    the lean plan answers. ``learned``: what runs before have taught it, in words, or why nothing; "" for nothing known.
    """

    lean_start: float
    arms_start: float
    path: ArmPath
    plan: LeanPlan | None
    command: JointPath
    command_start: float
    wrenches: Sequence[HandWrench] = ()
    request: PlanRequest | None = None
    learned: str = ""

    @property
    def end(self) -> float:
        """When the arms come to rest, s."""
        return self.arms_start + self.path.duration
