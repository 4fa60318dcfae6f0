"""Whether it can still come back, and whether the drive gives what it is sent: what makes the loop stop or trip by
itself.
"""

from __future__ import annotations

import math

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
Triple = tuple[float, float, float]


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
        model = linear_model(posture, description)
        self._actuators = ActuatorWatch(model, description.drive.torque_map, parameters.loop.period)
        self.capture_use = 0.0
        self._posture = posture
        self._limit = min(parameters.limits.torque, description.parameters.limits.drive_torque)
        self.region = self._new_region()
        self.begin()

    def _new_region(self) -> CapturableRegion:
        torque = min(self._limit * self._output.scale, self._output.level_limit)
        reserve, model = self._parameters.limits.capture_reserve, linear_model(self._posture, self._description)
        return CapturableRegion.of(model, self._posture, self._description, torque, reserve)

    def use(self, posture: Posture | None = None, torque_limit: float | None = None) -> None:
        """Work the region out anew: the posture is another, the loop's torque limit (N m) is, or the drive gives
        less.
        """
        if posture is not None:
            self._posture = posture
            self._actuators.use(linear_model(posture, self._description))
        if torque_limit is not None:
            self._limit = torque_limit
        self.region = self._new_region()

    def begin(self) -> None:
        """Nothing has been sent before."""
        self._actuators.restart()
        self._torque: Triple = (0.0, 0.0, 0.0)
        self._effort = self._output.effort

    def sent(self, torque: Triple, reference: list[float]) -> None:
        """Take note of the torque, N m, and efforts in force up to now; they act one loop delay later."""
        x, y, z = reference[10:13]
        self._torque = torque[0] - x, torque[1] - y, torque[2] - z
        self._effort = self._output.effort

    def look(self, now: float, reference: list[float], off: Pair, off_rates: Pair, estimate: list[float]) -> None:
        """Tell the watch what is wrong with lean, ball and drive. ``off``, ``off_rates``: lean and its rate off the
        reference; ``estimate``: the controller's, deviations and moments.
        """
        velocity = estimate[6] + reference[6], estimate[7] + reference[7]
        used = math.hypot(reference[10], reference[11])
        self.capture_use = self.region.use(off, off_rates, (estimate[10], estimate[11]), velocity, used)
        wrong, watch = "", self._watch
        if not math.hypot(*off) <= self._trip_lean:
            wrong = "beyond limits.trip_lean"
        elif not self.capture_use <= 1.0:
            wrong = "beyond capture"
        elif not math.hypot(*velocity) <= self._fastest:
            wrong = "ball too fast"
        if wrong or not watch.quiet:
            watch.see(now, LEAN, wrong)
        output = self._output
        if output.lost:
            watch.see(now, ACTUATOR, "dead, with a spare" if output.gives_heading else "dead, without a spare")
        if output.scale < 1.0:
            watch.see(now, SUPPLY, "sags" if output.scale >= _WEAK else "too weak")

    def look_at_actuators(self, senses: Senses, reference: list[float], off: Pair, off_rates: Pair) -> None:
        """See whether what was sent a loop delay ago came about, and do without an actuator that gives nothing."""
        found = senses.encoders.sliding
        if found is not None:
            # More effort would only make it slide faster.
            self._do_without(found, senses)
        if not (senses.imu and senses.drive):
            self._actuators.restart()
            return
        half, (x, y), (bx, by) = self._half_rate, senses.moved, senses.moved_before
        turning = senses.attitude.rates[2] - reference[9]
        rates = (*off_rates, half * (x + bx) - reference[6], half * (y + by) - reference[7], turning)
        found = self._actuators.see(rates, off, self._torque, self._effort)
        if found is not None:
            self._do_without(found, senses)

    def _do_without(self, index: int, senses: Senses) -> None:
        output = self._output
        if index not in output.lost and output.can_lose(index):
            output.lose(index)
            senses.spin_held = senses.encoders.spin_held = output.gives_heading
            self._actuators.restart()
            self.use()
