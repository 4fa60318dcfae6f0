"""``ballbal weigh-in --live``: the robot whose stack is up weighs itself, once a person has said that it may."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from rich.console import Console

from ballbal_ros.commands.weighing_run import LONGEST, Weighing, weigh_robot
from ballbal_ros.errors import BallbalError
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.weighing.postures import DesignSettings, choose_postures
from ballbal_ros.weighing.procedure import ProcedureSettings

_CLEAR = "all is clear"
_CAUTIONS = f"""\
[bold]Weighing a robot that balances.[/bold] It will move its arms through {{count}} postures,
as far as their joints let it, and roll its ball a hand's breadth to and fro.

Before you go on:
  • Your local codes and the machine's own risk assessment go first; what needs
    a licence is done by who holds one.
  • Nobody is within its reach, nor where it would fall; shelves, tables and
    cables neither: it knows nothing but its own body.
  • The floor is level, and its hands are [bold]empty[/bold].
  • The emergency stop is [bold]in your hand[/bold], and has been tried.

Nothing has been sent so far. It takes up to {{minutes:.0f}} minutes. Ctrl-C brings arms and
ball to rest; the robot goes on balancing.

Type [bold]{_CLEAR}[/bold] to go on, anything else to leave:"""


def live_weighing(
    files: RobotFiles,
    domain: int,
    namespace: str,
    design: DesignSettings,
    console: Console,
    *,
    mass: float | None = None,
    servo: bool = False,
    sure: bool = False,
    procedure: ProcedureSettings | None = None,
    told: Callable[[str], None] | None = None,
) -> Weighing:
    """Weigh the robot that balances in a ROS domain and namespace, from where its arms are now.

    ``sure``: nobody is asked, which only the simulated robot allows. Raises :class:`BallbalError`, a line, where none
    balances, it was not confirmed, a plan is refused, or the robot leaves off balancing; KeyboardInterrupt where
    somebody ends it. Arms and ball come to rest then.
    """
    try:
        from ballbal_ros.commands.bus_weighing import BusWeighing
    except ImportError as error:
        raise BallbalError("--live", f"takes ROS, which this Python has not ({error})") from error
    with BusWeighing(domain, namespace, files) as robot:
        robot.wait_for_robot()
        if sure and not robot.simulated:
            raise BallbalError("--yes", "is for the simulated robot alone", "leave it out, and answer what is asked")
        chosen = choose_postures(files.description, robot.arms(), design)
        if not sure:
            _ask(robot, design.count, console)
        robot.begin()
        weighing = weigh_robot(files, robot, chosen, mass, procedure, servo, told)
        console.print(f"{robot.share:.0%} of the IMU's readings were heard", highlight=False)
        return weighing


def _ask(robot: Any, count: int, console: Console) -> None:
    console.print(_CAUTIONS.format(count=count, minutes=LONGEST / 60.0), highlight=False)
    if robot.read_line().strip().lower() != _CLEAR:
        raise BallbalError("--live", "was not confirmed, and has sent nothing")
