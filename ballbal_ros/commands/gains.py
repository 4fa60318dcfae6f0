"""``ballbal gains``: from weights to gains, closed-loop poles, margins, and what delay the loop can bear."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import attrs
import typer
from rich.console import Console
from rich.table import Table

from ballbal_ros.balance.gains import Gains, Requirement, design, margins, poles, requirements
from ballbal_ros.balance.linear_model import STATES, LinearModel
from ballbal_ros.balance.margins import Margins
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.commands import options
from ballbal_ros.commands.files import write_json
from ballbal_ros.commands.posture import AskedPosture, asked_posture
from ballbal_ros.declaration import declarations, flatten, load
from ballbal_ros.robot.description import RobotDescription


@attrs.frozen(eq=False)
class GainsReport:
    """What ``ballbal gains`` found for one robot in one posture."""

    description: RobotDescription
    asked: AskedPosture
    gains: Gains
    margins: tuple[Margins, Margins]
    requirements: list[Requirement]

    @property
    def ok(self) -> bool:
        """Whether every margin is what ``margins.*`` asks for."""
        return all(requirement.ok for requirement in self.requirements)


def gains_report(
    robot: Path, plan: Path | None = None, joints: tuple[str, ...] = (), loads: tuple[str, ...] = ()
) -> GainsReport:
    """Design the loop of a robot's folder and measure it; raises a :class:`BallbalError` for wrong input."""
    description = RobotDescription.load(robot)
    folder = robot if robot.is_dir() else robot.parent
    parameters = load(BalanceParameters, folder / "balance.yaml")
    asked = asked_posture(description, plan, joints, loads)
    gains = design(asked.posture, description, parameters)
    found = margins(gains)
    return GainsReport(description, asked, gains, found, requirements(found, parameters))


def rates_as_data(model: LinearModel) -> dict[str, dict[str, float]]:
    """The two rates of physics.md by name and axis, rad/s; for every command that tells them."""
    return {
        "ball_held_rate": dict(zip(("roll", "pitch"), model.ball_held_rate, strict=True)),
        "open_loop_pole": dict(zip(("roll", "pitch"), model.open_loop_pole, strict=True)),
    }


def report_as_data(report: GainsReport) -> dict[str, Any]:
    """The report as ``--json`` writes it. What is infinite becomes null."""
    gains = report.gains
    station, heading = gains.station, gains.heading
    count = len(STATES)
    return _finite(
        {
            "robot": report.description.name,
            "posture": report.asked.named_position,
            "loads": report.asked.loads,
            "mass_kg": report.asked.posture.mass,
            "equilibrium_lean": gains.model.equilibrium_lean.tolist(),
            **rates_as_data(gains.model),
            "loop": {"rate": gains.parameters.loop.rate, "delay": gains.parameters.loop.delay},
            "weights": flatten(gains.parameters.weights),
            "feedback": {
                "states": list(STATES),
                "lean_and_ball": station.feedback[:, :count].tolist(),
                "past_torques": station.feedback[:, count:].tolist(),
                "heading": heading.feedback[:, :2].tolist(),
            },
            "poles": {
                name: [attrs.asdict(pole) for pole in poles(loop)]
                for name, loop in (("lean_and_ball", station), ("heading", heading))
            },
            "loops": {
                name: attrs.asdict(m) for name, m in zip(("lean_and_ball", "heading"), report.margins, strict=True)
            },
            "limits": [_requirement_as_data(requirement) for requirement in report.requirements],
            "ok": report.ok,
        }
    )


