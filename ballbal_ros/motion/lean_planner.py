"""From a planned arm motion to the lean that keeps the ball where it is (or where it is meant to be)."""

from __future__ import annotations

from collections.abc import Sequence

import attrs
import numpy as np

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.lean_plan import LeanPlan, Prediction, predicted_uses
from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, equilibrium_lean, solve_lean
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import BallMotion, HandWrench, PlanRequest, StartState
from ballbal_ros.motion.relief import ReliefLimits, ball_relief
from ballbal_ros.robot.arrays import Array, apply
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY, OutsideMotion, UpperBodyTerms
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import WholeBody

_FRICTION_RATE = 0.05
_SETTLED_RATE = 1e-5
_RELIEF_ROUNDS = 3
_LONGEST, _LOADS_AFTER = 600.0, 60.0
# Of each limit; the rest is for the rotors and for what is not linear, of which the spin moment has most.
_RESERVE, _SPIN_RESERVE = 0.93, 0.85


def terms_along(body: WholeBody, request: PlanRequest, times: Array, step: float) -> UpperBodyTerms:
    """The upper body's terms along a request [N]; a load that changes within a node's share of time is blended by
    time.
    """
    position, rate, acceleration = request.arms.sample(times - request.lead_in)
    hands = tuple(w.hand for w in request.wrenches)
    terms = body.terms(position, rate, acceleration, hands)
    later = WholeBody(body.description, body.loads.values())
    for when, load in sorted(request.loads, key=lambda change: change[0]):
        later.set_load(load, "plan")
        share = np.clip((times - when) / step + 0.5, 0.0, 1.0)
        affected = np.flatnonzero(share > 0.0)
        if len(affected) == 0:
            continue
        k = int(affected[0])
        after = later.terms(position[k:], rate[k:], acceleration[k:], hands)
        before = attrs.evolve(terms, **{f.name: getattr(terms, f.name)[k:] for f in _arrays()})
        mixed = before.blend(after, share[k:])
        for field in _arrays():
            getattr(terms, field.name)[k:] = getattr(mixed, field.name)
    return terms


def _arrays() -> list[attrs.Attribute[object]]:
    return [f for f in attrs.fields(UpperBodyTerms) if f.name != "hands"]


def plan_lean(body: WholeBody, request: PlanRequest, parameters: CompensationParameters) -> LeanPlan:
    """Plan the lean for a request; the plan's ``uses`` say what it needs against the limits (it is not refused here
    for them).

    Raises :class:`~ballbal_ros.errors.PlanError` where no bounded lean exists or no ball motion can begin it in time.
    """
    description, settings = body.description, parameters.planner
    length = request.lead_in + request.arms.duration + settings.tail
    if request.ball is not None:
        length = max(length, float(request.ball.times[-1]) + settings.tail)
    for wrench in request.wrenches:
        length = max(length, float(wrench.times[-1]) + settings.tail)
    if length > _LONGEST:
        raise PlanError("plan", f"would take {length:.6g} s", f"it takes at most {_LONGEST:g} s: plan it in parts")
    # What is announced for long after it is of no concern to this motion.
    for when in [when for when, _ in request.loads if when < length + _LOADS_AFTER]:
        length = max(length, when + settings.tail)
    nodes = int(np.ceil(length / settings.step - 1e-9)) + 1
    times: Array = settings.step * np.arange(nodes, dtype=float)
    terms = terms_along(body, request, times, settings.step)
    motion = _ball_motion(request.ball, times)
    first = ball_to_station(request.start, times)
    turn = _turns(motion[0][:, 2] - motion[0][0, 2])
    given = outside_motion(request, times, motion[2][:, :2])
    radius, apparent_mass = description.parameters.ball.radius, description.ball_apparent_mass
    problem = LeanProblem.of(terms, given, settings.step, radius, apparent_mass).with_ball(turn, *first)
    solution, ball = _solve(problem, request, first, turn, relief_limits(description, parameters, terms))
    extra = None if request.moment is None else request.moment.at(times)[1]
    return made_plan(description, parameters, request.lead_in, times, solution, ball, motion, extra)


