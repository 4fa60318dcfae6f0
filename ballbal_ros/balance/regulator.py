"""A regulator: quadratic feedback on a Kalman estimate, with past torques and a constant disturbance accounted for.

One tick, with measurement y, prior estimate x̄, d̄ and the past inputs u[k-1] … u[k-h]:

    [x̂; d̂] = [x̄; d̄] + L (y - C x̄)
    u = U d̂ - K [x̂ - X d̂; u[k-1] - U d̂; …; u[k-h] - U d̂]
    x̄ = Φ x̂ + Γ_0 u + Σ Γ_j u[k-j] + Γ_d d̂,   d̄ = d̂

X and U (the trim) are the state and the input that a constant disturbance needs for the plant to stand still where it
should.
"""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np
from numpy.typing import NDArray
from scipy.linalg import schur

from ballbal_ros.balance.discrete import SampledPlant
from ballbal_ros.robot.arrays import Array, read_only


@attrs.frozen(eq=False)
class StateSpace:
    """A sampled linear system x[k+1] = A x + B u, y = C x + D u."""

    a: Array
    b: Array
    c: Array
    d: Array

    def response(self, z: NDArray[Any]) -> NDArray[Any]:
        """Transfer matrices [N, outputs, inputs] at the complex numbers z [N].

        By back substitution in the Schur form of A, for all z at once: a tenth of the time of N solutions.
        """
        triangle, unitary = schur(self.a, output="complex")
        driven = unitary.conj().T @ self.b
        state = np.zeros((len(self.a), len(z), self.b.shape[1]), complex)
        for row in range(len(self.a) - 1, -1, -1):
            known = np.tensordot(triangle[row, row + 1 :], state[row + 1 :], 1)
            state[row] = (driven[row] + known) / (z - triangle[row, row])[:, None]
        return np.asarray(np.tensordot(self.c @ unitary, state, 1).transpose(1, 0, 2) + self.d)


@attrs.frozen(eq=False)
class Regulator:
    """Gains for one sampled plant; see the module's equations.

    ``feedback`` K [m, n + h m]; ``filter_gain`` L [n + k, p]; ``trim_state`` X [n, l]; ``trim_input`` U [m, l].
    X and U are zero where the trim is off.
    """

    plant: SampledPlant
    feedback: Array
    filter_gain: Array
    trim_state: Array
    trim_input: Array

    @property
    def sizes(self) -> tuple[int, int, int]:
        """(n, m, l): states, inputs, disturbances."""
        return self.trim_state.shape[0], self.trim_input.shape[0], self.trim_state.shape[1]

    def controller(self) -> StateSpace:
        """The tick as a sampled system from y [p] to u [m], with the state [x̄; d̄; u[k-1]; …; u[k-h]]."""
        plant = self.plant
        n, m, k = self.sizes
        h = plant.history
        on_past, repeat = self.feedback[:, n:], np.tile(np.eye(m), (h, 1))
        on_disturbance = self.trim_input + self.feedback[:, :n] @ self.trim_state + on_past @ repeat @ self.trim_input
        on_estimate = np.hstack((-self.feedback[:, :n], on_disturbance))
        update = np.eye(n + k) - self.filter_gain @ np.hstack((plant.output, np.zeros((len(plant.output), k))))
        predict = np.eye(n + k)
        predict[:n, :n], predict[:n, n:] = plant.transition, plant.disturbance
        drive = np.vstack((plant.inputs[0], np.zeros((k, m))))
        past_drive = np.zeros((n + k, h * m))
        for j in range(h):
            past_drive[:n, j * m : (j + 1) * m] = plant.inputs[j + 1]
        c = np.hstack((on_estimate @ update, -on_past))
        d = on_estimate @ self.filter_gain
        a, b = np.zeros((n + k + h * m, n + k + h * m)), np.zeros((n + k + h * m, len(plant.output)))
        a[: n + k] = np.hstack((predict @ update, past_drive)) + drive @ c
        b[: n + k] = predict @ self.filter_gain + drive @ d
        if h:
            a[n + k : n + k + m], b[n + k : n + k + m] = c, d
            a[n + k + m :, n + k : n + k + (h - 1) * m] = np.eye((h - 1) * m)
        return StateSpace(a, b, c, d)

    def loop(self, plant: SampledPlant | None = None) -> StateSpace:
        """The open loop -C(z) P(z) from the torque that acts to the torque asked for, negative feedback counted.

        ``plant`` may be another than the one it was designed for, of the same inputs and outputs.
        """
        actual, controller = plant or self.plant, self.controller()
        a, b = actual.augmented()
        output = np.hstack((actual.output, np.zeros((len(actual.output), len(a) - len(actual.transition)))))
        across = np.zeros((len(a), len(controller.a)))
        return StateSpace(
            a=np.block([[a, across], [controller.b @ output, controller.a]]),
            b=np.vstack((b, np.zeros((len(controller.a), b.shape[1])))),
            c=-np.hstack((controller.d @ output, controller.c)),
            d=np.zeros((b.shape[1], b.shape[1])),
        )

    def closed_loop(self, plant: SampledPlant | None = None) -> Array:
        """State matrix of plant and controller together; stable where its eigenvalues lie within the unit circle."""
        loop = self.loop(plant)
        return np.asarray(loop.a - loop.b @ loop.c)

    def spectral_radius(self, plant: SampledPlant | None = None) -> float:
        """Largest magnitude among the closed loop's poles; below 1 it is stable."""
        return float(np.abs(np.linalg.eigvals(self.closed_loop(plant))).max())


def steady_trim(a: Array, b: Array, e: Array, held: slice) -> tuple[Array, Array]:
    """(X, U): state and input per unit of constant disturbance: A X + B U + E = 0 with the ``held`` states at zero.

    Least squares: exact wherever the equations have a solution.
    """
    n, m = b.shape
    keep = np.eye(n)[held]
    left = np.block([[a, b], [keep, np.zeros((len(keep), m))]])
    right = np.vstack((-e, np.zeros((len(keep), e.shape[1]))))
    solution = np.linalg.lstsq(left, right, rcond=None)[0]
    return read_only(solution[:n].copy()), read_only(solution[n:].copy())
