"""Whether each actuator gives the torque that it is sent: seen in how the robot moves.

Over a window the linear model says what lean and ball rates should have become by the torque that was sent. What is
missing is, for one axis, made by a torque δτ and by an outside moment d; two rates tell them apart. About z it is the
heading's inertia times what its rate is short of. An actuator i that gives nothing leaves δτ = -T_i e_i: a direction
of its own, with as much about z as about a level axis where the wheels stand on the ball at 45 degrees, which no push
has.
"""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.balance.linear_model import LinearModel
from ballbal_ros.robot.arrays import Array

_WINDOW = 10
_FORGET = 0.9
_LEAST = 0.3
_ENOUGH = 3.0
_EXPLAINS = 0.75
_LOSS = (0.6, 1.5)
_IN_A_ROW = 2


@attrs.frozen
class _Axis:
    """φ'' = square φ + torque τ + moment d, v' = the ball's, for one axis."""

    square: float
    torque: float
    moment: float
    ball_square: float
    ball_torque: float
    ball_moment: float

    def missing(self, lean_change: float, ball_change: float, lean: float, torque: float) -> float:
        """The torque, N m, that changes of the rates (a second) tell of beyond ``torque``, with an outside moment left
        aside.
        """
        first = lean_change - self.square * lean - self.torque * torque
        second = ball_change - self.ball_square * lean - self.ball_torque * torque
        determinant = self.torque * self.ball_moment - self.moment * self.ball_torque
        return (self.ball_moment * first - self.moment * second) / determinant


class ActuatorWatch:
    """Takes every tick's efforts in, and judges window after window. Torques are taken level as in ``base_link``: the
    lean is small.
    """

    def __init__(self, model: LinearModel, torque_map: Array, period: float) -> None:
        self._period = period
        self._map = np.ascontiguousarray(torque_map)
        self.use(model)
        self.restart()

    def use(self, model: LinearModel) -> None:
        """Take the model of the present posture."""
        self._axes = _axis(model, 0, 7), _axis(model, 1, 6)
        self._heading_inertia = model.heading_inertia

    def restart(self) -> None:
        """Forget all: something was not measured, or it begins anew."""
        count = self._map.shape[1]
        self._shared, self._size, self._total = np.zeros(count), np.zeros(count), 0.0
        self._in_a_row, self._suspect = 0, -1
        self._begin(None)

    def _begin(self, state: Array | None) -> None:
        self._begun, self._count = state, 0
        self._effort: Array = np.zeros(self._map.shape[1])

    def sent(self, effort: Array) -> bool:
        """Take in the efforts [n] that act since the tick before; True where a window is full, or none has begun."""
        self._count += 1
        self._effort += effort
        return self._count >= _WINDOW or self._begun is None

    def see(self, state: Array) -> int | None:
        """End a window, and begin the next: deviations from the reference of (roll rate, pitch rate, vx, vy, heading
        rate, roll, pitch), and the reference's own torque (3, N m). Returns what it has found.

        Lean and reference change so little within a window that their ends say enough; efforts do not.
        """
        begun = self._begun
        found = None if begun is None else self._judge(state, begun)
        self._begin(state)
        return found

    def _judge(self, state: Array, begun: Array) -> int | None:
        self._shared *= _FORGET
        self._size *= _FORGET
        self._total *= _FORGET
        share = 1.0 / self._count
        if not max(map(abs, self._effort.tolist())) * share > _LEAST:
            # So little is lost in the drive's friction: nothing can be learnt of it.
            return self._decide()
        changed = ((state[:5] - begun[:5]) * (share / self._period)).tolist()
        lean = (0.5 * (state[5:7] + begun[5:7])).tolist()
        effort = share * self._effort
        torque = (self._map @ effort - 0.5 * (state[7:] + begun[7:])).tolist()
        roll, pitch = self._axes
        missing = np.array(
            (
                roll.missing(changed[0], changed[3], lean[0], torque[0]),
                pitch.missing(changed[1], changed[2], lean[1], torque[1]),
                self._heading_inertia * changed[4] - torque[2],
            )
        )
        signs = self._map * -effort
        self._shared += missing @ signs
        self._size += np.einsum("ij,ij->j", signs, signs)
        self._total += float(missing @ missing)
        return self._decide()

    def _decide(self) -> int | None:
        best, most = -1, _EXPLAINS * self._total
        for index, (shared, size) in enumerate(zip(self._shared.tolist(), self._size.tolist())):
            if size > _ENOUGH and _LOSS[0] < shared / size < _LOSS[1] and shared * shared / size > most:
                best, most = index, shared * shared / size
        self._in_a_row = self._in_a_row + 1 if best >= 0 and best == self._suspect else int(best >= 0)
        self._suspect = best
        return best if self._in_a_row >= _IN_A_ROW else None


def _axis(model: LinearModel, lean: int, ball_rate: int) -> _Axis:
    state, torque, moment = model.state_matrix, model.torque_matrix, model.moment_matrix
    rate = 2 + lean
    return _Axis(
        float(state[rate, lean]),
        float(torque[rate, lean]),
        float(moment[rate, lean]),
        float(state[ball_rate, lean]),
        float(torque[ball_rate, lean]),
        float(moment[ball_rate, lean]),
    )
