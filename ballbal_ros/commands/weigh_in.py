"""``ballbal weigh-in``: the robot weighs itself, the simulated one in one process or that whose stack is up."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Optional

import attrs
import typer
from rich.console import Console

from ballbal_ros.commands import options
from ballbal_ros.commands.checkup import domain_of
from ballbal_ros.commands.files import read_robot, write_json
from ballbal_ros.commands.live_weighing import live_weighing
from ballbal_ros.commands.posture import asked_posture
from ballbal_ros.commands.weighing_run import LONGEST, Weighing, rehearsed, remaining_cost, run_weighing
from ballbal_ros.declaration import build, flatten, parameters_of
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import Story, read_story
from ballbal_ros.parameter_text import edited
from ballbal_ros.report.weigh_table import print_findings, print_gain, print_servo
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.truth import Truth, parse_truth
from ballbal_ros.stack import checked_namespace
from ballbal_ros.weighing.findings import findings, not_told
from ballbal_ros.weighing.postures import DesignSettings
from ballbal_ros.yaml_files import parse_yaml

_LIKELY = 5


def weighed_text(text: str, files: RobotFiles, source: str) -> str:
    """The text of a robot.yaml with mass model and arm servo as in ``files``; comments and layout stay.

    Raises :class:`ParameterError` where it has no such layout.
    """
    wanted = flatten(files.description.parameters)
    there = flatten(build(RobotParameters, parameters_of(parse_yaml(text, source), source), source))
    values = {name: _rounded(value) for name, value in wanted.items() if there.get(name) != value}
    # A list comes before what it names.
    ordered = dict(sorted(values.items(), key=lambda item: item[0] not in ("mass_model.links", "arm.joints")))
    text = edited(text, ordered, source)
    build(RobotParameters, parameters_of(parse_yaml(text, source), source), source)
    return text


def _rounded(value: Any) -> Any:
    if isinstance(value, float):
        return float(f"{value:.8g}")
    if isinstance(value, list):
        return [_rounded(item) for item in value]
    return value


def write_weighed(path: Path, robot: Path, files: RobotFiles) -> None:
    """Write the robot's robot.yaml, with what was found in it, to a file; raises :class:`BallbalError`."""
    text = weighed_text((robot / "robot.yaml").read_text(encoding="utf-8"), files, str(robot / "robot.yaml"))
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        what = f"can't be written: {error.strerror}"
        raise BallbalError(str(path), what, "give the path of a file to write") from error


@attrs.frozen(eq=False)
class Worth:
    """What a weighing is worth for a plan: runs before and after, and of robots as likely as the one found. Of a robot
    whose truth nobody knows there are the likely ones alone.
    """

    plan: str
    before: list[RunResult]
    after: list[RunResult]
    likely: list[RunResult]

    @classmethod
    def of(cls, files: RobotFiles, story: Story, weighing: Weighing, truth: Truth | None, seed: int) -> Worth:
        """Rehearse them."""
        found = weighing.files(files)
        likely = remaining_cost(found, story, weighing, _LIKELY, seed)
        if truth is None:
            return cls(story.name, [], [], likely)
        before, after = rehearsed(files, story, truth, seed), rehearsed(found, story, _against(truth, files), seed)
        return cls(story.name, [before], [after], likely)


def _against(truth: Truth, files: RobotFiles) -> Truth:
    """The same robot for files that have been changed: what it is was said against the drawing."""
    parameters: Mapping[str, object] = {"built": "as_drawn"}
    if not files.description.parameters.mass_model.links and not any(files.description.parameters.mass_model.imu_tilt):
        arm = files.description.parameters.arm
        # As described means as described before.
        servo = {"arm_servo": arm.servo, "arm_servo_bandwidth": arm.servo_bandwidth}
        kept = {k: v for k, v in servo.items() if v and getattr(files.simulation, k) in ("as_described", 0.0)}
        return attrs.evolve(truth, parameters={**kept, **truth.parameters, **parameters})
    raise BallbalError("--plan", "needs a robot that has not been weighed before", "take mass_model out of robot.yaml")