def _requirement_as_data(requirement: Requirement) -> dict[str, Any]:
    return {**attrs.asdict(requirement), "ok": requirement.ok}


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def print_report(report: GainsReport, console: Console) -> None:
    """Print the report's tables for a person."""
    gains = report.gains
    model, asked = gains.model, report.asked
    held = ", ".join(f"{hand} {mass:g} kg" for hand, mass in asked.loads.items()) or "nothing in the hands"
    console.print(f"[bold]{report.description.name}[/bold]: {asked.posture.mass:.2f} kg on the ball, {held}")
    console.print(
        f"ball held: falls with {_pair(model.ball_held_rate)} rad/s; "
        f"open-loop pole, ball free: {_pair(model.open_loop_pole)} rad/s (roll, pitch)"
    )
    for table in (_weights_table(gains), _gains_table(gains), _poles_table(gains), _margins_table(report)):
        console.print(table)
    loop = gains.parameters.loop
    for name, measured in zip(("lean and ball", "heading"), report.margins, strict=True):
        console.print(
            f"{name}: bears {_number(1e3 * (loop.delay + measured.delay_limit))} ms of delay in all "
            f"({1e3 * loop.delay:g} ms reckoned with); peak sensitivity {measured.sensitivity_peak:.2f}, "
            f"complementary {measured.complementary_peak:.2f} (at least {measured.complementary_floor:.3f} "
            "with this pole and delay, whatever the gains)"
        )


def _pair(values: tuple[float, float]) -> str:
    return f"{values[0]:.2f}, {values[1]:.2f}"


def _number(value: float) -> str:
    return f"{value:.4g}" if math.isfinite(value) else "any"


def _weights_table(gains: Gains) -> Table:
    table = Table(title="Weights: acceptable deviations", title_justify="left")
    for heading in ("weight", "value", "unit"):
        table.add_column(heading)
    values = flatten(gains.parameters.weights)
    for declared in declarations(type(gains.parameters.weights)):
        table.add_row(declared.name, f"{values[declared.name]:g}", declared.unit)
    return table


def _gains_table(gains: Gains) -> Table:
    table = Table(title="Gains: torque in N m by", title_justify="left")
    for heading in ("", *STATES, "past torques"):
        table.add_column(heading, justify="right")
    for axis, row in zip(("τ_x", "τ_y"), gains.station.feedback.tolist(), strict=True):
        past = ", ".join(f"{value:.3f}" for value in row[len(STATES) :]) or "-"
        table.add_row(axis, *(f"{value:.1f}" for value in row[: len(STATES)]), past)
    heading, rate, *_ = gains.heading.feedback[0].tolist()
    table.caption = f"τ_z: {heading:.1f} N m by heading, {rate:.1f} by its rate"
    return table


def _poles_table(gains: Gains) -> Table:
    table = Table(title="Closed-loop poles, estimator's included", title_justify="left")
    for heading in ("loop", "frequency, rad/s", "damping"):
        table.add_column(heading, justify="left" if heading == "loop" else "right")
    for name, regulator in (("lean and ball", gains.station), ("heading", gains.heading)):
        for pole in poles(regulator):
            table.add_row(name, f"{pole.frequency:.2f}", f"{pole.damping:.2f}")
    return table


def _margins_table(report: GainsReport) -> Table:
    table = Table(title="Margins of the loop as sampled, with estimator and delay", title_justify="left")
    for heading in ("margin", "value", "required", "unit", ""):
        table.add_column(heading, justify="right" if heading in ("value", "required") else "left")
    for row in report.requirements:
        sign = "≥" if row.at_least else "≤"
        verdict = "[green]ok[/green]" if row.ok else "[bold red]too little[/bold red]"
        unit = "" if row.unit == "-" else row.unit
        table.add_row(row.name, _number(row.value), f"{sign} {row.limit:g}", unit, verdict)
    return table


def run_gains(
    robot: Path,
    plan: Path | None = None,
    joints: tuple[str, ...] = (),
    loads: tuple[str, ...] = (),
    json_file: Path | None = None,
    console: Console | None = None,
) -> int:
    """Do what ``ballbal gains`` does; returns 0, or 1 where a margin is too small. Raises :class:`BallbalError`."""
    report = gains_report(robot, plan, joints, loads)
    print_report(report, console or Console())
    if json_file is not None:
        write_json(json_file, report_as_data(report))
    return 0 if report.ok else 1


def gains_command(
    robot: options.Robot = options.ROBOT,
    posture: options.Posture = None,
    joint: options.Joints = None,
    load: options.Loads = None,
    json_file: options.Json = None,
) -> None:
    """Weights to gains, closed-loop poles, margins, and what delay the loop can bear."""
    raise typer.Exit(run_gains(robot, posture, tuple(joint or ()), tuple(load or ()), json_file))