def _solve(
    problem: LeanProblem, request: PlanRequest, first: list[Array], turn: Array, limits: ReliefLimits
) -> tuple[tuple[LeanProblem, LeanSolution], list[Array]]:
    static = problem.terms.static_lean()
    end = equilibrium_lean(problem, len(problem.terms) - 1, static[-1])
    start = equilibrium_lean(problem, 0, static[0]) if request.start is None else request.start.lean
    start_rate = np.zeros(2) if request.start is None else request.start.lean_rate
    solution = solve_lean(problem, start, end)
    ball = [array.copy() for array in first]
    window = max(request.lead_in + 1.0, 1.2)
    for _ in range(_RELIEF_ROUNDS):
        at_start, at_end = solution.lean_rate[0] - start_rate, solution.lean_rate[-1]
        if _settled(at_start, at_end):
            break
        relief = ball_relief(problem, solution, turn, at_start, at_end, window, limits, ball[0])
        added = relief.position, relief.rate, relief.acceleration
        for array, more in zip(ball, added, strict=True):
            array += more
        problem = problem.with_ball(turn, *added)
        solution = solve_lean(problem, start, end, solution.lean)
    if not _settled(solution.lean_rate[0] - start_rate, solution.lean_rate[-1]):
        raise PlanError("plan", "no ball motion is found that begins where the robot is", "give it more lead-in")
    return (problem, solution), ball


def outside_motion(request: PlanRequest, times: Array, ball_acceleration: Array) -> OutsideMotion:
    """What is given besides the arms at times [N]: the ball's acceleration [N, 2], m/s², in the plan's axes, with the
    heading, hand forces and outside moment of the request.
    """
    position, rate, acceleration = _ball_motion(request.ball, times)
    turn = _turns(position[:, 2] - position[0, 2])
    force, moment = _wrenches(request.wrenches, times)
    couple = None
    if request.moment is not None:
        couple = request.moment.at(times)[0]
    return OutsideMotion(apply(turn, ball_acceleration), rate[:, 2], acceleration[:, 2], force, moment, couple)


def _settled(at_start: Array, at_end: Array) -> bool:
    """Whether the lean rates [2] at a plan's ends are near enough to what they must be."""
    return bool(np.abs(at_start).max() < _SETTLED_RATE and np.abs(at_end).max() < _SETTLED_RATE)


def relief_limits(
    description: RobotDescription, parameters: CompensationParameters, terms: UpperBodyTerms
) -> ReliefLimits:
    """What a ball motion may ask of drive and floor, less a reserve."""
    use, floor = parameters.acceptance, description.parameters.floor
    ball, drive = description.parameters.ball, description.drive
    weight = (float(terms.mass.min()) + ball.mass) * GRAVITY
    return ReliefLimits.of(
        torque=_RESERVE * use.torque_use * description.parameters.limits.drive_torque,
        grip=_RESERVE * use.friction_use * floor.friction * weight * ball.radius,
        torsion=_SPIN_RESERVE * use.torsion_use * floor.torsion * weight,
        efforts=drive.effort_map / (_RESERVE * use.torque_use * drive.effort_limit)[:, None],
    )


def _ball_motion(ball: BallMotion | None, times: Array) -> list[Array]:
    if ball is None:
        return [np.zeros((len(times), 3)) for _ in range(3)]
    columns = range(3)
    inside = ((times >= ball.times[0]) & (times <= ball.times[-1]))[:, None]
    values = [
        np.stack([np.interp(times, ball.times, array[:, c]) for c in columns], axis=1)
        for array in (ball.position, ball.rate, ball.acceleration)
    ]
    return [values[0], values[1] * inside, values[2] * inside]


def ball_to_station(start: StartState | None, times: Array, within: float = 1.2) -> list[Array]:
    """The ball on its way from the start's place and rate back to the station, as a quintic ``within`` s; at rest there
    without one.
    """
    out = [np.zeros((len(times), 2)) for _ in range(3)]
    if start is None or (not np.any(start.ball) and not np.any(start.ball_rate)):
        return out
    span = min(within, float(times[-1]))
    s = np.minimum(times / span, 1.0)[:, None]
    p, v = start.ball[None, :], start.ball_rate[None, :] * span
    out[0] = p * (1 - 10 * s**3 + 15 * s**4 - 6 * s**5) + v * (s - 6 * s**3 + 8 * s**4 - 3 * s**5)
    out[1] = (p * (-30 * s**2 + 60 * s**3 - 30 * s**4) + v * (1 - 18 * s**2 + 32 * s**3 - 15 * s**4)) / span
    out[2] = (p * (-60 * s + 180 * s**2 - 120 * s**3) + v * (-36 * s + 96 * s**2 - 60 * s**3)) / span**2
    inside = times[:, None] <= span
    return [out[0] * inside, out[1] * inside, out[2] * inside]


