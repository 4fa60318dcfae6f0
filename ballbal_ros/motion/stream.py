"""Arms that are streamed or moved by hand: what is known of their next moments, and the lean plans that go with it."""

from __future__ import annotations

from collections import deque

import attrs
import numpy as np

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.motion.plan_request import StartState
from ballbal_ros.motion.receding import HeldPath, RecedingPlanner, lean_kick
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody

_KEPT, _LONG = 0.5, 3.0
# s: nearer samples say more of noise than of rates; and for how long steps are added up.
_NEAREST, _ADDED_UP = 4.9e-3, 0.2
_MOVES = 2e-3
_ALIKE = 1e-9
# rad, rad/s: less than this of the arms' motion needs no new plan.
_RESTS = 1e-3


@attrs.frozen(eq=False)
class SampledPath:
    """Arm positions, rates and accelerations [N, n] at times [N], s, linear in between, which holds its ends."""

    times: Array
    position: Array
    rate: Array
    acceleration: Array

    @property
    def duration(self) -> float:
        """Time of the last sample, s."""
        return float(self.times[-1])

    def sample(self, times: Array) -> tuple[Array, Array, Array]:
        """Positions, rates and accelerations [M, n] at times [M], s."""
        index = np.clip(np.searchsorted(self.times, times, side="right") - 1, 0, len(self.times) - 2)
        span = self.times[index + 1] - self.times[index]
        share = np.clip((times - self.times[index]) / span, 0.0, 1.0)[:, None]
        position, rate, acceleration = (
            values[index] + share * (values[index + 1] - values[index])
            for values in (self.position, self.rate, self.acceleration)
        )
        return position, rate, acceleration


class ArmStream:
    """A stream of arm positions [n] with the times, s, at which the arms will be (or were) there."""

    def __init__(self, description: RobotDescription) -> None:
        self._description = description
        self._rows: deque[tuple[float, Array, Array | None]] = deque()

    def __len__(self) -> int:
        return len(self._rows)

    @property
    def known_until(self) -> float | None:
        """Time of the last sample, s; None before the first."""
        return self._rows[-1][0] if self._rows else None

    @property
    def last(self) -> Array | None:
        """The last position [n]; None before the first."""
        return self._rows[-1][1] if self._rows else None

    @property
    def moves(self) -> bool:
        """Whether the arms have moved within the last seconds."""
        return bool(self._rows) and bool(np.abs(self._rows[-1][1] - self._rows[0][1]).max() > _MOVES)

    def clear(self) -> None:
        """Forget all."""
        self._rows.clear()

    def take(self, time: float, position: Array, rate: Array | None = None) -> bool:
        """Take a sample; a rate that is not there, or NaN, is found from its neighbours.

        False for one that is not later than the last by 5 ms: it is passed over.
        """
        if self._rows and time <= self._rows[-1][0] + _NEAREST:
            return False
        while len(self._rows) > 3 and self._rows[2][0] < time - _LONG:
            self._rows.popleft()
        self._rows.append((time, position.copy(), None if rate is None else rate.copy()))
        return True

    def beyond(self, time: float, position: Array) -> Array:
        """How much further [n] each joint would go to ``position`` [n] at a time, s, than its velocity limit lets it
        from any sample of the last 0.2 s, or the last: many small steps count as one.
        """
        rows = list(self._rows)
        recent = [row for row in rows if row[0] > time - _ADDED_UP] or rows[-1:]
        passed = np.array([min(time - row[0], _ADDED_UP) for row in recent])
        steps = np.abs(position - np.array([row[1] for row in recent]))
        return np.asarray((steps - passed[:, None] * self._description.velocity_limit).max(axis=0))

    def path(self, begin: float) -> SampledPath:
        """What is known, its times counted from ``begin``, s; what is long past is forgotten. Two samples at least.

        Rates that nobody gave are within the joints' velocity limits.
        """
        rows = self._rows
        while len(rows) > 3 and rows[2][0] < begin - _KEPT:
            rows.popleft()
        times = np.array([row[0] for row in rows]) - begin
        position = np.array([row[1] for row in rows])
        fastest = self._description.velocity_limit
        rate = np.clip(np.gradient(position, times, axis=0), -fastest, fastest)
        for k, row in enumerate(rows):
            if row[2] is not None:
                rate[k] = np.where(np.isnan(row[2]), rate[k], row[2])
        return SampledPath(times, position, rate, np.gradient(rate, times, axis=0))

    def held(self, begin: float, ahead: float, longest: float, stop: float) -> HeldPath:
        """What is known from ``begin``, s, on, and a smooth stop beyond it within ``stop`` s.

        Where less than ``ahead`` s are known, they are taken to go on at the last rate until then, for ``longest`` s at
        most and as far as the joints' limits let them.
        """
        path, low, high = self.path(begin), self._description.position_low, self._description.position_high
        more = min(ahead - path.duration, longest)
        if more > _ALIKE:
            faster = path.rate[-1] + more * path.acceleration[-1]
            goes = np.clip(path.position[-1] + 0.5 * more * (path.rate[-1] + faster), low, high)
            path = SampledPath(
                np.append(path.times, path.duration + more),
                np.vstack((path.position, goes)),
                np.vstack((path.rate, faster)),
                np.vstack((path.acceleration, path.acceleration[-1])),
            )
        return HeldPath.of(path, path.duration, stop, low, high)


