"""What is made for a posture of the arms is made anew as they move."""

from __future__ import annotations

from ballbal_ros.balance.changeover import ChangeOver
from ballbal_ros.balance.controller import Controller
from ballbal_ros.balance.judge import Judge
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.whole_body import Posture, WholeBody

_GAINS, _REGION = 10, 250


class Rescheduling:
    """Gains follow the posture every tenth tick, the capturable region each half second; arms at rest need neither."""

    def __init__(self, body: WholeBody, gains: ChangeOver, controller: Controller, judge: Judge) -> None:
        self._body, self._gains, self._controller, self._judge = body, gains, controller, judge
        self._ticks = 0
        self._scheduled: Posture | None = None
        self._judged: tuple[Posture | None, float] = (None, 0.0)

    def tick(self, arm_position: Array) -> None:
        """One tick with the arms there [n], rad; a change of parameters that is under way goes on as well."""
        self._ticks += 1
        gains = self._gains
        posture = self._body.posture(arm_position) if self._ticks % _GAINS == 0 else None
        if gains.under_way or (posture is not None and not posture.like(self._scheduled)):
            gains.tick(self._controller, posture)
            self._scheduled = posture or self._scheduled
        if posture is not None and self._ticks % _REGION == 0:
            limit = gains.torque_limit
            if not (posture.like(self._judged[0]) and limit == self._judged[1]):
                self._judge.use(posture, limit)
                self._judged = posture, limit
