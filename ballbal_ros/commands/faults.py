"""``ballbal faults``: what comes of faults on purpose, held against the table of answers; in-process, without ROS."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any, Optional

import attrs
import typer
from rich import box
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table

from ballbal_ros.commands import options
from ballbal_ros.commands.files import read_robot, write_json
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import read_story
from ballbal_ros.simulation.fault_campaign import run_campaign
from ballbal_ros.simulation.fault_kinds import OUTCOMES
from ballbal_ros.simulation.fault_trial import Trial

_FEWEST, _MOST = 3, 8
_SHOWN = 10


def faults(
    robot: Path,
    plan: Path,
    trials: int = 100,
    seed: int = 0,
    kinds: Sequence[str] = (),
    wheels: Sequence[int] = (3,),
    console: Console | None = None,
) -> list[Trial]:
    """Run a campaign on a robot's folder, faults coming while the plan's arms move; each trial as it ended.

    Raises :class:`BallbalError` for wrong input, an unknown kind or a number of wheels that makes no drive.
    """
    for count in wheels:
        if not _FEWEST <= count <= _MOST:
            raise BallbalError("--wheels", f"is {count}", f"it takes {_FEWEST} to {_MOST}")
    files = read_robot(robot)
    story = read_story(plan, files.description)
    columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed}/{task.total} trials"))
    done: list[Trial] = []
    with Progress(*columns, TimeRemainingColumn(), console=console, transient=True) as progress:
        task = progress.add_task("faults", total=trials)
        for trial in run_campaign(files, story, trials, seed, kinds, wheels):
            done.append(trial)
            progress.update(task, advance=1, description=trial.kind)
    return done


def print_trials(trials: Sequence[Trial], console: Console) -> None:
    """Print fault × outcome with the worst of each kind, and what did not end as the table says."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    table.add_column("fault", no_wrap=True)
    table.add_column("outcome")
    for heading in ("ball\nmm", "effort\nN m", "react\ns", "not as\ntable"):
        table.add_column(heading, justify="right")
    several = len({trial.wheels for trial in trials}) > 1
    for kind, wheels in dict.fromkeys((trial.kind, trial.wheels) for trial in trials):
        name = f"{kind} ({wheels})" if several else kind
        table.add_row(name, *_cells([t for t in trials if (t.kind, t.wheels) == (kind, wheels)]))
    console.print(table)
    console.print(
        "[dim]Worst of each kind: ball travel of those that stood, commanded effort, time to react. The table is that "
        f"of docs/safety.md.{' In brackets: wheels.' if several else ''}[/dim]",
        highlight=False,
    )
    wrong = [trial for trial in trials if not trial.ok]
    for trial in wrong[:_SHOWN]:
        fault = trial.fault
        what = f"at {fault.start:.3f} s for {fault.duration:g} s, size {fault.size:g}, part {fault.which}"
        console.print(
            f"[bold red]trial {trial.number}[/bold red] {trial.kind}, {trial.wheels} wheels, {what}: {trial.why}",
            highlight=False,
        )
    found = f"[bold red]{len(wrong)} not as in the table[/bold red]" if wrong else "[green]all as in the table[/green]"
    console.print(f"{len(trials)} trials: {found}", highlight=False)


def _cells(trials: list[Trial]) -> list[str]:
    counts = [(sum(trial.outcome == outcome for trial in trials), outcome) for outcome in OUTCOMES]
    stood = [trial.ball_travel_mm for trial in trials if trial.outcome != "fell"]
    reacted = [trial.react_s for trial in trials if trial.react_s is not None]
    wrong = sum(not trial.ok for trial in trials)
    return [
        ", ".join(f"{count} {outcome}" for count, outcome in counts if count),
        f"{max(stood):.0f}" if stood else "-",
        f"{max(trial.worst_effort_nm for trial in trials):.1f}",
        f"{max(reacted):.2f}" if reacted else "-",
        f"[bold red]{wrong}[/bold red]" if wrong else "",
    ]


def as_json(robot: str, seed: int, trials: Sequence[Trial]) -> dict[str, Any]:
    """The document that ``--json`` writes."""
    return {
        "robot": robot,
        "seed": seed,
        "trials": [{**attrs.asdict(trial), "ok": trial.ok} for trial in trials],
        "wrong_commands": sum(trial.wrong_commands for trial in trials),
        "ok": all(trial.ok for trial in trials),
    }


def faults_command(
    robot: options.Robot = options.ROBOT,
    plan: Annotated[Path, typer.Option("--plan", help="Plan file; faults come while its arms move.")] = Path(
        "config/plans/reach.yaml"
    ),
    trials: Annotated[int, typer.Option("--trials", min=1, help="How many trials.")] = 100,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of the campaign.")] = 0,
    kinds: Annotated[
        Optional[list[str]],
        typer.Option("--kinds", help="A kind of fault, such as 'imu silent'; repeatable. All without it."),
    ] = None,
    wheels: Annotated[
        Optional[list[int]], typer.Option("--wheels", help="How many wheels the drive has; repeatable. 3 without it.")
    ] = None,
    json_file: options.Json = None,
) -> None:
    """What comes of faults on purpose, each held against what docs/safety.md says of it."""
    console = Console()
    done = faults(robot, plan, trials, seed, tuple(kinds or ()), tuple(wheels or (3,)), console)
    print_trials(done, console)
    if json_file is not None:
        write_json(json_file, as_json(robot.name, seed, done))
    raise typer.Exit(0 if all(trial.ok for trial in done) else 1)
