"""What ``ballbal checkup`` finds in a robot's files: whether they load, agree, and make a loop and a robot that can
be.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

import attrs
import numpy as np

from ballbal_ros.balance.gains import Requirement, design, margins, requirements
from ballbal_ros.balance.linear_model import linear_model
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import load
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import LOOK, OK, WRONG, Finding
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import Posture, WholeBody
from ballbal_ros.simulation.parameters import SimulationParameters

_FILES, _ROBOT, _LOOP = "files", "robot", "loop"
_POSTURES, _DESIGNS = 300, 6

T = TypeVar("T")


@attrs.frozen(eq=False)
class FilesRead:
    """What could be read of a robot's folder; None for what could not."""

    description: RobotDescription | None = None
    balance: BalanceParameters | None = None
    compensation: CompensationParameters | None = None
    simulation: SimulationParameters | None = None


def check_files(folder: Path) -> tuple[FilesRead, list[Finding]]:
    """Read a robot's folder and look at what is in it; raises :class:`BallbalError` where it is no robot's folder."""
    if not (folder / "robot.yaml").is_file():
        raise BallbalError(
            "--robot", f"{folder} holds no robot.yaml", "give the robot's folder, such as config/shelver"
        )
    found: list[Finding] = []

    def read(name: str, make: Callable[[], T]) -> T | None:
        """Read one file and note what is found; None where it is wrong."""
        try:
            made = make()
        except BallbalError as error:
            found.append(Finding(_FILES, name, WRONG, f"{error.where}: {error.what}", error.remedy))
            return None
        found.append(Finding(_FILES, name, OK, "every value known and in its range"))
        return made

    files = FilesRead(
        read("robot.yaml, URDF", lambda: RobotDescription.load(folder)),
        read("balance.yaml", lambda: load(BalanceParameters, folder / "balance.yaml")),
        read("compensation.yaml", lambda: load(CompensationParameters, folder / "compensation.yaml")),
        read("simulation.yaml", lambda: load(SimulationParameters, folder / "simulation.yaml"))
        if (folder / "simulation.yaml").is_file()
        else None,
    )
    found += _agreement(files)
    if files.description is not None:
        found += _robot(files.description)
        if files.compensation is not None:
            found.append(_lead_in(files.description, files.compensation))
        if files.balance is not None:
            found += _margins(files.description, files.balance)
    return files, found


def _agreement(files: FilesRead) -> list[Finding]:
    """Whether the files say the same of what stands in several of them."""
    found = []
    robot, balance, simulation = files.description, files.balance, files.simulation
    if balance is not None and simulation is not None:
        if abs(simulation.loop_rate - balance.loop.rate) > 1e-6:
            both = f"loop_rate {simulation.loop_rate:g} Hz, loop.rate of balance.yaml {balance.loop.rate:g} Hz"
            found.append(Finding(_FILES, "rate of the loop", WRONG, both, "give both the same rate"))
        delay = simulation.drive.delay + simulation.sensor_delay
        if abs(delay - balance.loop.delay) > 0.5 * balance.loop.period:
            both = f"simulated {1e3 * delay:g} ms, loop.delay of balance.yaml {1e3 * balance.loop.delay:g} ms"
            do = "give loop.delay what the robot has, unless they differ on purpose"
            found.append(Finding(_FILES, "delay of the loop", LOOK, both, do))
    if robot is not None:
        wanted = robot.parameters.limits.drive_torque
        gives = min(robot.drive.torque_limit((math.cos(a), math.sin(a), 0.0)) for a in np.linspace(0.0, math.pi, 25))
        if wanted > gives * (1.0 + 1e-9):
            both = f"limits.drive_torque {wanted:g} N m, but the actuators' effort_limit gives {gives:.1f} N m"
            found.append(Finding(_FILES, "drive torque", LOOK, both, f"set limits.drive_torque to {gives:.1f} or less"))
        if balance is not None and balance.limits.trip_lean < balance.limits.engage_lean:
            both = f"limits.trip_lean {balance.limits.trip_lean:g} rad, engage_lean {balance.limits.engage_lean:g} rad"
            found.append(Finding(_FILES, "trip lean", WRONG, both, "it would trip as soon as it engages: raise it"))
    return found or [Finding(_FILES, "agreement", OK, "rates, delays and limits go together")]


def _robot(description: RobotDescription) -> list[Finding]:
    """Whether such a robot can be, and how far it can lean for what its arms can do."""
    body = WholeBody(description)
    rest = body.posture(np.zeros(description.joint_count))
    found = [_masses(description, rest)]
    inertias = list(description.model.inertias)[2:]
    bare = [name for name, inertia in zip(description.joint_names, inertias) if inertia.mass <= 0.0]
    if bare:
        what = f"nothing that {', '.join(bare)} moves has a mass"
        found.append(Finding(_ROBOT, "arm masses", LOOK, what, "give these links an <inertial>, or fix the joints"))
    found.append(_reach_of_lean(description, body))
    return found


