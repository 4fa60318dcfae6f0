"""A motion done again gets better: what a run shows of the moment that nobody told of is planned with the next time.

A plan satisfies the balance rows. What the robot truly did, its measured lean and ball put into the same rows, leaves a
rest: the moment d(t) about the contact that the model lacks, be it a load that is heavier than said, an arm whose mass
centre lies elsewhere, or a cable. No torque enters, so neither does the feedback that was busy meanwhile. As the run is
over, derivatives are taken without phase (Savitzky and Golay 1964, Anal. Chem. 36(8) 1627; scipy), which no estimator
can do while it happens. The next plan is solved with d(t) as a known outside moment, and leans ahead of it.

This is iterative learning control whose learning filter is the planner itself (Bristow, Tharayil and Alleyne 2006, IEEE
Control Systems Magazine 26(3) 96, for the idea). It is safe by construction: what is learnt is bounded, is a mean over
the runs, changes nothing but the plan, which is held against every limit as any other, and is forgotten when model,
loads or plan change.
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.signal import savgol_filter

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.lean_planner import outside_motion, plan_lean, terms_along
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_mark import PlanMark
from ballbal_ros.motion.plan_request import OutsideMoment, PlanRequest
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import balance_rows
from ballbal_ros.robot.whole_body import WholeBody

_WINDOW, _ORDER = 0.2, 3
_SETTLING, _BLEND = 0.3, 0.1
# The body leans ahead of the arms, within two or three of its time constants as a pendulum; before that it stands.
_LEANING, _LEANING_SHARE = 0.9, 0.7
_DECIMALS = 4


@attrs.frozen(eq=False)
class Record:
    """How far a run was from its plan, from the plan's start on: every ``period`` s the measured less the planned lean
    [N, 2], rad, ball's place [N, 2], m, in the plan's axes, and the drive torque sent less that planned [N, 2], N m.
    """

    period: float
    lean: Array
    ball: Array
    torque: Array

    @property
    def duration(self) -> float:
        """How long it is, s."""
        return self.period * (len(self.lean) - 1)


@attrs.frozen(eq=False)
class Learned:
    """What ``runs`` of a plan have taught: every ``step`` s from the plan's start the couple [N, 2] (roll, pitch), N m,
    that comes to what pulled before the arms began, and the drive torque [N, 2] that the model lacks. ``mark``: of the
    plan that it holds for.
    """

    mark: PlanMark
    runs: int
    step: float
    moment: Array
    torque: Array

    def outside_moment(self, most: float) -> OutsideMoment:
        """As the planner takes it, nothing of it beyond ``most``, N m."""
        moment, torque = (np.clip(each, -most, most) for each in (self.moment, self.torque))
        return OutsideMoment(self.step * np.arange(len(moment), dtype=float), moment, torque)


def lacking_along(
    body: WholeBody, request: PlanRequest, times: Array, lean: Array, rates: tuple[Array, Array], ball: Array
) -> tuple[Array, Array]:
    """The couple [N, 2] that a motion must have had, and the drive torque [N, 2] that goes with it, N m, rotors and
    friction left out: leans [N, 2] with rates and accelerations, and the ball's accelerations [N, 2] in the plan's
    axes, at evenly spaced times [N].
    """
    terms = terms_along(body, request, times, float(times[1] - times[0]))
    outside = outside_motion(attrs.evolve(request, moment=None), times, ball)
    description = body.description
    radius, apparent = description.parameters.ball.radius, description.ball_apparent_mass
    rows = balance_rows(terms, outside, lean, *rates, radius, apparent)
    return rows.residual, rows.torque[:, :2] - rows.residual


def lacking_in_run(body: WholeBody, request: PlanRequest, plan: LeanPlan, record: Record) -> tuple[Array, Array]:
    """Couple and drive torque [N, 2], N m, on the plan's grid, that a run shows beside what body and request know of.

    Only the deviations are smoothed: the plan's own motion is fast, and known.
    """
    window = max(_ORDER + 2, 2 * round(0.5 * _WINDOW / record.period) + 1)

    def smooth(values: Array, derivative: int) -> Array:
        """The smoothed deviation, or its derivative in time of that order."""
        return np.asarray(savgol_filter(values, window, _ORDER, deriv=derivative, delta=record.period, axis=0))

    there = plan.times <= record.duration + 1e-9
    times = plan.times[there]
    at = np.minimum(np.rint(times / record.period).astype(int), len(record.lean) - 1)
    lean, rate, acceleration = (smooth(record.lean, k)[at] for k in (0, 1, 2))
    planned = plan.lean[there], (plan.lean_rate[there], plan.lean_acceleration[there]), plan.ball_acceleration[there]
    rates = planned[1][0] + rate, planned[1][1] + acceleration
    moment, needed = lacking_along(
        body, request, times, planned[0] + lean, rates, planned[2] + smooth(record.ball, 2)[at]
    )
    sent = smooth(record.torque, 0)[at] + plan.torque[there, :2]
    return moment, sent - needed - plan.rotor_torque[there, :2]


def learn(
    before: Learned | None,
    mark: PlanMark,
    lacking: tuple[Array, Array],
    request: PlanRequest,
    parameters: CompensationParameters,
) -> Learned:
    """Take what a run lacked, as :func:`lacking_in_run` has it, into what was learnt ``before``.

    It counts from what there was before the arms began, which the trim bears. Once the arms rest the couple goes on as
    it is on average, and no torque: what the drive's dry friction holds then is no matter of the motion. Each run
    counts as much as ``repetition.newest`` or an equal share of all, whichever is more.
    """
    settings, step = parameters.repetition, parameters.planner.step
    new = [_change(each, request, step, held) for each, held in zip(lacking, (1.0, 0.0))]
    runs = 1
    if before is not None and before.mark == mark and len(before.moment) == len(new[0]):
        runs = before.runs + 1
        share = max(1.0 / runs, settings.newest)
        new = [old + share * (each - old) for old, each in zip((before.moment, before.torque), new)]
    moment, torque = (np.clip(each, -settings.moment, settings.moment).round(_DECIMALS) for each in new)
    return Learned(mark, runs, step, moment, torque)


def _change(values: Array, request: PlanRequest, step: float, held: float) -> Array:
    times = step * np.arange(len(values))
    begin, end = request.lead_in, request.lead_in + request.arms.duration + _SETTLING
    leaning = max(begin - _LEANING, (1.0 - _LEANING_SHARE) * begin)
    change = values - values[times <= leaning].mean(axis=0)
    rest = held * (change[times >= end].mean(axis=0) if times[-1] > end else change[-1])
    into = np.clip((times - leaning) / max(begin - leaning, _BLEND), 0.0, 1.0)[:, None]
    out = np.clip((times - end + _BLEND) / _BLEND, 0.0, 1.0)[:, None]
    return np.asarray(into * ((1.0 - out) * change + out * rest))


def plan_with_learned(
    learned: Learned,
    said: WholeBody,
    body: WholeBody,
    request: PlanRequest,
    plan: LeanPlan,
    parameters: CompensationParameters,
) -> LeanPlan:
    """The plan for a request with what runs before have taught, for a ``body`` that by now may believe to hold other
    loads than were ``said`` when it was learnt: ``plan`` is its plan without. Within ``repetition.moment``.
    """
    left = learned.outside_moment(parameters.repetition.moment)
    if not _alike(said, body):
        motion = plan.times, plan.lean, (plan.lean_rate, plan.lean_acceleration), plan.ball_acceleration
        explained, by_said = lacking_along(said, request, *motion)
        _, by_believed = lacking_along(body, request, *motion)
        moment, torque = left.at(plan.times)
        moment, torque = moment - explained, torque + by_said - by_believed
        left = OutsideMoment(plan.times, moment - moment[0], torque - torque[0])
    return plan_lean(body, attrs.evolve(request, moment=left), parameters)


def _alike(one: WholeBody, other: WholeBody) -> bool:
    """Whether both hold the same."""
    loads, others = one.loads, other.loads
    return loads.keys() == others.keys() and all(
        held.mass == others[hand].mass
        and np.array_equal(held.center, others[hand].center)
        and np.array_equal(held.inertia, others[hand].inertia)
        for hand, held in loads.items()
    )