def _document(weighing: Weighing, worth: Worth | None) -> dict[str, Any]:
    found = weighing.weighed
    document: dict[str, Any] = {
        "robot_time_s": weighing.seconds,
        "ball_farthest_mm": 1e3 * weighing.farthest,
        "postures": weighing.design.postures.tolist(),
        "weakest_singular_value": weighing.design.weakest,
        "findings": [{**attrs.asdict(f), "told": f.told} for f in findings(found)],
        "not_told": list(not_told(found)),
        "rest_error_rms_nm": float((found.rest_error**2).mean() ** 0.5),
        "swing_error_rms_nm": found.swing_error,
    }
    if weighing.servo is not None:
        servo = weighing.servo
        joints = {
            name: {"bandwidth": float(bandwidth), "left": float(left)}
            for name, bandwidth, left in zip(servo.names, servo.bandwidth, servo.left, strict=True)
            if math.isfinite(bandwidth)
        }
        document["servo"] = {"kind": servo.kind, "joints": joints}
    if worth is not None:
        runs = {name: getattr(worth, name) for name in ("before", "after", "likely")}
        document["plan"] = worth.plan
        document |= {name: [attrs.asdict(run) for run in each] for name, each in runs.items()}
    return document


def weigh_in_command(
    robot: options.Robot = options.ROBOT,
    posture: Annotated[
        Optional[Path], typer.Option("--posture", help="Plan file in whose start posture it begins, hands empty.")
    ] = None,
    postures: Annotated[int, typer.Option("--postures", min=3, max=40, help="In how many postures it weighs.")] = 8,
    mass: Annotated[
        Optional[float], typer.Option("--mass", min=0.1, help="Mass of all on the ball by a scale, kg.")
    ] = None,
    servo: Annotated[bool, typer.Option("--servo", help="Tell the arm servos' lag as well.")] = False,
    truth: options.Truth = None,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of the noise.")] = 0,
    live: Annotated[
        bool, typer.Option("--live", help="Weigh the robot whose stack is up, from where its arms are; it asks first.")
    ] = False,
    domain: Annotated[
        Optional[int], typer.Option("--domain", help="With --live: ROS domain; ROS_DOMAIN_ID without it.")
    ] = None,
    namespace: Annotated[str, typer.Option("--namespace", help="With --live: namespace of the stack.")] = "",
    yes: Annotated[bool, typer.Option("--yes", help="With --live: don't ask; for the simulated robot alone.")] = False,
    plan: Annotated[Optional[Path], typer.Option("--plan", help="Plan file to say the gain for.")] = None,
    output: Annotated[Optional[Path], typer.Option("--output", help="File for robot.yaml as weighed.")] = None,
    json_file: options.Json = None,
) -> None:
    """The robot weighs itself: it balances in chosen postures, and where it leans tells its mass centres.

    The simulated robot, in one process; with --live the one whose stack is up, simulated or real. Nobody may be within
    its reach while it moves, and hands must be empty.
    """
    console = Console()
    files = read_robot(robot)
    differences = parse_truth(truth or (), files.description)
    story = None if plan is None else read_story(plan, files.description)
    design = DesignSettings(count=postures)
    if live:
        _check_live(posture, truth)
        weighing = live_weighing(
            files,
            domain_of(domain),
            checked_namespace(namespace),
            design,
            console,
            mass=mass,
            servo=servo,
            sure=yes,
            told=lambda doing: console.print(f"  [dim]{doing}[/dim]", highlight=False),
        )
    else:
        home = asked_posture(files.description, posture).arm_position
        with console.status("weigh-in") as status:
            weighing = run_weighing(files, home, differences, seed, mass, design, servo=servo, told=status.update)
    worth = None if story is None else Worth.of(files, story, weighing, None if live else differences, seed)
    _tell(files.description.name, weighing, worth, console)
    if output is not None:
        write_weighed(output, robot, weighing.files(files))
    if json_file is not None:
        write_json(json_file, _document(weighing, worth))
    raise typer.Exit(0 if weighing.seconds <= LONGEST else 1)


def _check_live(posture: Path | None, truth: list[str] | None) -> None:
    for option, given in (("--posture", posture), ("--truth", truth)):
        if given:
            what = "is for the simulated robot in one process"
            raise BallbalError(option, what, "with --live the robot is as it is, and begins where its arms are")


def _tell(name: str, weighing: Weighing, worth: Worth | None, console: Console) -> None:
    went = f"{weighing.seconds:.0f} s of the robot's time, ball within {1e3 * weighing.farthest:.0f} mm"
    console.print(f"[bold]{name}[/bold], {len(weighing.design.postures)} postures, {went}", highlight=False)
    print_findings(findings(weighing.weighed), not_told(weighing.weighed), console)
    if weighing.servo is not None:
        print_servo(weighing.servo, console)
    if worth is not None:
        print_gain(worth.plan, worth.before, worth.after, worth.likely, console)