class StreamCompensation:
    """Makes lean plans from an :class:`ArmStream`, one after the other, each going on where the one before is."""

    def __init__(self, description: RobotDescription, parameters: CompensationParameters) -> None:
        self.description, self.parameters = description, parameters
        self.stream = ArmStream(description)
        self._planner = RecedingPlanner(WholeBody(description), parameters, 0.5 * parameters.stream.interval)
        self._last: tuple[float, LeanPlan, HeldPath] | None = None
        self._before: tuple[float, LeanPlan, HeldPath] | None = None

    def set_load(self, load: Load) -> None:
        """What a hand holds from now on."""
        self._planner.body.set_load(load)

    def begin(self) -> None:
        """Forget the stream; the next plan begins at rest, in balance."""
        self._last = None
        self._before = None
        self.stream.clear()

    def take_back(self) -> None:
        """The last plan was refused: the one before it goes on."""
        self._last = self._before

    def next(self, now: float) -> tuple[float, LeanPlan] | None:
        """Start, s, and lean plan from what is known now; None while too little is, or nothing new since the last.

        Raises :class:`~ballbal_ros.errors.PlanError`.
        """
        settings = self.parameters.stream
        if len(self.stream) < 2:
            return None
        begin = now + settings.latency
        longest = settings.latency + settings.interval
        arms = self.stream.held(begin, settings.interval, longest, settings.stop)
        if self._nothing_new(begin, arms):
            return None
        plan = self._planner.plan(self._start(begin, arms), arms, begin)
        self._before, self._last = self._last, (begin, plan, arms)
        return begin, plan

    @property
    def until(self) -> float:
        """When the last plan ends, s; long ago without any."""
        return -np.inf if self._last is None else self._last[0] + self._last[1].duration

    @property
    def arms(self) -> tuple[float, HeldPath] | None:
        """What the last plan takes the arms to do, and from when on, s."""
        return None if self._last is None else (self._last[0], self._last[2])

    def _nothing_new(self, begin: float, arms: HeldPath) -> bool:
        """Whether the arms rest where the plan before took them to come to rest: then that one brings the ball back."""
        if self._last is None:
            return False
        start, _, believed = self._last
        times = np.array([0.0, arms.duration])
        position, rate, _ = arms.sample(times)
        there = believed.sample(times + begin - start)[0]
        return bool(np.abs(rate[0]).max() < _RESTS and np.abs(position - there).max() < _RESTS)

    def _start(self, begin: float, arms: HeldPath) -> StartState:
        if self._last is not None and begin <= self._last[0] + self._last[1].duration:
            since, plan, believed = begin - self._last[0], self._last[1], self._last[2]
            lean, lean_rate, ball, ball_rate = plan.at(since)
            position, rate = (values[0] for values in arms.sample(np.zeros(1))[:2])
            kick = lean_kick(self._planner.body, position, rate - believed.sample(np.array([since]))[1][0], lean)
            # It came evenly since the plan before, and the lean has gone half of the way that it makes.
            lean, lean_rate = lean + 0.5 * since * kick, lean_rate + kick
            return StartState(lean, lean_rate, ball - plan.ball[-1], ball_rate)
        position = arms.sample(np.array([min(arms.known, 0.0)]))[0][0]
        lean = np.array(self._planner.body.posture(position).equilibrium_lean)
        return StartState(lean, np.zeros(2), np.zeros(2), np.zeros(2))
