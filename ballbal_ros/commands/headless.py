"""``ballbal headless``: a plan run by the whole stack, nodes as processes over the bus, against the simulated robot."""

from __future__ import annotations

import contextlib
import importlib.util
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Annotated, Any, Optional

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn

from ballbal_ros.commands import options
from ballbal_ros.commands.domains import own_domain
from ballbal_ros.commands.files import read_robot, write_json
from ballbal_ros.commands.limits import planned_limits
from ballbal_ros.commands.rehearse import asked_kinds
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.learned_file import read_learned
from ballbal_ros.motion.plan_mark import plan_mark
from ballbal_ros.motion.repetition import Learned
from ballbal_ros.motion.story import Story, read_story
from ballbal_ros.report.run_table import print_runs
from ballbal_ros.simulation.rehearsal import RobotFiles, plan_story, request_of
from ballbal_ros.simulation.run_result import KINDS, RunResult, RunSet
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from ballbal_ros.stack import RobotFolder, checked_namespace

_CLOCKS = {"lock-step": "lock_step", "real-time": "real_time"}
_TIMEOUT = 30.0


def headless(
    plan: Path,
    robot: Path,
    kinds: Sequence[str] = KINDS,
    seeds: Sequence[int] = (0,),
    truth: Sequence[str] = (),
    lead_in: float | None = None,
    clock: str = "lock-step",
    namespace: str = "",
    domain: int | None = None,
    console: Console | None = None,
    learned: Path | None = None,
) -> RunSet:
    """Run a plan file through the stack. Everything is checked, and planned once, before anything starts. ``learned``:
    the file of what rehearsals of the plan have taught, which ``arm_compensation`` plans with.

    Raises :class:`BallbalError` for wrong input or a refused plan, :class:`~ballbal_ros.commands.processes.RunFailed`
    for a run that did not come to its end.
    """
    _check_can_run(clock)
    from ballbal_ros.commands.headless_run import HeadlessRun, HeadlessSetup
    from ballbal_ros.commands.processes import interruptible

    files = read_robot(robot)
    folder = RobotFolder.checked(robot, simulated=True)
    story = read_story(plan, files.description)
    parse_truth(truth, files.description)
    timeline = Timeline.of(story, files.compensation, lead_in, bool(truth))
    known = None if learned is None else read_learned(learned)
    lean_plan = planned_once(files, story, timeline, known) if "planned" in kinds and story.planned else None
    results: list[RunResult] = []
    notes: list[str] = []
    with own_domain(domain) as number, interruptible(), _progress(console, timeline.end) as (progress, task):
        setup = HeadlessSetup(
            folder=folder,
            description=files.description,
            story=story,
            story_file=plan,
            timeline=timeline,
            plan=lean_plan,
            truth=tuple(truth),
            clock=_CLOCKS[clock],
            namespace=checked_namespace(namespace),
            domain=number,
            rate=files.balance.loop.rate,
            timeout=_TIMEOUT,
            learned=learned,
        )
        for kind in kinds:
            for seed in seeds:
                progress.reset(task, description=f"{story.name}: {kind}", completed=0)

                def show(now: Any) -> None:
                    """Put the run's progress on the screen."""
                    progress.update(task, completed=now.time, travel=now.travel, state=now.state)

                run = HeadlessRun(setup, kind, seed)
                results.append(run.run(show))
                notes += run.notes
    limits = planned_limits(results, files, lean_plan)
    return RunSet(files.description.name, story.name, clock, tuple(results), limits, tuple(notes))


def planned_once(files: RobotFiles, story: Story, timeline: Timeline, known: Learned | None) -> LeanPlan:
    """The lean plan that ``arm_compensation`` will make, with what is ``known`` from runs where it fits."""
    mark = plan_mark(files.description, story.start_loads, request_of(files, story, timeline), files.compensation)
    return plan_story(files, story, timeline, learned=known if known is not None and known.mark == mark else None)


def _check_can_run(clock: str) -> None:
    if clock not in _CLOCKS:
        raise BallbalError("--clock", f"is {clock!r}", f"it takes one of {', '.join(_CLOCKS)}")
    if importlib.util.find_spec("rclpy") is None:
        raise BallbalError(
            "rclpy",
            "is not there",
            "source your ROS, or install the headless extra: pip install 'ballbal_ros[headless]'",
        )


@contextlib.contextmanager
def _progress(console: Console | None, end: float) -> Iterator[tuple[Progress, Any]]:
    """A line that lives: which run, simulated time, how far the ball is from where it should be, the guard's state."""
    columns = (
        TextColumn("{task.description:24s}"),
        BarColumn(),
        TextColumn(
            "{task.completed:5.1f} of {task.total:.1f} s   ball {task.fields[travel]:7.2f} mm   {task.fields[state]}"
        ),
    )
    with Progress(*columns, console=console, transient=True) as progress:
        yield progress, progress.add_task("", total=end, travel=0.0, state="")


def headless_command(
    plan: Annotated[Path, typer.Argument(help="Plan file, such as config/plans/shelve.yaml.")],
    robot: options.Robot = options.ROBOT,
    compensation: options.Compensation = None,
    seed: options.Seed = 0,
    repeat: options.Repeat = 1,
    truth: options.Truth = None,
    lead_in: options.LeadIn = None,
    clock: Annotated[
        str, typer.Option("--clock", help="lock-step: as fast as it goes, the same to the bit; real-time.")
    ] = "lock-step",
    namespace: Annotated[str, typer.Option("--namespace", help="ROS namespace of all nodes.")] = "",
    domain: Annotated[
        Optional[int], typer.Option("--domain", min=0, help="ROS domain; ROS_DOMAIN_ID, or one of its own, without it.")
    ] = None,
    json_file: options.Json = None,
    learned: Annotated[
        Optional[Path],
        typer.Option("--learned", help="Plan with what rehearsals have taught (rehearse --learn); a file."),
    ] = None,
) -> None:
    """Run a plan by the whole stack, without a robot: the nodes start as processes and meet a simulated robot, on this
    machine only.

    A good run here is no proof for a real machine, which has its own risk assessment, local codes and licensed
    practice.
    Let nothing real listen in its domain.
    """
    console = Console()
    from ballbal_ros.commands.processes import RunFailed

    try:
        runs = headless(
            plan,
            robot,
            asked_kinds(compensation),
            range(seed, seed + repeat),
            tuple(truth or ()),
            lead_in,
            clock,
            namespace,
            domain,
            console,
            learned,
        )
    except RunFailed as error:
        print(f"ballbal headless: {error}", file=sys.stderr)
        raise typer.Exit(1) from error
    print_runs(runs, console)
    if json_file is not None:
        write_json(json_file, runs.as_json())
    raise typer.Exit(0 if runs.ok else 1)