def _masses(description: RobotDescription, rest: Posture) -> Finding:
    height, limit = float(rest.center[2]), description.parameters.limits.lean
    mass = f"{rest.mass:.1f} kg on a ball of {description.parameters.ball.mass:g} kg, mass centre {height:.2f} m above"
    if height <= 0.0:
        return Finding(
            _ROBOT, "mass model", WRONG, f"mass centre {-height:.2f} m below the ball's centre", "mend the URDF"
        )
    lean = math.hypot(*rest.equilibrium_lean)
    if lean > 0.5 * limit:
        do = "base_link is the ball's centre: check the origins in the URDF"
        return Finding(_ROBOT, "mass model", LOOK, f"stands only at a lean of {math.degrees(lean):.1f}°", do)
    return Finding(_ROBOT, "mass model", OK, f"{mass} its centre")


def _reach_of_lean(description: RobotDescription, body: WholeBody) -> Finding:
    """Whether limits.lean holds up what arms and loads can reach, over postures within the joint limits."""
    random, hands = np.random.default_rng(0), description.parameters.hands
    low, high = np.maximum(description.position_low, -np.pi), np.minimum(description.position_high, np.pi)
    leans = []
    for _ in range(_POSTURES):
        for hand in hands.links:
            body.set_load(Load(hand, float(random.uniform(0.0, hands.load_limit))))
        leans.append(math.hypot(*body.posture(random.uniform(low, high)).equilibrium_lean))
    most, limit = max(leans), description.parameters.limits.lean
    both = f"postures with loads need up to {math.degrees(most):.1f}°, limits.lean is {math.degrees(limit):.1f}°"
    beyond = sum(lean > limit for lean in leans) / len(leans)
    if beyond > 0.0:
        do = "plans that go there are refused: raise limits.lean, or keep loads lighter"
        return Finding(_ROBOT, "reach of lean", LOOK, f"{both}: {beyond:.0%} of them are out of reach", do)
    return Finding(_ROBOT, "reach of lean", OK, both)


def _lead_in(description: RobotDescription, compensation: CompensationParameters) -> Finding:
    """Whether the lead-in is long enough for the lean to come first, in the slowest axis."""
    model = linear_model(WholeBody(description).posture(np.zeros(description.joint_count)), description)
    least = 4.0 / min(model.ball_held_rate)
    both = f"planner.lead_in {compensation.planner.lead_in:g} s, 4 / (rate with the ball held) = {least:.2f} s"
    if compensation.planner.lead_in < least:
        do = f"with less than {least:.2f} s the ball must move: raise it where that matters"
        return Finding(_ROBOT, "lead-in", LOOK, both, do)
    return Finding(_ROBOT, "lead-in", OK, both)


def _postures(description: RobotDescription) -> list[Posture]:
    """At rest with empty hands, then some with loads in all hands."""
    body, random = WholeBody(description), np.random.default_rng(1)
    low, high = np.maximum(description.position_low, -np.pi), np.minimum(description.position_high, np.pi)
    found = [body.posture(np.zeros(description.joint_count))]
    for hand in description.parameters.hands.links:
        body.set_load(Load(hand, description.parameters.hands.load_limit))
    return found + [body.posture(random.uniform(low, high)) for _ in range(_DESIGNS - 1)]


def _margins(description: RobotDescription, balance: BalanceParameters) -> list[Finding]:
    """The loop's margins at several postures, the tightest of all."""
    tightest: tuple[float, Requirement] | None = None
    try:
        for posture in _postures(description):
            longest = balance.margins.delay + 2.0 * balance.loop.period
            for row in requirements(margins(design(posture, description, balance), None, longest), balance):
                slack = _slack(row)
                if tightest is None or slack < tightest[0]:
                    tightest = slack, row
    except BallbalError as error:
        return [Finding(_LOOP, "margins", WRONG, f"{error.where}: {error.what}", error.remedy)]
    assert tightest is not None
    row, unit = tightest[1], "" if tightest[1].unit == "-" else f" {tightest[1].unit}"
    least = "at least" if row.at_least else "at most"
    what = f"tightest of {_DESIGNS} postures: {row.name} {row.value:.3g}{unit}, it takes {least} {row.limit:g}{unit}"
    if not row.ok:
        do = "balance refuses to be configured there: change weights.* or estimator.* (ballbal gains shows them all)"
        return [Finding(_LOOP, "margins", WRONG, what, do)]
    return [Finding(_LOOP, "margins", OK, what)]


def _slack(row: Requirement) -> float:
    """Measured over asked, as a factor: below 1 it is missed."""
    value, limit = (row.value, row.limit) if row.at_least else (row.limit, row.value)
    return math.inf if limit <= 0.0 else value / limit
