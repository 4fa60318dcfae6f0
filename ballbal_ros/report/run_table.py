"""The table of runs: what each kind of compensation cost, for a person to read."""

from __future__ import annotations

from rich import box
from rich.console import Console
from rich.table import Table

from ballbal_ros.simulation.run_result import KINDS, RunResult, RunSet, median

MEANING = {
    "planned": "lean ahead of the arms, by plan",
    "quasi_static": "lean that balances the measured arms",
    "none": "arms not reckoned with",
    "still": "nothing moves: the noise floor",
}


def print_runs(runs: RunSet, console: Console, learning: bool = False) -> None:
    """Print one row for each kind of compensation (the median where there are several seeds), then the planned runs'
    limits. ``learning``: planned runs follow from each other, and have a row each.
    """
    count = max((sum(1 for r in runs.runs if r.compensation == kind) for kind in KINDS), default=0)
    seeds = "" if count <= 1 or learning else f", median of {count} seeds (ball travel: worst)"
    console.print(f"[bold]{runs.robot}[/bold], plan {runs.plan}, {runs.clock}{seeds}", highlight=False)
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    table.add_column("compensation", no_wrap=True)
    for heading in ("ball peak\nmm", "ball end\nmm", "lean\ndeg", "torque\nN m", "friction\nuse", "× real\ntime"):
        table.add_column(heading, justify="right", no_wrap=True)
    for kind in KINDS:
        chosen = [run for run in runs.runs if run.compensation == kind]
        if learning and kind == "planned":
            for number, run in enumerate(chosen, 1):
                table.add_row(f"{_name([run], kind)}, run {number}", *_cells([run]))
        elif chosen:
            table.add_row(_name(chosen, kind), *_cells(chosen))
    console.print(table)
    for kind in dict.fromkeys(run.compensation for run in runs.runs):
        console.print(f"[dim]{kind:12s} {MEANING[kind]}[/dim]", highlight=False)
    for limit in runs.limits:
        verdict = "[green]ok[/green]    " if limit.ok else "[bold red]beyond[/bold red]"
        value = f"{limit.value:.3g} {limit.unit}".strip()
        console.print(f"{verdict} {limit.name} {value}, at most {limit.limit:.3g}", highlight=False)
    for note in runs.notes:
        console.print(f"[yellow]note[/yellow]   {note}", highlight=False)


def _cells(runs: list[RunResult]) -> list[str]:
    def short(value: float) -> str:
        """Millimetres, with as many digits as tell something."""
        return f"{value:.2f}" if value < 100.0 else f"{value:.0f}"

    def travel(values: list[float]) -> str:
        """The median, mm, and the worst where there are several."""
        text = short(median(values))
        return text if len(values) == 1 else f"{text} ({short(max(values))})"

    return [
        travel([r.ball_travel_peak_mm for r in runs]),
        travel([r.ball_travel_end_mm for r in runs]),
        f"{median([r.lean_peak_deg for r in runs]):.1f}",
        f"{median([r.drive_torque_peak_nm for r in runs]):.1f}",
        f"{median([r.friction_use_peak for r in runs]):.2f}",
        f"{median([r.real_time_factor for r in runs]):.1f}",
    ]


def _name(runs: list[RunResult], kind: str) -> str:
    fallen = sum(run.fell for run in runs)
    if not fallen:
        return kind
    return f"{kind} [bold red]fell[/bold red]" if len(runs) == 1 else f"{kind} [bold red]{fallen} fell[/bold red]"
