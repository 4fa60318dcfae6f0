"""Whether it can still come back, and whether the drive gives what it is sent: what makes the loop stop or trip by
itself.
"""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.balance.actuators import ActuatorWatch
from ballbal_ros.balance.answers import ACTUATOR, LEAN, SUPPLY
from ballbal_ros.balance.capture import CapturableRegion
from ballbal_ros.balance.linear_model import linear_model
from ballbal_ros.balance.output import TorqueOutput
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.senses import Senses
from ballbal_ros.balance.watch import Watch
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture

_WEAK = 0.5

Pair = tuple[float, float]


class Judge:
    """Judges one tick after the other. ``region`` is the capturable region of the present posture and drive;
    ``capture_use`` how much of it the last tick used.
    """

    def __init__(
        self,
        description: RobotDescription,
        parameters: BalanceParameters,
        watch: Watch,
        output: TorqueOutput,
        posture: Posture,
    ) -> None:
        self._description, self._parameters, self._watch, self._output = description, parameters, watch, output
        self._trip_lean = parameters.limits.trip_lean
        self._fastest = description.parameters.limits.ball_speed
        self._half_rate = 0.5 / parameters.loop.period
        self._model = linear_model(posture, description)
        self._actuators = ActuatorWatch(self._model, description.drive.torque_map, parameters.loop.period)
        self.capture_use = 0.0
        self._posture = posture
        self._limit = min(parameters.limits.torque, description.parameters.limits.drive_torque)
        self.region = self._new_region()
        self._near = 0.05 * self._trip_lean
        self.begin()

    def _new_region(self) -> CapturableRegion:
        torque = min(self._limit * self._output.scale, self._output.level_limit)
        reserve = self._parameters.limits.capture_reserve
        return CapturableRegion.of(self._model, self._posture, self._description, torque, reserve)

    def use(self, posture: Posture | None = None, torque_limit: float | None = None) -> None:
        """Work the region out anew: the posture is another, the loop's torque limit (N m) is, or the drive gives
        less.
        """
        if posture is not None and not _alike(posture, self._posture):
            self._posture, self._model = posture, linear_model(posture, self._description)
            self._actuators.use(self._model)
        elif posture is not None and torque_limit in (None, self._limit):
            return
        if torque_limit is not None:
            self._limit = torque_limit
        self.region = self._new_region()

    def begin(self) -> None:
        """Nothing has been sent before."""
        self._actuators.restart()
        self._effort = self._output.effort

    def sent(self) -> None:
        """Take note of the efforts in force up to now; they act one loop delay later."""
        self._effort = self._output.effort

    def look(self, now: float, reference: list[float], off: Pair, off_rates: Pair, estimate: list[float]) -> None:
        """Tell the watch what is wrong with lean, ball and drive. ``off``, ``off_rates``: lean and its rate off the
        reference; ``estimate``: the controller's, deviations and moments.
        """
        watch, output = self._watch, self._output
        velocity = estimate[6] + reference[6], estimate[7] + reference[7]
        if watch.quiet and self._far_within(off, off_rates, velocity, reference):
            return
        used = math.hypot(reference[10], reference[11])
        self.capture_use = self.region.use(off, off_rates, (estimate[10], estimate[11]), velocity, used)
        wrong = ""
        if not math.hypot(*off) <= self._trip_lean:
            wrong = "beyond limits.trip_lean"
        elif not self.capture_use <= 1.0:
            wrong = "beyond capture"
        elif not math.hypot(*velocity) <= self._fastest:
            wrong = "ball too fast"
        if wrong or not watch.quiet:
            watch.see(now, LEAN, wrong)
        if output.lost:
            watch.see(now, ACTUATOR, "dead, with a spare" if output.gives_heading else "dead, without a spare")
        if output.scale < 1.0:
            watch.see(now, SUPPLY, "sags" if output.scale >= _WEAK else "too weak")

    def _far_within(self, off: Pair, off_rates: Pair, velocity: Pair, reference: list[float]) -> bool:
        """Whether nothing can be wrong, for a small part of what it takes to see it: the common case."""
        near, still, weak = self._near, 0.3 * self._fastest, 0.2 * self._limit
        for lean, rate, speed, torque in zip(off, off_rates, velocity, reference[10:12]):
            if not (-near < lean < near and -near < rate < near and -still < speed < still and -weak < torque < weak):
                return False
        self.capture_use = 0.0
        return not self._output.lost and self._output.scale >= 1.0

    def look_at_actuators(self, senses: Senses, reference: list[float], off: Pair, off_rates: Pair) -> None:
        """See whether what was sent a loop delay ago came about, and do without an actuator that gives nothing."""
        found = senses.encoders.sliding
        if found is not None:
            # More effort would only make it slide faster.
            self._do_without(found, senses)
        if not (senses.imu and senses.drive):
            self._actuators.restart()
            return
        if not self._actuators.sent(self._effort):
            return
        half, (x, y), (bx, by) = self._half_rate, senses.moved, senses.moved_before
        turning = senses.attitude.rates[2] - reference[9]
        velocity = half * (x + bx) - reference[6], half * (y + by) - reference[7]
        found = self._actuators.see(np.array((*off_rates, *velocity, turning, *off, *reference[10:13])))
        if found is not None:
            self._do_without(found, senses)

    def _do_without(self, index: int, senses: Senses) -> None:
        output = self._output
        if index not in output.lost and output.can_lose(index):
            output.lose(index)
            senses.spin_held = senses.encoders.spin_held = output.gives_heading
            self._actuators.restart()
            self.use()


def _alike(one: Posture, other: Posture) -> bool:
    """Whether mass moment and inertia are the same to a few per cent: as good as the linear model is."""
    moment, before = one.mass * one.center, other.mass * other.center
    inertia = np.diag(one.inertia) / np.diag(other.inertia)
    return bool(np.abs(moment - before).max() < 0.02 * np.abs(before).max() and np.abs(inertia - 1.0).max() < 0.03)
