"""A weighing from beginning to end: choose postures, weigh the simulated robot, identify, say what it is worth."""

from __future__ import annotations

from collections.abc import Callable

import attrs

from ballbal_ros.commands.simulated_weighing import SimulatedWeighing
from ballbal_ros.motion.story import Story
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.rehearsal import Rehearsal, RobotFiles, plan_story
from ballbal_ros.simulation.run_result import RunResult
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.weighing.findings import draws
from ballbal_ros.weighing.identify import Evidence, Weighed, identify
from ballbal_ros.weighing.postures import Design, DesignSettings, choose_postures
from ballbal_ros.weighing.procedure import ProcedureSettings, Robot, weigh
from ballbal_ros.weighing.record import Record
from ballbal_ros.weighing.servo import Servo, identify_servo

LONGEST = 180.0
"""What a weighing may take, s of the robot's time."""

_SWING_RATE = 10.0


@attrs.frozen(eq=False)
class Weighing:
    """What came of it. ``seconds``: of the robot's time, standing up included; ``farthest``: that the ball went, m,
    swing included.
    """

    design: Design
    record: Record
    weighed: Weighed
    servo: Servo | None
    seconds: float
    farthest: float

    def files(self, files: RobotFiles) -> RobotFiles:
        """The robot's files with what was found in them."""
        description = files.description.with_mass_model(self.weighed.mass_model())
        return attrs.evolve(files, description=self.servo.into(description) if self.servo else description)


def run_weighing(
    files: RobotFiles,
    home: Array,
    truth: Truth,
    seed: int = 0,
    mass: float | None = None,
    design: DesignSettings | None = None,
    procedure: ProcedureSettings | None = None,
    servo: bool = False,
    told: Callable[[str], None] | None = None,
) -> Weighing:
    """Weigh the simulated robot, which differs from its files by ``truth``, from arm position ``home`` [n] on.

    ``mass``: of all that stands on the ball, kg, if a scale has told. Raises :class:`BallbalError` where no postures
    are found, a motion is refused or the robot falls.
    """
    chosen = choose_postures(files.description, home, design or DesignSettings())
    robot = SimulatedWeighing(files, home, seed, truth)
    return weigh_robot(files, robot, chosen, mass, procedure, servo, told)


def weigh_robot(
    files: RobotFiles,
    robot: Robot,
    chosen: Design,
    mass: float | None = None,
    procedure: ProcedureSettings | None = None,
    servo: bool = False,
    told: Callable[[str], None] | None = None,
) -> Weighing:
    """Weigh a robot that stands, in the postures chosen, and work out what was found; see :func:`run_weighing`."""
    weigh(robot, chosen.postures, procedure or ProcedureSettings(), told)
    drawn, record, seconds = files.description.as_drawn(), robot.record, robot.time
    motion = record.motion(drawn)
    evidence = Evidence(record.at_rest(motion), record.moving(motion, _SWING_RATE), mass)
    found = identify(drawn, evidence)
    lag = identify_servo(record, files.description) if servo else None
    return Weighing(chosen, record, found, lag, seconds, record.farthest)


def rehearsed(files: RobotFiles, story: Story, truth: Truth, seed: int = 0) -> RunResult:
    """One planned run of a story."""
    timeline = Timeline.of(story, files.compensation, differs=truth != Truth())
    plan = plan_story(files, story, timeline) if story.planned else None
    return Rehearsal(files, story, "planned", timeline, plan, seed, truth).run()[0]


def remaining_cost(files: RobotFiles, story: Story, weighing: Weighing, count: int, seed: int = 0) -> list[RunResult]:
    """What the remaining uncertainty costs: the plan made for the robot found, run by robots as likely as it."""
    found = weighing.files(files)
    return [
        rehearsed(found, story, Truth(mass_factor=d.mass_factor, center=d.center, imu_tilt=d.imu_tilt), seed + k)
        for k, d in enumerate(draws(weighing.weighed, count, seed))
    ]
