"""``ballbal inspect``: what a robot is, at a given posture, before it stands."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import attrs
from rich import box
from rich.console import Console
from rich.table import Table

from ballbal_ros.balance.linear_model import LinearModel, linear_model
from ballbal_ros.commands import options
from ballbal_ros.commands.files import write_json
from ballbal_ros.commands.gains import rates_as_data
from ballbal_ros.commands.posture import AskedPosture, asked_posture
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.reserves import PullReserve, fall_time, pull_reserve

_FROM, _TO = math.radians(1.0), math.radians(20.0)
_SIDES = ("forward", "forward left", "left", "back left", "back", "back right", "right", "forward right")


@attrs.frozen(eq=False)
class Inspection:
    """What ``ballbal inspect`` found."""

    description: RobotDescription
    asked: AskedPosture
    model: LinearModel
    pulls: tuple[PullReserve, ...]


def inspect_robot(robot: Path, plan: Path | None, joints: tuple[str, ...], loads: tuple[str, ...]) -> Inspection:
    """Look at the robot of a folder in a posture; raises a :class:`~ballbal_ros.errors.BallbalError` for wrong
    input.
    """
    description = RobotDescription.load(robot)
    asked = asked_posture(description, plan, joints, loads)
    hands = description.parameters.hands.links
    pulls = tuple(
        pull_reserve(description, asked.posture, hand, asked.body.hand_position(hand, asked.arm_position))
        for hand in hands
    )
    return Inspection(description, asked, linear_model(asked.posture, description), pulls)


def side(direction: float) -> str:
    """A direction in rad (0 forward, left positive) in words."""
    return _SIDES[round(direction / (math.pi / 4)) % 8]


def inspection_as_data(found: Inspection) -> dict[str, Any]:
    """The inspection as ``--json`` writes it."""
    posture, parameters = found.asked.posture, found.description.parameters
    weight = (posture.mass + parameters.ball.mass) * GRAVITY
    return {
        "robot": found.description.name,
        "posture": found.asked.named_position,
        "loads": found.asked.loads,
        "mass_on_ball_kg": posture.mass,
        "mass_in_all_kg": posture.mass + parameters.ball.mass,
        "center_of_mass_m": posture.center.tolist(),
        "inertia_about_center_kg_m2": posture.inertia.tolist(),
        "equilibrium_lean_rad": list(posture.equilibrium_lean),
        **rates_as_data(found.model),
        "fall_time_s": {
            "ball_held": fall_time(max(found.model.ball_held_rate), _FROM, _TO),
            "ball_free": fall_time(max(found.model.open_loop_pole), _FROM, _TO),
        },
        "lead_in_s": {
            "98_percent": 4.0 / min(found.model.ball_held_rate),
            "99_percent": math.log(100.0) / min(found.model.ball_held_rate),
        },
        "gravity_moment_at_lean_limit_nm": posture.mass
        * GRAVITY
        * posture.center[2]
        * math.sin(parameters.limits.lean),
        "floor_friction_limit_n": parameters.floor.friction * weight,
        "floor_torsion_limit_nm": parameters.floor.torsion * weight,
        "pulls": [
            {
                "hand": pull.hand,
                "force_n": pull.weakest()[0],
                "limit": pull.weakest()[1],
                "direction_rad": pull.weakest()[2],
                "heading_slips_at_n": float(pull.heading.min()),
            }
            for pull in found.pulls
        ],
    }


def print_inspection(found: Inspection, console: Console) -> None:
    """Print what was found, for a person."""
    model = found.model
    held = ", ".join(f"{hand} {mass:g} kg" for hand, mass in found.asked.loads.items()) or "nothing in the hands"
    console.print(f"[bold]{found.description.name}[/bold]: {found.description.joint_count} arm joints, {held}")
    table = Table(show_header=False, box=None, pad_edge=False)
    table.add_column(style="cyan")
    table.add_column()
    for name, value in _mass_rows(found) + _rate_rows(model) + _reserve_rows(found):
        table.add_row(name, value)
    console.print(table)
    console.print("\n[bold]Level pull on a hand, N, at which each limit is reached[/bold] (towards the weakest side)")
    pulls = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for heading in ("hand", "lean", "drive torque", "ball slides", "heading slips", "weakest side"):
        pulls.add_column(heading, justify="left" if heading in ("hand", "weakest side") else "right")
    for pull in found.pulls:
        values = (f"{values.min():.0f}" for values in (pull.lean, pull.torque, pull.friction, pull.heading))
        pulls.add_row(pull.hand, *values, side(pull.weakest()[2]))
    console.print(pulls)
    weakest = min(found.pulls, key=lambda pull: pull.weakest()[0], default=None)
    if weakest is not None:
        force, limit, direction = weakest.weakest()
        console.print(
            f"It would fall first [bold]{side(direction)}[/bold]: pulled there at {weakest.hand} with {force:.0f} N "
            f"it reaches its limit of {limit}.",
            highlight=False,
        )


def _mass_rows(found: Inspection) -> list[tuple[str, str]]:
    posture, ball = found.asked.posture, found.description.parameters.ball
    x, y, z = posture.center.tolist()
    roll, pitch = (math.degrees(v) for v in posture.equilibrium_lean)
    inertia = ", ".join(f"{posture.inertia[i, i]:.2f}" for i in range(3))
    return [
        ("mass", f"{posture.mass + ball.mass:.3f} kg: {posture.mass:.3f} on the ball, ball {ball.mass:g}"),
        ("mass centre", f"{1e3 * x:.1f}, {1e3 * y:.1f}, {1e3 * z:.1f} mm in base_link"),
        ("inertia about it", f"{inertia} kg m² (xx, yy, zz)"),
        ("equilibrium lean", f"roll {roll:.2f}°, pitch {pitch:.2f}°"),
    ]


def _rate_rows(model: LinearModel) -> list[tuple[str, str]]:
    held, free, slowest = max(model.ball_held_rate), max(model.open_loop_pole), min(model.ball_held_rate)
    return [
        ("rate, ball held", f"{held:.2f} rad/s; the planner's lead-in lives on it"),
        ("lead-in", f"4/rate = {4.0 / slowest:.2f} s; for 1 % left {math.log(100.0) / slowest:.2f} s"),
        ("open-loop pole", f"{free:.2f} rad/s, ball free; the delay margin lives on it"),
        (
            "fall, 1° to 20°",
            f"{fall_time(held, _FROM, _TO):.2f} s ball held, {fall_time(free, _FROM, _TO):.2f} s ball free",
        ),
    ]


def _reserve_rows(found: Inspection) -> list[tuple[str, str]]:
    posture, p = found.asked.posture, found.description.parameters
    weight = (posture.mass + p.ball.mass) * GRAVITY
    moment = posture.mass * GRAVITY * posture.center[2] * math.sin(p.limits.lean)
    drive = found.description.drive
    axes = [drive.torque_limit(axis) for axis in ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0))]
    return [
        ("reach of lean", f"{math.degrees(p.limits.lean):.1f}°: balances {moment:.0f} N m about the contact"),
        (
            "drive torque",
            f"limit {p.limits.drive_torque:g} N m; actuators give "
            f"{axes[0]:.0f}, {axes[1]:.0f}, {axes[2]:.0f} about x, y, z",
        ),
        ("floor friction", f"{p.floor.friction * weight:.0f} N before the ball slides"),
        ("floor torsion", f"{p.floor.torsion * weight:.2f} N m before the ball spins on the spot"),
    ]


def inspect_command(
    robot: options.Robot = options.ROBOT,
    posture: options.Posture = None,
    joint: options.Joints = None,
    load: options.Loads = None,
    json_file: options.Json = None,
) -> None:
    """What this robot is, at a posture: masses, mass centre, how fast it falls, and what it has in reserve."""
    found = inspect_robot(robot, posture, tuple(joint or ()), tuple(load or ()))
    print_inspection(found, Console())
    if json_file is not None:
        write_json(json_file, inspection_as_data(found))
