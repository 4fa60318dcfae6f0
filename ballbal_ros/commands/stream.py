"""``ballbal stream``: what a motion costs that nobody knows further ahead than a delay line holds; in-process."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any, Optional

import attrs
import typer
from rich import box
from rich.console import Console
from rich.table import Table

from ballbal_ros.commands import options
from ballbal_ros.commands.files import read_robot, write_json
from ballbal_ros.commands.limits import planned_limits
from ballbal_ros.commands.pictures import check_picture, drawing
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import read_story
from ballbal_ros.simulation.run_result import LimitCheck, RunResult, median
from ballbal_ros.simulation.streaming import StreamedRehearsal
from ballbal_ros.simulation.truth import parse_truth

DELAYS = (0.0, 0.1, 0.2, 0.3, 0.5)
_LONGEST = 2.0


@attrs.frozen
class StreamedRun:
    """One run at a delay, s (None: arms known by their encoders alone), and the median time of a plan, ms."""

    delay: float | None
    plan_ms: float
    result: RunResult


def stream(
    plan: Path,
    robot: Path,
    delays: Sequence[float | None] = DELAYS,
    seeds: Sequence[int] = (0,),
    truth: Sequence[str] = (),
    latency: float | None = None,
) -> tuple[StreamedRun, ...]:
    """Run a plan file with its arm motion streamed, once for each delay and seed; ``latency`` in place of the
    parameter's, s. Raises :class:`BallbalError` for wrong input.
    """
    for delay in delays:
        if delay is not None and not 0.0 <= delay <= _LONGEST:
            raise BallbalError("--delay", f"is {delay:g} s", f"it takes 0 to {_LONGEST:g} s")
    files = read_robot(robot)
    if latency is not None:
        if not (math.isfinite(latency) and 0.0 <= latency <= 0.5):
            raise BallbalError("--latency", f"is {latency:g} s", "it takes 0 to 0.5 s")
        settings = attrs.evolve(files.compensation.stream, latency=latency)
        files = attrs.evolve(files, compensation=attrs.evolve(files.compensation, stream=settings))
    story, differences = read_story(plan, files.description), parse_truth(truth, files.description)
    if story.ball is not None:
        raise BallbalError(str(plan), "rolls", "stream a plan in which the ball is to stay")
    runs = []
    for delay in delays:
        for seed in seeds:
            run = StreamedRehearsal(files, story, delay or 0.0, seed, differences, measured=delay is None)
            result, _ = run.run()
            runs.append(StreamedRun(delay, 1e3 * median(run.plan_times) if run.plan_times else 0.0, result))
    return tuple(runs)


def delay_text(delay: float | None) -> str:
    """A delay as the table has it."""
    return "measured" if delay is None else f"{delay:g}"


def stream_command(
    plan: Annotated[Path, typer.Argument(help="Plan file, such as config/plans/reach.yaml.")],
    robot: options.Robot = options.ROBOT,
    delay: Annotated[
        Optional[list[float]], typer.Option("--delay", help="Of the delay line, s; repeatable. 0 to 0.5 without it.")
    ] = None,
    measured: Annotated[
        bool, typer.Option("--measured", help="Also with no stream at all: arms known by their encoders alone.")
    ] = False,
    latency: Annotated[
        Optional[float], typer.Option("--latency", help="From what a plan knows to its start, s; else the parameter's.")
    ] = None,
    seed: options.Seed = 0,
    repeat: options.Repeat = 1,
    truth: options.Truth = None,
    json_file: options.Json = None,
    figure: Annotated[
        Optional[Path], typer.Option("--figure", help="Picture of travel against delay: a .png, .svg or .pdf file.")
    ] = None,
) -> None:
    """What a plan's arm motion costs when it is streamed: travel against the delay line's delay.

    A good rehearsal is no proof for a real machine, which has its own risk assessment, local codes and licensed
    practice.
    """
    console = Console()
    check_picture(figure)
    delays: list[float | None] = list(delay or DELAYS)
    runs = stream(
        plan, robot, [*delays, None] if measured else delays, range(seed, seed + repeat), tuple(truth or ()), latency
    )
    limits = planned_limits([run.result for run in runs], read_robot(robot), None)
    _print(runs, limits, plan.stem, console)
    if figure is not None:
        _draw(runs, figure, f"{plan.stem}, streamed")
    ok = all(limit.ok for limit in limits)
    if json_file is not None:
        write_json(json_file, _document(runs, limits, robot, plan, ok))
    raise typer.Exit(0 if ok else 1)


def _print(runs: Sequence[StreamedRun], limits: Sequence[LimitCheck], name: str, console: Console) -> None:
    console.print(f"plan {name}, its arm motion streamed, in-process; worst of the seeds", highlight=False)
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    heads = ("delay\ns", "ball peak\nmm", "ball end\nmm", "lean\ndeg", "torque\nN m", "time of a plan\nms")
    for head in heads:
        table.add_column(head, justify="right", no_wrap=True)
    for delay in dict.fromkeys(run.delay for run in runs):
        same = [run for run in runs if run.delay == delay]
        results = [run.result for run in same]
        fell = " [bold red]fell[/bold red]" if any(result.fell for result in results) else ""
        table.add_row(
            delay_text(delay) + fell,
            f"{max(result.ball_travel_peak_mm for result in results):.1f}",
            f"{max(result.ball_travel_end_mm for result in results):.1f}",
            f"{max(result.lean_peak_deg for result in results):.1f}",
            f"{max(result.drive_torque_peak_nm for result in results):.1f}",
            f"{median([run.plan_ms for run in same]):.0f}",
        )
    console.print(table)
    for limit in limits:
        verdict = "[green]ok[/green]    " if limit.ok else "[bold red]beyond[/bold red]"
        value = f"{limit.value:.3g} {limit.unit}".strip()
        console.print(f"{verdict} {limit.name} {value}, at most {limit.limit:.3g}", highlight=False)


def _draw(runs: Sequence[StreamedRun], path: Path, title: str) -> None:
    points = [(run.delay, run.result.ball_travel_peak_mm) for run in runs if run.delay is not None]
    measured = [run.result.ball_travel_peak_mm for run in runs if run.delay is None]
    with drawing(path):
        from ballbal_ros.report.delay_figure import draw_delays

        draw_delays(points, measured, path, title)


def _document(
    runs: Sequence[StreamedRun], limits: Sequence[LimitCheck], robot: Path, plan: Path, ok: bool
) -> dict[str, Any]:
    return {
        "robot": robot.name,
        "plan": plan.stem,
        "clock": "in-process",
        "runs": [
            {"delay_s": run.delay, "plan_ms": run.plan_ms, **attrs.asdict(run.result), "compensation": "streamed"}
            for run in runs
        ],
        "limits": [{**attrs.asdict(limit), "ok": limit.ok} for limit in limits],
        "ok": ok,
    }
