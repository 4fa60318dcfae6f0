"""A loop that gets no time for a tenth of a second and more while the arms move, in-process."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ballbal_ros.balance.guard import STOPPING
from ballbal_ros.simulation.rehearsal import Rehearsal, plan_story
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, story

# The simulated drive's own.
WATCHDOG = 0.05


@pytest.mark.parametrize(("before_arms", "span"), [(0.5, 0.3), (-0.4, 0.15)])
def test_after_a_stall_the_plan_is_followed_on(before_arms: float, span: float) -> None:
    """`reach`; meanwhile the drive holds its torque, then cuts it. It stops under control, and the ball stays within
    30 mm: to forget the plan, as after a clock that jumped, cost 200 mm in the lead-in.
    """
    what = story("reach")
    timeline = Timeline.of(what, files().compensation)
    run = Rehearsal(files(), what, "planned", timeline, plan_story(files(), what, timeline))
    begin, effort, travel = timeline.arms - before_arms, np.zeros(3), 0.0
    station = None
    while run.robot.time < timeline.arms + 1.5:
        now = run.robot.time
        if begin <= now < begin + span:
            effort = effort if now < begin + WATCHDOG else np.zeros(3)
        else:
            effort = run.answer()
        run.robot.step(effort)
        if now >= timeline.count_from:
            here = run.robot.ball_position[:2].copy()
            station = here if station is None else station
            travel = max(travel, 1e3 * math.hypot(*(here - station)))
        assert not run.robot.fell
    assert (run.loop.guard.state, run.loop.guard.reason) == (STOPPING, "clock: stall")
    assert travel <= 30.0