def _turns(heading: Array) -> Array:
    """[N, 2, 2] from plan axes into ``base_footprint`` axes turned by these headings."""
    sin, cos = np.sin(heading), np.cos(heading)
    return np.stack((np.stack((cos, sin), axis=-1), np.stack((-sin, cos), axis=-1)), axis=-2)


def _wrenches(wrenches: Sequence[HandWrench], times: Array) -> tuple[Array, Array]:
    force, moment = np.zeros((len(times), len(wrenches), 3)), np.zeros((len(times), len(wrenches), 3))
    for index, wrench in enumerate(wrenches):
        for c in range(3):
            force[:, index, c] = np.interp(times, wrench.times, wrench.force[:, c])
            moment[:, index, c] = np.interp(times, wrench.times, wrench.moment[:, c])
    return force, moment


def made_plan(
    description: RobotDescription,
    parameters: CompensationParameters,
    lead_in: float,
    times: Array,
    solved: tuple[LeanProblem, LeanSolution],
    ball: list[Array],
    motion: list[Array],
    extra_torque: Array | None = None,
) -> LeanPlan:
    """The plan of a solution: ``ball`` [N, 2] added to the given ``motion`` [N, 3], each with rates and
    accelerations; ``extra_torque`` [N, 2] about x and y, N m, is what the drive must give besides.
    """
    problem, solution = solved
    rows = solution.rows
    total = [given[:, :2] + added for given, added in zip(motion, ball, strict=True)]
    ball_rate = apply(_turns(motion[0][:, 2] - motion[0][0, 2]), total[1])
    rotors = _drive_torque(description, problem, solution, ball_rate)
    torque = rows.torque + rotors
    if extra_torque is not None:
        torque[:, :2] += extra_torque
    prediction = Prediction(torque, rows.force, problem.ball_acceleration, solution.lean, ball[0], total[1])
    return LeanPlan(
        times=times,
        lead_in=lead_in,
        lean=solution.lean,
        lean_rate=solution.lean_rate,
        lean_acceleration=solution.lean_acceleration,
        ball=total[0],
        ball_rate=total[1],
        ball_acceleration=total[2],
        heading=motion[0][:, 2],
        heading_rate=motion[1][:, 2],
        heading_acceleration=motion[2][:, 2],
        torque=torque,
        uses=predicted_uses(prediction, description, parameters.acceptance),
        rotor_torque=rotors,
    )


def _drive_torque(
    description: RobotDescription, problem: LeanProblem, solution: LeanSolution, ball_rate: Array
) -> Array:
    """Torque on the body [N, 3] that the drive must give besides, for its own rotors and friction, ``base_footprint``
    axes; ``ball_rate`` [N, 2], m/s, likewise.

    Rotors resist the relative acceleration of ball and body, τ_drive = τ - R J Rᵀ (ω'_ball - ω'_body); dry friction
    resists the relative rate of each actuator, smoothly about zero.
    """
    rotation, pitch = rotation_lean(solution.lean), solution.lean[:, 1]
    back = rotation.transpose(0, 2, 1)

    def relative(ball: Array, lean: Array, heading: Array) -> Array:
        """The ball's turning less the body's [N, 3], ``base_link`` axes, from horizontal motion, lean and heading."""
        x, y = ball.T / problem.ball_radius
        roll, tilt = lean.T
        return apply(back, np.stack((-y - roll * np.cos(pitch), x - tilt, -(heading - roll * np.sin(pitch))), axis=-1))

    outside, drive = problem.outside, description.drive
    turning = relative(ball_rate, solution.lean_rate, outside.heading_rate)
    speeding = relative(problem.ball_acceleration, solution.lean_acceleration, outside.heading_acceleration)
    friction = drive.stiction * np.tanh(turning @ drive.rate_map.T / _FRICTION_RATE)
    return apply(rotation, friction @ drive.torque_map.T - speeding @ drive.reflected_inertia.T)
