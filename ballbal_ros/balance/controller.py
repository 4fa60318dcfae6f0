"""The regulators of lean, ball and heading as one tick: three small matrix products."""

from __future__ import annotations

import attrs
import numpy as np
from scipy.linalg import block_diag

from ballbal_ros.balance.gains import Gains
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.whole_body import Posture

STATES = 10
MEASURED = 8
INPUTS = 3
MOMENTS = 3


@attrs.frozen(eq=False)
class ControllerMatrices:
    """One tick as matrices: estimate += ``correct`` (measured - ``output`` prior); torque = ``act`` [estimate; past
    torques];
    prior = ``predict`` [estimate; past torques; torque]. ``history``: how many past torques still act.
    """

    correct: Array
    output: Array
    act: Array
    predict: Array
    history: int


def controller_matrices(gains: Gains) -> ControllerMatrices:
    """Both regulators of a design as one; see :mod:`ballbal_ros.balance.regulator` for the equations."""
    pair = (gains.station, gains.heading)
    history = gains.station.plant.history
    known = STATES + MOMENTS
    correct = np.zeros((known, MEASURED))
    correct[:STATES] = block_diag(*(r.filter_gain[: r.sizes[0]] for r in pair))
    correct[STATES:] = block_diag(*(r.filter_gain[r.sizes[0] :] for r in pair))
    output = np.hstack((block_diag(*(r.plant.output for r in pair)), np.zeros((MEASURED, MOMENTS))))
    feedback = block_diag(*(r.feedback[:, : r.sizes[0]] for r in pair))
    past = [block_diag(*(_past(r, j) for r in pair)) for j in range(history)]
    trim_state, trim_input = (block_diag(*m) for m in zip(*((r.trim_state, r.trim_input) for r in pair)))
    on_moment = trim_input + feedback @ trim_state + sum(block @ trim_input for block in past)
    predict = np.zeros((known, known + INPUTS * (history + 1)))
    predict[:STATES, :STATES] = block_diag(*(r.plant.transition for r in pair))
    predict[:STATES, STATES:known] = block_diag(*(r.plant.disturbance for r in pair))
    predict[STATES:, STATES:known] = np.eye(MOMENTS)
    for j in range(history + 1):
        first = known + INPUTS * (j - 1 if j else history)
        predict[:STATES, first : first + INPUTS] = block_diag(*(r.plant.inputs[j] for r in pair))
    act = np.hstack((-feedback, on_moment, *(-block for block in past)))
    return ControllerMatrices(correct, output, act, predict, history)


