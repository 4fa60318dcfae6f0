"""The delay line: ``arm_stream`` goes through to ``arm_command`` a delay later, with lean plans made anew all the time.

A stream begins with the arms at rest where they are. Its first lean plan is acknowledged before any command goes out.
Whenever it pauses, or a lean plan is refused, the arms come to rest as the lean plan in force takes them to.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from ballbal_ros.errors import BallbalError, PlanError, PlanRefused
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.receding import HeldPath
from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.motion.stream import StreamCompensation
from ballbal_ros.nodes.lean_trajectory import lean_plan_message
from ballbal_ros.nodes.messages import JointReader, seconds, stamp_text, to_time
from ballbal_ros.nodes.trajectories import path_message
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load

_TOPIC = "arm_stream"
_KNOT = 0.02
_APART = 0.05
_SOON = 1e-9
_MEASURED_EVERY = 0.01
_REFUSALS, _UNANSWERED = 3, 50
_AHEAD = 1.0
# s from where a stream was ended to where one may begin anew.
_REST = 1.0
_PAUSE, _STEP = 0.2, 0.005


class ArmStreaming:
    """Takes the stream, and publishes lean plans and arm commands. ``check`` says where the arms are [n], or raises
    why nothing may be streamed; ``refuse`` is told the topic and why.
    """

    def __init__(
        self,
        description: RobotDescription,
        schedule: ArmSchedule,
        to_balance: Any,
        to_arms: Any,
        check: Callable[[], Array],
        refuse: Callable[[str, str], None],
    ) -> None:
        self._description, self._schedule = description, schedule
        self._to_balance, self._to_arms, self._check, self._refuse = to_balance, to_arms, check, refuse
        self._now = 0.0
        self._held: list[Load] = []
        self.change()

    def change(self) -> None:
        """Take the parameters of now; a stream that is under way ends."""
        parameters = self._schedule.parameters
        self._settings = parameters.stream
        # Arms can't be commanded before a lean plan that knows of it may start.
        self._delay = max(self._settings.delay, self._settings.latency + self._settings.interval)
        self._compensation = StreamCompensation(self._description, parameters)
        self._held = []
        self._streams = self._agreed = False
        self._next = self._next_sample = -np.inf
        self._plans, self._failed = 0, 0
        # Stamps of lean plans that balance has not answered: an answer may come after the next plan is asked for.
        self._asked: deque[str] = deque(maxlen=_UNANSWERED)
        self._why, self._again = "", -np.inf

    def take(self, message: Any) -> None:
        """A sample of the stream; one with something wrong is passed over, and why is told in diagnostics."""
        try:
            self._take(message)
        except BallbalError as error:
            self._refuse(_TOPIC, str(error))

    def _take(self, message: Any) -> None:
        stamp = seconds(message.header.stamp) or self._now
        if stamp > self._now + _AHEAD:
            what = f"has the stamp {stamp:.3f} s, and it is {self._now:.3f} s"
            raise PlanError(_TOPIC, what, "stamp it when it is sent")
        here = self._check()
        position, rate = self._values(message, here)
        stream = self._compensation.stream
        if not self._streams:
            if self._now < self._again:
                raise PlanRefused(_TOPIC, f"ended: {self._why}", f"begin anew after {self._again:.3f} s")
            if self._now < self._until:
                raise PlanRefused(_TOPIC, "came while streamed arms come to rest", f"begin after {self._until:.3f} s")
            self._compensation.begin()
            if np.abs(position - here).max() > _APART:
                raise PlanRefused(_TOPIC, "begins elsewhere than where the arms are", "begin there, at rest")
            self._streams, self._agreed, self._failed, self._why = True, False, 0, ""
        elif not self._agreed and np.abs(position - here).max() > _APART:
            self._stop("moves before balance has agreed")
            raise PlanRefused(_TOPIC, "moves before balance has agreed to lean", "let it rest for 0.2 s at first")
        self._check_step(stamp + self._delay, position)
        stream.take(stamp + self._delay, position, rate)

    def _check_step(self, time: float, position: Array) -> None:
        """A stream that jumps is refused; one that goes on after a pause has rested meanwhile."""
        stream = self._compensation.stream
        if stream.last is None or stream.known_until is None or time <= stream.known_until:
            return
        pause, beyond = time - stream.known_until, stream.beyond(time, position)
        if beyond.max() > _STEP:
            joint = int(np.argmax(beyond))
            name, step = self._description.joint_names[joint], abs(position - stream.last)[joint]
            raise PlanError(_TOPIC, f"jumps by {step:.3f} rad at {name}", "stream at 20 Hz or more, without gaps")
        if pause > _PAUSE:
            stream.take(time - _PAUSE, stream.last, np.zeros_like(position))

    def _values(self, message: Any, here: Array) -> tuple[Array, Array]:
        """Positions and rates [n]; joints that are not named stay where the stream, or the arm, has them."""
        known = self._compensation.stream.last if self._streams else None
        position = here.copy() if known is None else known.copy()
        rate = np.zeros_like(position)
        if len(message.position) != len(message.name) or len(message.velocity) not in (0, len(message.name)):
            counts = len(message.position), len(message.velocity), len(message.name)
            what = "has {} positions and {} velocities for {} names".format(*counts)
            raise PlanError(_TOPIC, what, "give one position a name, and velocities for all or none")
        for k, name in enumerate(message.name):
            index = self._description.joint_index(name, _TOPIC)
            value = float(message.position[k])
            low, high = float(self._description.position_low[index]), float(self._description.position_high[index])
            if not low - 1e-6 <= value <= high + 1e-6:
                raise PlanError(_TOPIC, f"{name} is {value:g}", f"its limits are {low:g} to {high:g}")
            position[index] = value
            rate[index] = float(message.velocity[k]) if len(message.velocity) else np.nan
        fastest = self._description.velocity_limit
        if np.any(np.abs(rate) > fastest * (1.0 + 1e-6)):
            raise PlanError(_TOPIC, f"has a velocity of {np.nanmax(np.abs(rate)):g} rad/s", "keep to joints' limits")
        return position, rate

    def go_on(self, now: float, arms: JointReader) -> None:
        """At joint states of ``now``, s: plan anew where it is time."""
        self._now = now
        try:
            if self._streams:
                self._plan(now)
            elif self._settings.measured and arms.complete:
                self._measure(now, arms)
        except BallbalError as error:
            self._stop(str(error))
            self._refuse(_TOPIC, str(error))

    def _measure(self, now: float, arms: JointReader) -> None:
        if now >= self._next_sample - _SOON:
            self._next_sample = now + _MEASURED_EVERY
            try:
                self._check()
            except BallbalError:
                self._compensation.begin()
                return
            self._compensation.stream.take(now, arms.position)
            if self._compensation.arms is not None or self._compensation.stream.moves:
                self._plan(now)

    def _plan(self, now: float) -> None:
        if now < self._next - _SOON:
            return
        self._next = now + self._settings.interval
        held = self._schedule.held_at(now)
        if held != self._held:
            gone = {load.hand for load in self._held} - {load.hand for load in held}
            self._held = held
            for load in [Load(hand, 0.0) for hand in gone] + held:
                self._compensation.set_load(load)
        made = self._compensation.next(now)
        if made is None:
            return
        begin, plan = made
        self._plans += 1
        self._asked.append(stamp_text(to_time(begin)))
        self._to_balance.publish(lean_plan_message(plan, to_time(begin)))
        if self._streams and self._agreed:
            self._command(begin)

    def _command(self, begin: float) -> None:
        """What the lean plan takes the arms to do, its stop included: so they do it whatever comes next."""
        in_force = self._compensation.arms
        if in_force is not None:
            self._to_arms.publish(path_message(_knots(in_force[1]), self._description.joint_names, to_time(begin)))

    def heard(self, values: Mapping[str, str]) -> None:
        """What ``balance_state`` says: a plan taken up, or refused."""
        taken, refused = values.get("plan", ""), values.get("refused plan", "")
        if taken in self._asked:
            self._agreed, self._failed = True, 0
            self._forget(taken)
        elif refused in self._asked:
            if refused == self._asked[-1]:
                self._compensation.take_back()
            self._forget(refused)
            self._failed += 1
            if self._failed >= _REFUSALS:
                self._stop(values.get("refusal", "refused by the balance node"))

    def _forget(self, answered: str) -> None:
        """This plan, and what was asked for before it, is answered."""
        while self._asked.popleft() != answered:
            pass

    def _stop(self, why: str) -> None:
        self._streams, self._why, self._again = False, why, self._now + _REST

    @property
    def _until(self) -> float:
        """When the last lean plan ends, s."""
        return self._compensation.until

    @property
    def idle(self) -> bool:
        """Whether nothing is streamed and no lean plan of a stream is in force."""
        return not self._streams and self._now >= self._until

    def check_over(self, topic: str) -> None:
        """Raise :class:`PlanRefused` while a lean plan of a stream is in force."""
        if self._now < self._until:
            raise PlanRefused(topic, "came while streamed arms come to rest", f"send it after {self._until:.3f} s")

    def end(self, why: str) -> None:
        """No more of this stream: the arms come to rest as the lean plan in force has it."""
        if self._streams:
            self._stop(why)

    def values(self) -> dict[str, object]:
        """What diagnostics tell of it."""
        values: dict[str, object] = {"stream delay s": self._delay, "streamed plans": self._plans}
        if self._streams:
            values["stream"] = "goes on" if self._agreed else "waits for balance"
        elif self._why:
            values["stream"] = f"ended: {self._why}"
        return values


def _knots(path: HeldPath) -> ArmPath:
    """The path from its time 0 on, as quintic pieces."""
    end = max(path.duration, _KNOT)
    knots = np.linspace(0.0, end, max(2, round(end / _KNOT) + 1))
    return ArmPath.through(knots, *path.sample(knots))

