"""``ballbal checkup --gantry``: guides the first power-on of a real drive, the robot hung up."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import attrs
from rich.console import Console
from rich.markup import escape

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.bring_up.hand_turns import EncoderMap, HandTurns, taken_as_described
from ballbal_ros.bring_up.moves import SmallMoves
from ballbal_ros.bring_up.verdict import judge_moves
from ballbal_ros.commands.finding_table import finding_table
from ballbal_ros.declaration import load
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import LOOK, OK, Finding
from ballbal_ros.robot.description import RobotDescription

_HANGS, _GO, _SKIP = "it hangs free", "go", "skip"
_WAIT = 6.0
_SETTLE = 0.3
_DELAY = 0.003
_CAUTIONS = f"""\
[bold]First power-on of a drive.[/bold] It will turn the ball by the drive's motors.

Before you go on:
  • Your local codes and the machine's own risk assessment go first; what needs
    a licence is done by who holds one.
  • The robot [bold]hangs[/bold] from a gantry that bears it, its ball clear of the floor
    and free in its cage, arms parked.
  • The emergency stop, which cuts the drive's power without this program, is
    [bold]in your hand[/bold], and has been tried.
  • Nobody's fingers, hair or sleeves are near wheels and ball; yours only when
    you are asked for them, with the drive's power off.

Nothing is sent before you say so a second time. No actuator is asked for more
than a small share of its rated torque, for a few tenths of a second at a time,
and the last command is zero, whatever ends this.

Type [bold]{_HANGS}[/bold] to go on, anything else to leave:"""


@attrs.frozen
class BringUp:
    """What the first power-on found."""

    robot: str
    findings: list[Finding]

    @property
    def ok(self) -> bool:
        """Whether all is in order."""
        return all(finding.verdict == OK for finding in self.findings)


def gantry(robot: Path, domain: int, namespace: str, share: float, console: Console) -> BringUp:
    """Guide the first power-on of a robot's drive; raises :class:`BallbalError` where it can't be done, in one line.

    ``share`` of each actuator's rated torque is never exceeded.
    """
    description = RobotDescription.load(robot)
    # Refused before anybody is asked for anything.
    SmallMoves(description.drive, 1.0, EncoderMap.as_described(len(description.drive.names)), share)
    try:
        from ballbal_ros.commands.gantry_bus import DriveLine
    except ImportError as error:
        raise BallbalError("--gantry", f"takes ROS, which this Python has not ({error})") from error
    with DriveLine(domain, namespace, description.drive.names) as line:
        line.turn_for(1.0)
        line.check_alone()
        line.wait_for_drive(_WAIT)
        console.print(_CAUTIONS, highlight=False)
        if line.read_line().strip().lower() != _HANGS:
            raise BallbalError("--gantry", "was not confirmed, and has sent nothing")
        encoders, said, by_hand = _turn_by_hand(line, description, console)
        console.print(finding_table(said, heading=False), highlight=False)
        if not any(encoders.scale):
            console.print("No encoder counts: nothing is pushed, and nothing was sent.", highlight=False)
            return BringUp(description.name, said)
        moves = SmallMoves(description.drive, description.parameters.ball.inertia, encoders, share)
        _push(line, moves, share, description, console)
    verdict = judge_moves(encoders, moves, by_hand)
    pushed = [*verdict.findings, *_delay(robot, verdict.delay)]
    console.print(finding_table(pushed, heading=False), highlight=False)
    return BringUp(description.name, [*said, *pushed])


def _turn_by_hand(line: Any, description: RobotDescription, console: Console) -> tuple[EncoderMap, list[Finding], bool]:
    """Ask a person to turn the ball; whether that was done comes last."""
    turns = HandTurns(description.drive)
    console.print("\n[bold]Encoders, by hand.[/bold] The drive's power is [bold]off[/bold]. Put a mark on the ball.")
    line.turn_for(_SETTLE)
    turns.see(line.angle)
    line.see = turns.see
    try:
        while (turn := turns.next) is not None:
            console.print(
                f"  Turn the ball slowly, once around, back to the mark:\n"
                f"  {turn.how}.\n"
                f"  Then press Enter ({_SKIP} leaves these turns out):",
                highlight=False,
            )
            answer = line.read_line()
            if answer.strip().lower() == _SKIP:
                return *taken_as_described(description.drive), False
            if not answer:
                raise BallbalError("--gantry", "was left before the end, and has sent nothing")
            line.turn_for(_SETTLE)
            turns.done()
    finally:
        line.see = None
    return *turns.judge(), True


def _push(line: Any, moves: SmallMoves, share: float, description: RobotDescription, console: Console) -> None:
    drive = description.drive
    most = ", ".join(f"{name} {share * limit:.2g}" for name, limit in zip(drive.names, drive.effort_limit.tolist()))
    console.print(
        f"\n[bold]Actuators, by small pushes[/bold], there and back, at most\n{most} N m.\n"
        "The drive's power goes on now: keep hands off, but for the emergency stop.\n"
        "Ctrl-C ends it with zero torque.\n"
        f"Type [bold]{_GO}[/bold]:",
        highlight=False,
    )
    if line.read_line().strip().lower() != _GO:
        raise BallbalError("--gantry", "was left before the end, and has sent nothing")
    said = ""

    def done() -> bool:
        """Say what is being done, where that is new, and whether all of it is done."""
        nonlocal said
        if moves.saying != said:
            said = moves.saying
            console.print(f"  [dim]{escape(said)}[/dim]", highlight=False)
        return moves.done

    line.run(moves.tick, done)


def _delay(robot: Path, delay: float) -> list[Finding]:
    """The delay that was measured against the one that the loop is designed for."""
    folder = robot if robot.is_dir() else robot.parent
    if not math.isfinite(delay):
        return []
    described = load(BalanceParameters, folder / "balance.yaml").loop.delay
    what = f"{1e3 * delay:.1f} ms from command to torque, loop.delay of balance.yaml is {1e3 * described:g} ms"
    near = abs(delay - described) <= _DELAY
    do = "" if near else f"set loop.delay to {delay:.3f} and look at the margins: ballbal gains"
    return [Finding("drive", "delay", OK if near else LOOK, what, do)]
