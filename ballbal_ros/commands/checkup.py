"""``ballbal checkup``: what is wrong with files, machine, bus and the running stack, and what to do about it."""

from __future__ import annotations

import os
from collections import Counter
from pathlib import Path
from typing import Annotated, Any, Optional

import attrs
import typer
from rich.console import Console
from rich.markup import escape

from ballbal_ros.commands import options
from ballbal_ros.commands.checkup_files import check_files
from ballbal_ros.commands.checkup_machine import check_bus, check_machine
from ballbal_ros.commands.checkup_stack import Heard, check_stack
from ballbal_ros.commands.files import write_json
from ballbal_ros.commands.finding_table import COLOURS, finding_table
from ballbal_ros.commands.gantry import gantry
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import LOOK, OK, WRONG, Finding
from ballbal_ros.stack import checked_namespace

_HIGHEST_DOMAIN = 232


@attrs.frozen
class Checkup:
    """What a checkup found; ``stack`` says what was heard of the nodes, in words."""

    robot: str
    findings: list[Finding]
    stack: str
    heard: bool

    @property
    def ok(self) -> bool:
        """Whether there is nothing to look at and nothing wrong."""
        return all(finding.verdict == OK for finding in self.findings)


def checkup(robot: Path, domain: int, namespace: str = "", wait: float = 5.0) -> Checkup:
    """Look at a robot's files, this machine, and the stack in a ROS domain and namespace, for up to ``wait`` s (0: not
    at all).

    Raises :class:`BallbalError` where ``robot`` is no robot's folder. Nothing is sent or changed.
    """
    files, found = check_files(robot)
    found += [*check_machine(), *check_bus(os.environ, domain)]
    name = files.description.name if files.description is not None else robot.resolve().name
    heard, said = _listen(domain, namespace, wait) if wait > 0.0 else (None, "The nodes were not asked (--wait 0).")
    if heard is not None and not heard.empty:
        found += check_stack(heard, files.balance)
        where = f"domain {domain}{f', namespace {namespace}' if namespace else ''}"
        return Checkup(name, found, f"The stack is up in {where}.", True)
    return Checkup(name, found, said, False)


def _listen(domain: int, namespace: str, wait: float) -> tuple[Heard | None, str]:
    try:
        from ballbal_ros.commands.checkup_bus import listen
    except ImportError as error:
        return None, f"The nodes could not be asked: there is no ROS for this Python ({error})."
    space = f" under {namespace}" if namespace else ""
    none = f"No stack is up in ROS domain {domain}{space}: what only running nodes can tell was not checked."
    return listen(domain, namespace, wait), none


def as_json(done: Checkup) -> dict[str, Any]:
    """The document that ``--json`` writes."""
    return {
        "robot": done.robot,
        "stack": done.heard,
        "checks": [attrs.asdict(finding) for finding in done.findings],
        "ok": done.ok,
    }


def print_checkup(done: Checkup, console: Console) -> None:
    """Print the table of checks, for a person: what is wrong first to be seen, by colour and by word."""
    console.print(finding_table(done.findings), highlight=False)
    console.print(escape(done.stack), highlight=False)
    counts = Counter(finding.verdict for finding in done.findings)
    if done.ok:
        console.print(f"{counts[OK]} checks: [green]all well[/green]", highlight=False)
        return
    parts = [f"[{COLOURS[v]}]{counts[v]} {v}[/{COLOURS[v]}]" for v in (WRONG, LOOK, OK) if counts[v]]
    console.print(f"{len(done.findings)} checks: {', '.join(parts)}", highlight=False)


def domain_of(asked: int | None) -> int:
    """The ROS domain asked for, or that of ``ROS_DOMAIN_ID``, or 0; raises :class:`BallbalError` for what is none."""
    text = os.environ.get("ROS_DOMAIN_ID", "") if asked is None else str(asked)
    if text and not (text.isdigit() and int(text) <= _HIGHEST_DOMAIN):
        where = "ROS_DOMAIN_ID" if asked is None else "--domain"
        raise BallbalError(where, f"is {text!r}", f"it takes a number from 0 to {_HIGHEST_DOMAIN}; 1 to 101 are safe")
    return int(text) if text else 0


def checkup_command(
    robot: options.Robot = options.ROBOT,
    domain: Annotated[
        Optional[int], typer.Option("--domain", help="ROS domain of the stack; ROS_DOMAIN_ID without it.")
    ] = None,
    namespace: Annotated[str, typer.Option("--namespace", help="Namespace of the stack.")] = "",
    wait: Annotated[
        float, typer.Option("--wait", min=0.0, max=60.0, help="Longest time to listen to the nodes, s; 0: not at all.")
    ] = 5.0,
    on_gantry: Annotated[
        bool, typer.Option("--gantry", help="First power-on of a real drive, the robot hung up: asks before it moves.")
    ] = False,
    share: Annotated[
        float, typer.Option("--share", help="With --gantry: share of each actuator's rated torque, never exceeded.")
    ] = 0.05,
    json_file: options.Json = None,
) -> None:
    """What is wrong with files, machine, bus and running nodes, and what to do about it. Sends nothing, unless with
    --gantry.
    """
    if on_gantry:
        _gantry(robot, domain_of(domain), checked_namespace(namespace), share, json_file)
    done = checkup(robot, domain_of(domain), checked_namespace(namespace), wait)
    print_checkup(done, Console())
    if json_file is not None:
        write_json(json_file, as_json(done))
    raise typer.Exit(0 if done.ok else 1)


def _gantry(robot: Path, domain: int, namespace: str, share: float, json_file: Path | None) -> None:
    console = Console()
    done = gantry(robot, domain, namespace, share, console)
    amiss = sum(finding.verdict != OK for finding in done.findings)
    well = "[green]all in order[/green]" if done.ok else f"[bold red]{amiss} to see to, then do it again[/bold red]"
    console.print(f"{len(done.findings)} checks: {well}", highlight=False)
    if json_file is not None:
        checks = [attrs.asdict(finding) for finding in done.findings]
        write_json(json_file, {"robot": done.robot, "checks": checks, "ok": done.ok})
    raise typer.Exit(0 if done.ok else 1)
