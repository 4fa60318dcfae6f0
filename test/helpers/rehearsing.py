"""Rehearsals of the demo robot, as the closed-loop tests want them: in-process, so that they don't depend on the
machine.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import cache
from pathlib import Path
from typing import Any

import attrs

from ballbal_ros.commands.files import read_robot
from ballbal_ros.declaration import build, flatten
from ballbal_ros.motion.story import Story, read_story
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles, Trace, plan_story
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from helpers.robots import CONFIG


@cache
def files() -> RobotFiles:
    """The demo robot's four files."""
    return read_robot(CONFIG / "shelver")


def changed(**changes: dict[str, Any]) -> RobotFiles:
    """The demo robot's files with parameters replaced: ``balance={"attitude": "imu"}``, likewise compensation,
    simulation.
    """
    new = {
        name: build(type(getattr(files(), name)), {**flatten(getattr(files(), name)), **values}, name)
        for name, values in changes.items()
    }
    return attrs.evolve(files(), **new)


@cache
def story(name: str) -> Story:
    """A plan of config/plans by its name."""
    return read_story(CONFIG / "plans" / f"{name}.yaml", files().description)


def story_of(text: str, folder: Path) -> Story:
    """A plan given as text."""
    path = folder / "plan.yaml"
    path.write_text(text, encoding="utf-8")
    return read_story(path, files().description)


def rehearsed(
    what: Story,
    kind: str,
    seeds: Iterable[int] = (0,),
    robot: RobotFiles | None = None,
    lead_in: float | None = None,
    truth: Iterable[str] = (),
) -> list[RunResult]:
    """Run a story once for each seed."""
    return [one_run(what, kind, seed, robot, lead_in, truth)[0] for seed in seeds]


def one_run(
    what: Story,
    kind: str,
    seed: int = 0,
    robot: RobotFiles | None = None,
    lead_in: float | None = None,
    truth: Iterable[str] = (),
    trace: bool = False,
) -> tuple[RunResult, Trace | None]:
    """Run a story, and keep what it looked like where ``trace``."""
    of = robot or files()
    truth = tuple(truth)
    timeline = Timeline.of(what, of.compensation, lead_in, bool(truth))
    plan = plan_story(of, what, timeline) if kind == "planned" and what.planned else None
    return Rehearsal(of, what, kind, timeline, plan, seed, parse_truth(truth, of.description)).run(trace)
