"""A story rehearsed again and again: each planned run is planned with what those before have taught."""

from __future__ import annotations

from ballbal_ros.motion.repetition import Learned, fingerprint, lacking_in_run, learn
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles, Trace, plan_story, request_of
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth


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
        self.fits = fingerprint(files.description, story.start_loads, self._request, files.compensation)
        self.learned = learned if learned is not None and learned.fits == self.fits else None
        self.plan = plan_story(files, story, timeline, learned=self.learned)

    def run(self, seed: int, trace: bool = False, learning: bool = True) -> tuple[RunResult, Trace | None]:
        """The next run; ``learning``: the one after will be planned with what it shows. A fall teaches nothing."""
        files = self._files
        rehearsal = Rehearsal(
            files, self._story, "planned", self._timeline, self.plan, seed, self._truth, learned=self.learned
        )
        result, seen = rehearsal.run(trace)
        if learning and not result.fell and rehearsal.plan is not None:
            lacking = lacking_in_run(self._said, self._request, rehearsal.plan, rehearsal.record)
            self.learned = learn(self.learned, self.fits, lacking, self._request, files.compensation)
            self.plan = plan_story(files, self._story, self._timeline, learned=self.learned)
        return result, seen
