"""What weighing found, for a person to read."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich import box
from rich.console import Console
from rich.table import Table

from ballbal_ros.simulation.run_result import RunResult, median
from ballbal_ros.weighing.findings import Finding
from ballbal_ros.weighing.servo import Servo


def print_findings(findings: Sequence[Finding], unknown: Sequence[str], console: Console) -> None:
    """One row for each number that the data have told, then those that they have not. ``error``: standard error;
    ``before``: standard deviation before weighing.
    """
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    table.add_column("found", no_wrap=True)
    for heading in ("drawn", "weighed", "error", "before", "unit"):
        table.add_column(heading, justify="right", no_wrap=True)
    for finding in findings:
        if finding.told:
            numbers = (finding.drawn, finding.found, finding.error, finding.before)
            table.add_row(finding.name, *(_short(number) for number in numbers), finding.unit)
    console.print(table)
    meaning = "first moment of what turns with it, all it carries drawn in to its next joint"
    console.print(f"[dim]<link> x, y, z: {meaning}[/dim]", highlight=False)
    left = [finding.name for finding in findings if not finding.told]
    if left:
        console.print(f"hardly told better than the drawing does: {', '.join(left)}", highlight=False)
    console.print("what these data can't tell apart:", highlight=False)
    for sentence in unknown:
        console.print(f"  - {sentence}", highlight=False)


def print_servo(servo: Servo, console: Console) -> None:
    """The arm servos, a row a joint."""
    console.print(f"arm servos follow: {servo.kind}", highlight=False)
    if servo.kind == "ideal":
        return
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    table.add_column("joint", no_wrap=True)
    for heading in ("bandwidth\nrad/s", "left\nmrad", "as if ideal\nmrad"):
        table.add_column(heading, justify="right", no_wrap=True)
    for name, bandwidth, left, ideal in zip(servo.names, servo.bandwidth, servo.left, servo.ideal_left, strict=True):
        told = math.isfinite(bandwidth)
        cells = (f"{bandwidth:.1f}", f"{1e3 * left:.2f}") if told else ("hardly moved", "")
        table.add_row(name, *cells, f"{1e3 * ideal:.2f}")
    console.print(table)


def print_gain(
    plan: str, before: Sequence[RunResult], after: Sequence[RunResult], likely: Sequence[RunResult], console: Console
) -> None:
    """The ball's travel in a plan before and after weighing, and what the remaining uncertainty is likely to cost."""
    for name, runs in (("before weighing", before), ("after weighing", after), ("robots as likely as this", likely)):
        if runs:
            peaks = [run.ball_travel_peak_mm for run in runs]
            fell = sum(run.fell for run in runs)
            text = f"{plan}, {name}: ball travel {median(peaks):.2f} mm, worst {max(peaks):.2f} of {len(peaks)}"
            console.print(text + (f", {fell} fell" if fell else ""), highlight=False)


def _short(number: float) -> str:
    return f"{number:.1f}" if abs(number) >= 100.0 else f"{number:.2f}" if abs(number) >= 0.1 else f"{number:.4f}"
