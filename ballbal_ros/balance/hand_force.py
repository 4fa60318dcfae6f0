"""How hard somebody pulls at a hand: from the moment about the contact, and where the hand is.

The balance rows hold whatever the drive does: their residual with the motion as it was, arms at rest, is the moment
about the contact that the outside world gave. Over a window from t_0 to t_1, T long, with the rows linear in lean and
ball acceleration, M(φ) φ'' + C(φ) p'' + g(φ, φ') = d:

    d = 1/T [ Σ M Δφ' + C Δp' + g Δt ]

so that rates are needed, but no acceleration. A horizontal force f at a point h above the contact is then

    f_x = d_pitch / h,    f_y = -d_roll / h

A vertical force can't be told from a load: it is left out. A mass model in error amounts to a force
too: m g e / h for a mass centre wrong by e.
"""

from __future__ import annotations

import math
from collections import deque

import attrs
import numpy as np

from ballbal_ros.balance.linear_model import posture_terms
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from ballbal_ros.robot.whole_body import WholeBody

_PARTS = 5
_MOVED = 0.005


@attrs.frozen
class HandForce:
    """A horizontal force at a hand, (x, y) in N, ``base_footprint`` axes, and its standard error."""

    hand: str
    force: tuple[float, float]
    error: tuple[float, float]


@attrs.frozen
class OutsideMoment:
    """The moment about the contact (roll, pitch) in N m, ``base_footprint`` axes, and its standard error."""

    moment: tuple[float, float]
    error: tuple[float, float]


class PullWatch:
    """Keeps a window of the body's motion, and says on demand what pulls at it.

    ``window``: how long, s; ``every``: about how far apart samples come, s. :meth:`see` costs next to nothing.
    """

    def __init__(self, body: WholeBody, window: float = 0.5, every: float = 0.02) -> None:
        self._body = body
        self._rows: deque[tuple[float, ...]] = deque(maxlen=max(2 * _PARTS, round(window / every)) + 1)
        self._arms: deque[Array] = deque(maxlen=self._rows.maxlen)

    def see(
        self,
        time: float,
        lean: tuple[float, float],
        lean_rate: tuple[float, float],
        ball_rate: tuple[float, float],
        arm_position: Array,
    ) -> None:
        """Take a sample: s; (roll, pitch) and rates, rad; (vx, vy) of the ball, m/s, heading axes; arms [n]."""
        if self._rows and time <= self._rows[-1][0]:
            self.forget()
        self._rows.append((time, *lean, *lean_rate, *ball_rate))
        self._arms.append(arm_position.copy())

    def forget(self) -> None:
        """The motion before counts no more."""
        self._rows.clear()
        self._arms.clear()

    def moment(self) -> OutsideMoment | None:
        """The outside moment in the mean of the window; None while the window is short, or where the arms have moved
        the mass centre by more than 5 mm in it.

        The standard error is that of the mean of its parts: noise, and whatever changed within the window.
        """
        if len(self._rows) < (self._rows.maxlen or 0):
            return None
        first, last = (self._body.center_of_mass(arms).copy() for arms in (self._arms[0], self._arms[-1]))
        if np.abs(last - first).max() > _MOVED:
            return None
        table = np.array(self._rows)
        time, lean, rate, ball = table[:, 0], table[:, 1:3], table[:, 3:5], table[:, 5:7]
        description, count = self._body.description, len(table)
        single, none = posture_terms(self._body.posture(self._arms[-1])), np.zeros((count, 2))
        rows = balance_rows(
            single.at(np.zeros(count, np.int64)), OutsideMotion.at_rest(count), lean, rate, none,
            description.parameters.ball.radius, description.ball_apparent_mass,
        )  # fmt: skip
        step = np.diff(time)[:, None]

        def between(values: Array) -> Array:
            """The mean over each step of values at its two ends."""
            return np.asarray(0.5 * (values[1:] + values[:-1]))

        impulse = step * between(rows.residual)
        for matrix, change in ((rows.by_lean[..., 4:6], rate), (rows.by_ball_acceleration, ball)):
            impulse += np.einsum("nij,nj->ni", between(matrix), np.diff(change, axis=0))
        spans = [slice(part[0], part[-1] + 1) for part in np.array_split(np.arange(len(step)), _PARTS)]
        parts = np.array([impulse[span].sum(axis=0) / step[span].sum() for span in spans])
        mean = impulse.sum(axis=0) / step.sum()
        error = parts.std(axis=0, ddof=1) / math.sqrt(_PARTS)
        return OutsideMoment((float(mean[0]), float(mean[1])), (float(error[0]), float(error[1])))

    def force(self, hand: str, moment_error: float = 0.0) -> HandForce | None:
        """The horizontal force at a hand that the moment amounts to; None where there is no moment to go by.

        ``moment_error``: standard error of the mass model's own moment about the contact, N m.
        """
        found = self.moment()
        return None if found is None else self.force_of(found, hand, moment_error)

    def force_of(self, found: OutsideMoment, hand: str, moment_error: float = 0.0) -> HandForce:
        """The same for a moment found before."""
        return hand_force(self._body, hand, self._arms[-1], np.array(self._rows[-1][1:3]), found, moment_error)


def hand_force(
    body: WholeBody, hand: str, arm_position: Array, lean: Array, found: OutsideMoment, moment_error: float = 0.0
) -> HandForce:
    """The horizontal force at a hand's origin that an outside moment amounts to, arms [n] and lean [2] as they are."""
    at = rotation_lean(lean) @ body.hand_position(hand, arm_position)
    height = float(at[2]) + body.description.parameters.ball.radius
    roll, pitch = found.moment
    error = tuple(math.hypot(each, moment_error) / height for each in found.error)
    return HandForce(hand, (pitch / height, -roll / height), (error[1], error[0]))
