"""Which of the gyro's rates are believed: none that jumps, and after absurd ones none for a while."""

from __future__ import annotations

from ballbal_ros.balance.attitude import Triple
from ballbal_ros.balance.parameters import BalanceParameters

_QUARANTINE = 10
_ABSURD = ("jump", "not finite", "saturated")


class RateDoubt:
    """Judges the body's rate tick by tick. ``before``: its x and y in the tick before, rad/s, ``base_link``;
    ``unseen``: for how many ticks in a row there was none to be believed.
    """

    def __init__(self, parameters: BalanceParameters) -> None:
        self._jump, self._start = parameters.limits.rate_jump, parameters.limits.rate_start
        self.before = (0.0, 0.0)
        self.unseen = 0
        self._quarantine, self._quarantined_for = 0, ""

    def quarantined(self, wrong: str) -> str:
        """After absurd IMU data, good ones must come for a while before they are believed: among noise some are
        always near.
        """
        if wrong in _ABSURD:
            self._quarantine, self._quarantined_for = _QUARANTINE, wrong
        elif self._quarantine > 0 and not wrong:
            self._quarantine -= 1
            wrong = self._quarantined_for
        self.unseen = self.unseen + 1 if wrong else 0
        return wrong

    def jumps(
        self,
        body_rate: Triple,
        lean_rate: tuple[float, float],
        leaning: float,
        turn: tuple[float, float, float, float],
    ) -> bool:
        """Whether the gyro is further from the ``lean_rate`` expected, rad/s, than anything but a fault takes it.

        ``leaning``: the pitch, rad; ``turn``: sine and cosine of roll and pitch at the tick's beginning.
        """
        wx, wy, wz = body_rate
        sr, cr, _, _ = turn
        roll = wx + leaning * wz - lean_rate[0]
        pitch = cr * wy - sr * wz - lean_rate[1]
        # A change that no push makes in a tick; and after one, only what is much nearer is believed again.
        (bx, by), start = self.before, self._start
        self.before = wx, wy
        if self.unseen == 0 and not (-start < wx - bx < start and -start < wy - by < start):
            return True
        most = self._jump if self._quarantine == 0 else start
        return not (-most < roll < most and -most < pitch < most)
