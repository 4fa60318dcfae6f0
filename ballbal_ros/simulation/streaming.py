"""A rehearsal in which the arms' motion is not planned but streamed: nobody knows it further than the delay line holds.

The arms follow the stream ``delay`` s later; what is in the delay line is the planner's preview. With no delay the arms
are merely measured. Lean plans are made anew every ``stream.interval`` by
:class:`~ballbal_ros.motion.stream.StreamCompensation`, in the run's time at once.
"""

from __future__ import annotations

import time

import attrs
import numpy as np

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.balance.schedule import GainSchedule
from ballbal_ros.motion.story import Story
from ballbal_ros.motion.stream import StreamCompensation
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth

_SAMPLE = 0.01
_SOON = 1e-9


class StreamedRehearsal(Rehearsal):
    """One run of a story whose arm motion is streamed; a load is known once it is there.

    ``plan_times``: how long each plan took to make, s of wall time.
    """

    def __init__(
        self,
        files: RobotFiles,
        story: Story,
        delay: float,
        seed: int = 0,
        truth: Truth | None = None,
        schedule: GainSchedule | None = None,
        measured: bool = False,
    ) -> None:
        """``delay``: of the delay line, s; ``measured``: there is none, and the arms are known from their encoders
        alone; ``schedule`` as :class:`Rehearsal` takes it.
        """
        delay = 0.0 if measured else delay
        timeline = Timeline.of(story, files.compensation, 0.0)
        late = attrs.evolve(timeline, arms=timeline.arms + delay, end=timeline.end + delay)
        super().__init__(files, story, "planned", late, None, seed, truth, schedule)
        self._measured = measured
        self._delay, self._interval = delay, files.compensation.stream.interval
        self._compensation = StreamCompensation(files.description, files.compensation)
        for load in story.start_loads:
            self._compensation.set_load(load)
        self._known = [(c.time + late.story, c.load) for c in story.load_changes if c.announced]
        self._next_sample = self._next_plan = -np.inf
        self.plan_times: list[float] = []

    def _believe(self, load: Load) -> bool:
        believed = super()._believe(load)
        if believed:
            self._compensation.set_load(load)
        return believed

    def _happen(self, now: float) -> None:
        super()._happen(now)
        if self.loop.guard.state != BALANCING:
            return
        while self._known and self._known[0][0] <= now + _SOON:
            self._compensation.set_load(self._known.pop(0)[1])
        if now >= self._next_sample - _SOON:
            self._next_sample = now + _SAMPLE
            self._sample(now)
        if now >= self._next_plan - _SOON:
            self._next_plan = now + self._interval
            began = time.perf_counter()
            made = self._compensation.next(now)
            if made is not None:
                self.plan_times.append(time.perf_counter() - began)
                self.loop.add_plan(*made)

    def _sample(self, now: float) -> None:
        stream = self._compensation.stream
        if self._measured:
            stream.take(now, self.robot.measurement().arm_position)
        else:
            position, rate, _ = self.story.arms.sample(np.array([now + self._delay - self.timeline.arms]))
            stream.take(now + self._delay, position[0], rate[0])
