"""A story rehearsed again and again: each planned run is planned with what those before have taught."""

from __future__ import annotations

import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.plan_mark import plan_mark
from ballbal_ros.motion.repetition import Learned, Record, lacking_in_run, learn
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles, Trace, plan_story, request_of
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth


class _Recorded(Rehearsal):
    """A rehearsal that keeps how far it is from its plan, as the robot itself measures it."""

    def __init__(
        self,
        files: RobotFiles,
        story: Story,
        timeline: Timeline,
        plan: LeanPlan,
        seed: int,
        truth: Truth | None,
        learned: Learned | None,
    ) -> None:
        super().__init__(files, story, "planned", timeline, plan, seed, truth, learned=learned)
        self._deviations: list[tuple[float, ...]] = []

    def answer(self, measured: Measurement | None = None) -> Array:
        """As in a :class:`Rehearsal`."""
        effort = super().answer(measured)
        if self.robot.time >= self.timeline.lean - 1e-9:
            loop, row = self.loop, self.loop.reference.row
            lean, sent = (loop.lean[0] - row[0], loop.lean[1] - row[1]), loop.torque[:2] - row[10:12]
            self._deviations.append((*lean, *loop.controller.estimate[4:6], *sent))
        return effort

    @property
    def record(self) -> Record:
        """The deviations since the lean began."""
        rows = np.array(self._deviations or np.zeros((0, 6)))
        return Record(self.loop.period, rows[:, :2], rows[:, 2:4], rows[:, 4:])


class Repetitions:
    """Runs of one story, one after the other. ``learned`` is what they have taught so far; None before the first."""

    def __init__(
        self,
        files: RobotFiles,
        story: Story,
        timeline: Timeline,
        truth: Truth | None = None,
        learned: Learned | None = None,
    ) -> None:
        """``learned``: from earlier, used where it fits model, loads and plan as they are now."""
        self._files, self._story, self._timeline, self._truth = files, story, timeline, truth
        self._request = request_of(files, story, timeline)
        self._said = WholeBody(files.description, story.start_loads)
        self.mark = plan_mark(files.description, story.start_loads, self._request, files.compensation)
        self.learned = learned if learned is not None and learned.mark == self.mark else None
        self.plan = plan_story(files, story, timeline, learned=self.learned)

    def run(self, seed: int, trace: bool = False, learning: bool = True) -> tuple[RunResult, Trace | None]:
        """The next run; ``learning``: the one after will be planned with what it shows. A fall teaches nothing."""
        files = self._files
        rehearsal = _Recorded(files, self._story, self._timeline, self.plan, seed, self._truth, self.learned)
        result, seen = rehearsal.run(trace)
        if learning and not result.fell and rehearsal.plan is not None:
            lacking = lacking_in_run(self._said, self._request, rehearsal.plan, rehearsal.record)
            self.learned = learn(self.learned, self.mark, lacking, self._request, files.compensation)
            self.plan = plan_story(files, self._story, self._timeline, learned=self.learned)
        return result, seen