class Controller:
    """Kalman filter and feedback on *deviations* from a reference.

    Deviations: state [roll, pitch, roll rate, pitch rate, x, y, vx, vy, heading, heading rate]; measured [roll,
    pitch, roll rate,
    pitch rate, x, y, heading, heading rate]; torque [x, y, z] on the body; outside moment [roll, pitch, yaw]. SI, rad,
    ``base_footprint`` axes. As the reference carries the planned motion, the linear model sees small numbers only.
    """

    def __init__(
        self,
        matrices: ControllerMatrices,
        moment_step: float = np.inf,
        moment_limit: float = np.inf,
        coasting: Array | None = None,
    ) -> None:
        """``moment_step`` and ``moment_limit``, N m: how much the estimated moment may change in a tick, and be at
        most. ``coasting`` [8, 2]: see :func:`ballbal_ros.balance.coasting.coasting_gain`.
        """
        self._coasting = np.zeros((8, 2)) if coasting is None else coasting
        self.moment_step, self.moment_limit = moment_step, moment_limit
        known, past = STATES + MOMENTS, INPUTS * matrices.history
        self.prior = np.zeros(known)
        # One array, and what it is made of: nothing is copied from one place to another in a tick.
        self._stack = np.zeros(known + past + INPUTS)
        self._seen, self._torque = self._stack[:-INPUTS], self._stack[-INPUTS:]
        self.estimate, self._past = self._seen[:known], self._seen[known:]
        self._moment = self.estimate[STATES:]
        self._newest, self._newer, self._older = self._past[:INPUTS], self._past[:-INPUTS], self._past[INPUTS:]
        self._expected, self._act = np.zeros(MEASURED), np.zeros(INPUTS)
        self.change(matrices)

    def change(self, matrices: ControllerMatrices) -> None:
        """Take other matrices of the same history; the estimate stays."""
        self._correct, self._output = matrices.correct, matrices.output
        self.act, self._predict = matrices.act, matrices.predict

    @property
    def seen(self) -> Array:
        """What the last torque was worked out from: [estimate; past torques]. It changes with the next one."""
        return self._seen

    def reset(self) -> None:
        """Forget everything: at the reference, no moment, no torque before."""
        self.prior[:] = 0.0
        self.estimate[:] = 0.0
        self._past[:] = 0.0

    def forget_moment(self) -> None:
        """Take the outside moment for zero (while a stand holds the robot)."""
        self.prior[STATES:] = 0.0

    def shift(self, lean: Array, moment: Array) -> None:
        """The reference's lean goes by ``lean`` [2], rad, and the moment that is still unknown by ``moment`` [2], N m:
        deviations and moment are counted from there.
        """
        for known in (self.prior, self.estimate):
            known[:2] -= lean
            known[STATES : STATES + 2] += moment

    def correct(self, measured: Array | None, imu: bool = True, drive: bool = True) -> None:
        """Take the measured deviations [8] in; None where there are none, and the model's prediction stands.

        ``imu``, ``drive``: whether these were measured. Without the drive the ball is where the model has it; without
        the IMU lean and rates are found from the drive, of which ``measured`` must hold x, y and heading as they are
        with the lean expected.
        """
        if measured is None or not (imu or drive):
            self.estimate[:] = self.prior
        elif not imu:
            off = measured - self._output @ self.prior
            self.estimate[:] = self.prior
            self.estimate[:8] += self._coasting @ off[4:6]
            self.estimate[8:STATES] += self._correct[8:STATES, 6] * off[6]
        else:
            off = np.dot(self._output, self.prior, out=self._expected)
            np.subtract(measured, off, out=off)
            if not drive:
                off[4:6] = 0.0
            np.dot(self._correct, off, out=self.estimate)
            # A push is no moment that lasts: what the estimate of the lasting moment may follow is bounded.
            _bound(self._moment, self.moment_step)
            self.estimate += self.prior
            _bound(self._moment, self.moment_limit)

    def torque(self) -> Array:
        """Torque [3] to add to the reference's, from the present estimate; the next call uses the same array."""
        return np.dot(self.act, self._seen, out=self._act)

    def predict(self, x: float, y: float, z: float) -> None:
        """Go on to the next tick, with the torque beyond the reference's, N m, that was really commanded."""
        torque = self._torque
        torque[0], torque[1], torque[2] = x, y, z
        np.dot(self._predict, self._stack, out=self.prior)
        if len(self._past):
            if len(self._newer):
                self._older[:] = self._newer.copy()
            self._newest[:] = torque


def handed_over(before: Posture, after: Posture, lean: tuple[float, float]) -> tuple[Array, Array]:
    """How far the equilibrium lean goes, [2] in rad, and the moment about the contact that is explained, [2] in N m
    (roll, pitch), when the mass model of a robot that stands at ``lean`` is replaced.
    """
    turn = rotation_lean(np.array(lean))
    x, y, _ = (turn @ (after.mass * after.center - before.mass * before.center)).tolist()
    return np.subtract(after.equilibrium_lean, before.equilibrium_lean), GRAVITY * np.array((y, -x))


def _bound(vector: Array, limit: float) -> None:
    """Clip a vector in place to ±limit."""
    x, y, z = vector.tolist()
    if not (-limit <= x <= limit and -limit <= y <= limit and -limit <= z <= limit):
        np.minimum(vector, limit, out=vector)
        np.maximum(vector, -limit, out=vector)


def _past(regulator: Regulator, j: int) -> Array:
    n, m, _ = regulator.sizes
    return regulator.feedback[:, n + j * m : n + (j + 1) * m]
