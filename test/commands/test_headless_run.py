"""What a run by the wall clock says of the machine it ran on."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from types import SimpleNamespace
from typing import Any

from ballbal_ros.commands.headless_run import HeadlessRun
from ballbal_ros.commands.processes import RunFailed
from ballbal_ros.simulation.timeline import Timeline

TIMELINE = Timeline(story=2.5, lean=2.5, arms=3.0, end=20.0)


def a_run() -> Any:
    setup: Any = SimpleNamespace(timeline=TIMELINE, story=SimpleNamespace(planned=True))
    return HeadlessRun(setup, "planned", 0)


def test_a_robot_that_engages_too_late_is_no_run() -> None:
    """What begins by its stamp would be over, or half over: the run ends, and says what kept it."""
    bus = SimpleNamespace(balances_from=TIMELINE.count_from - 0.1, waited="")
    a_run()._check_start(bus)
    bus.balances_from, bus.waited = 8.74, "ticks come 3 ms late"
    with pytest.raises(RunFailed, match=r"only from 8\.7 s on.*begins at 2\.5 s.*ticks come 3 ms late"):
        a_run()._check_start(bus)


def test_time_that_stood_still_is_noted() -> None:
    """Beyond a hundredth of the run, with how long in all and at once; below, or in lock-step, not."""
    for told, noted in (({}, False), ({"time held s": "0.1"}, False), ({"time held s": "1.4"}, True)):
        run = a_run()
        run._note_held({**told, "time held at once ms": "36"})
        assert bool(run.notes) is noted
        assert not noted or "1.4 s in all, 36 ms at once" in run.notes[0]
