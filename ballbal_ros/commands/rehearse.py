"""``ballbal rehearse``: what a plan will do, known before the robot runs it; in-process, without ROS."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Optional

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

from ballbal_ros.commands import options
from ballbal_ros.commands.files import read_robot, write_json
from ballbal_ros.commands.limits import planned_limits
from ballbal_ros.commands.pictures import check_picture, drawing
from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.memory import settle_memory
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.learned_file import read_learned, write_learned
from ballbal_ros.motion.story import Story, read_story
from ballbal_ros.report.run_table import print_runs
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles, Trace, plan_story
from ballbal_ros.simulation.repeating import Repetitions
from ballbal_ros.simulation.run_result import KINDS, RunResult, RunSet
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth, parse_truth


def asked_kinds(asked: Sequence[str] | None) -> tuple[str, ...]:
    """The kinds of compensation asked for, all without any; raises :class:`BallbalError` for an unknown one."""
    for kind in asked or ():
        if kind not in KINDS:
            raise BallbalError("--compensation", f"unknown kind {kind}", nearest(kind, KINDS))
    return tuple(kind for kind in KINDS if kind in asked) if asked else KINDS


def rehearse(
    plan: Path,
    robot: Path,
    kinds: Sequence[str] = KINDS,
    seeds: Sequence[int] = (0,),
    truth: Sequence[str] = (),
    lead_in: float | None = None,
    console: Console | None = None,
    figure: Path | None = None,
    learn: Path | None = None,
) -> RunSet:
    """Run a plan file through planner, loop and simulated robot; with ``figure`` draw the first seed's runs into that
    file. With ``learn`` each planned run is planned with what those before, and that file, have taught; it is written.

    Raises :class:`BallbalError` for wrong input or a refused plan.
    """
    check_picture(figure)
    files = read_robot(robot)
    story = read_story(plan, files.description)
    differences = parse_truth(truth, files.description)
    timeline = Timeline.of(story, files.compensation, lead_in, bool(truth))
    lean_plan: LeanPlan | None = None
    repetitions: Repetitions | None = None
    if learn is not None:
        repetitions = _repetitions(files, story, timeline, differences, learn, console)
    elif "planned" in kinds and story.planned:
        lean_plan = plan_story(files, story, timeline)
    results: list[RunResult] = []
    traces: dict[str, Trace] = {}
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.completed}/{task.total} runs"),
        TimeRemainingColumn(),
    )
    settle_memory()
    with Progress(*columns, console=console, transient=True) as progress:
        task = progress.add_task(story.name, total=len(kinds) * len(seeds))
        for kind in kinds:
            for seed in seeds:
                progress.update(task, description=f"{story.name}: {kind}")
                keep = figure is not None and kind not in traces
                if kind == "planned" and repetitions is not None:
                    lean_plan = repetitions.plan
                    run, trace = repetitions.run(seed, keep)
                else:
                    run, trace = Rehearsal(files, story, kind, timeline, lean_plan, seed, differences).run(keep)
                results.append(run)
                if trace is not None:
                    traces[kind] = trace
                progress.advance(task)
    if learn is not None and repetitions is not None and repetitions.learned is not None:
        write_learned(learn, repetitions.learned)
    if figure is not None:
        _draw(files, story, timeline, traces, figure)
    limits = planned_limits(results, files, lean_plan)
    return RunSet(files.description.name, story.name, "in-process", tuple(results), limits)


def _repetitions(
    files: RobotFiles, story: Story, timeline: Timeline, truth: Truth, file: Path, console: Console | None
) -> Repetitions:
    """The repetitions of a story with what the file has of them; says so where that is for another plan or robot."""
    if not story.planned:
        raise BallbalError("--learn", f"{story.name} has nothing to plan", "learn with a plan that moves something")
    known = read_learned(file) if file.exists() else None
    repetitions = Repetitions(files, story, timeline, truth, known)
    if known is not None and repetitions.learned is None and console is not None:
        console.print(f"{file}: learnt with another model, load or plan: forgotten")
    return repetitions


def _draw(files: RobotFiles, story: Story, timeline: Timeline, traces: dict[str, Trace], figure: Path) -> None:
    title = f"{files.description.name}, plan {story.name}, rehearsed: times from the start of the arms"
    with drawing(figure):
        from ballbal_ros.report.lean_figure import draw_motion

        draw_motion(files.description, story.start_loads, timeline, traces, figure, title)


def rehearse_command(
    plan: Annotated[Path, typer.Argument(help="Plan file, such as config/plans/reach.yaml.")],
    robot: options.Robot = options.ROBOT,
    compensation: options.Compensation = None,
    seed: options.Seed = 0,
    repeat: options.Repeat = 1,
    truth: options.Truth = None,
    lead_in: options.LeadIn = None,
    json_file: options.Json = None,
    figure: Annotated[
        Optional[Path], typer.Option("--figure", help="Picture of the motion: a .png, .svg or .pdf file.")
    ] = None,
    learn: Annotated[
        Optional[Path],
        typer.Option("--learn", help="Plan each run with what those before have taught, kept in this file."),
    ] = None,
) -> None:
    """What a plan will do: ball travel, lean, torque and friction use, beside what it would cost without the plan.

    A good rehearsal is no proof for a real machine, which has its own risk assessment, local codes and licensed
    practice.
    """
    console = Console()
    asked, seeds = asked_kinds(compensation), range(seed, seed + repeat)
    runs = rehearse(plan, robot, asked, seeds, tuple(truth or ()), lead_in, console, figure, learn)
    print_runs(runs, console, learning=learn is not None)
    if json_file is not None:
        write_json(json_file, runs.as_json())
    raise typer.Exit(0 if runs.ok else 1)
