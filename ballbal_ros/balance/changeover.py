"""Other weights, noise figures and limits while the robot stands, without a step in torque.

A change takes two steps. :func:`prepare` checks that the loop with the new values keeps its margins on the present
model, and designs the gains: 0.15 s of work, so it belongs in a process beside the loop's. :class:`ChangeOver` then
fades, tick by tick. Old and new feedback both work on the one estimate; what the loop sends is

    τ = (1 - s) K_old x̂ + s K_new x̂,   s from 0 to 1 over ``ramp_time``, |Δs (K_new - K_old) x̂| ≤ TORQUE_STEP a tick,

so that not even a change in the middle of a push makes a step. Limits go to their new value by as small steps.
"""

from __future__ import annotations

from collections.abc import Mapping

import attrs
import numpy as np

from ballbal_ros.balance.controller import STATES, Controller, ControllerMatrices
from ballbal_ros.balance.gains import Gains, checked_design, design, least_margins
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.balance.schedule import GainSchedule, PostureRange
from ballbal_ros.errors import BallbalError, ParameterError
from ballbal_ros.parameter_change import changes
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture

TORQUE_STEP = 0.4
"""Most that a change may add to the torque in one tick, N m."""
_ON_THE_WAY = (0.25, 0.5, 0.75)


@attrs.frozen(eq=False)
class PreparedChange:
    """New parameters, checked, with the gains designed for them; ``schedule`` is None where the gains stay.

    ``margins``: the least of each kind, see :func:`~ballbal_ros.balance.gains.least_margins`; None where they stay.
    """

    parameters: BalanceParameters
    schedule: GainSchedule | None
    margins: Mapping[str, float] | None = None


def prepare(
    reach: PostureRange,
    description: RobotDescription,
    old: BalanceParameters,
    new: BalanceParameters,
    posture: Posture,
    where: str = "balance.yaml",
) -> PreparedChange:
    """Check new parameters on the present posture, and design gains on the grid of ``reach``, as the present ones are.

    Raises :class:`BallbalError` in one line, ``where`` first, with the values that change: for one that may not change
    while the loop runs, where a margin is missed, or where the way from the old gains to the new is not stable.
    """
    differ = changes(old, new)
    for change in differ:
        if not change.declared.runtime:
            raise ParameterError(where, f"{change} can't change while the loop runs", "configure balance anew")
    deciding = [str(change) for change in differ if _decides_gains(change.name)]
    if not deciding:
        return PreparedChange(new, None)
    try:
        gains, found = checked_design(posture, description, new)
        _check_the_way(design(posture, description, old), gains)
    except BallbalError as error:
        raise BallbalError(where, f"with {', '.join(deciding)} {error.what}", error.remedy) from error
    return PreparedChange(new, GainSchedule(description, new, reach), least_margins(found))


def _decides_gains(name: str) -> bool:
    return name == "trim" or name.startswith(("weights.", "estimator."))


def _check_the_way(old: Gains, new: Gains) -> None:
    for share in _ON_THE_WAY:
        for before, after in ((old.station, new.station), (old.heading, new.heading)):
            radius = _between(before, after, share).spectral_radius()
            # Not so if it were NaN either.
            if not radius < 1.0:
                what = f"the loop would not be stable {share:.0%} of the way from the old gains to the new"
                raise BallbalError("balance.yaml", what, "go there in smaller steps")


def _between(old: Regulator, new: Regulator, share: float) -> Regulator:
    pairs = {n: (getattr(old, n), getattr(new, n)) for n in ("feedback", "filter_gain", "trim_state", "trim_input")}
    return attrs.evolve(new, **{n: (1.0 - share) * a + share * b for n, (a, b) in pairs.items()})


class ChangeOver:
    """The gains and limits in force at each tick, and the way from the old to the new. Not thread-safe.

    ``largest_step``, N m: the most that changes have added to the torque in one tick so far.
    """

    def __init__(self, schedule: GainSchedule, parameters: BalanceParameters, torque_limit: float) -> None:
        """``torque_limit``, N m: what the robot itself allows; parameters may allow less."""
        self.schedule, self._parameters, self._robot_limit = schedule, parameters, torque_limit
        self._next: GainSchedule | None = None
        self._pair: tuple[ControllerMatrices, ControllerMatrices] | None = None
        self._share = 0.0
        self._settled = True
        self.largest_step = 0.0
        self.torque_limit = min(parameters.limits.torque, torque_limit)

    @property
    def under_way(self) -> bool:
        """Whether gains or limits are not yet what was asked for."""
        return self._next is not None or not self._settled

    def begin(self, change: PreparedChange) -> None:
        """Set out for a prepared change; one that is under way is left where it has come to."""
        self._parameters, self._settled = change.parameters, False
        if change.schedule is None:
            return
        if self._next is not None:
            self.schedule = self.schedule.mixed(self._next, self._share)
        self._next, self._pair, self._share = change.schedule, None, 0.0

    def tick(self, controller: Controller, posture: Posture | None) -> None:
        """Give the controller this tick's gains; ``posture`` where it has been worked out anew, None in between."""
        if self._next is None:
            if posture is not None:
                controller.change(self.schedule.at(posture))
        elif posture is not None:
            self._pair = self.schedule.at(posture), self._next.at(posture)
        if self._pair is not None:
            self._fade(controller, *self._pair)
        if not self._settled:
            self._settle(controller)

    def _fade(self, controller: Controller, old: ControllerMatrices, new: ControllerMatrices) -> None:
        loop = self._parameters.loop
        rise = loop.period / max(self._parameters.ramp_time, loop.period)
        jump = float(np.abs((new.act - old.act) @ controller.seen).max())
        before = self._share
        self._share = min(1.0, before + (rise if jump * rise <= TORQUE_STEP else TORQUE_STEP / jump))
        self.largest_step = max(self.largest_step, (self._share - before) * jump)
        if self._share >= 1.0 and self._next is not None:
            controller.change(new)
            self.schedule, self._next, self._pair = self._next, None, None
            return
        s = self._share
        controller.change(
            attrs.evolve(
                new,
                correct=old.correct + s * (new.correct - old.correct),
                act=old.act + s * (new.act - old.act),
                predict=old.predict + s * (new.predict - old.predict),
            )
        )

    def _settle(self, controller: Controller) -> None:
        """Limits towards what is asked for, each by what makes TORQUE_STEP at the most."""
        limits = self._parameters.limits
        on_moment = float(np.abs(controller.act[:, STATES : STATES + 3]).max())
        wanted = min(limits.torque, self._robot_limit)
        self.torque_limit = _towards(self.torque_limit, wanted, TORQUE_STEP)
        controller.moment_step = limits.trim_rate * self._parameters.loop.period
        controller.moment_limit = _towards(controller.moment_limit, limits.trim_moment, TORQUE_STEP / (1.0 + on_moment))
        self._settled = self.torque_limit == wanted and controller.moment_limit == limits.trim_moment


def _towards(value: float, wanted: float, step: float) -> float:
    return min(wanted, value + step) if wanted > value else max(wanted, value - step)
