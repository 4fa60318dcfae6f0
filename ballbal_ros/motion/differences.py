"""Finite differences on a uniform grid, as stencils: fourth order inside, exact for cubics next to the ends."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.robot.arrays import Array

REACH = 2
_FIRST = np.array([1.0, -8.0, 0.0, 8.0, -1.0]) / 12.0
_SECOND = np.array([-1.0, 16.0, -30.0, 16.0, -1.0]) / 12.0
_FIRST_EDGE = np.array([0.0, -2.0, -3.0, 6.0, -1.0]) / 6.0
_SECOND_EDGE = np.array([0.0, 1.0, -2.0, 1.0, 0.0])
_ONE_SIDED = np.array([-25.0, 48.0, -36.0, 16.0, -3.0]) / 12.0


@attrs.frozen(eq=False)
class Differences:
    """First and second time derivatives on N nodes a step h apart; ``first`` and ``second`` [N, 5] weigh nodes k-2 …
    k+2.

    The end nodes take no derivative here (their rows are zero): what holds there is a boundary condition.
    """

    step: float
    first: Array
    second: Array

    @classmethod
    def on(cls, nodes: int, step: float) -> Differences:
        """The stencils for this many nodes (at least 6) and this step, s."""
        first, second = np.tile(_FIRST, (nodes, 1)), np.tile(_SECOND, (nodes, 1))
        first[1], first[nodes - 2] = _FIRST_EDGE, -_FIRST_EDGE[::-1]
        second[1] = second[nodes - 2] = _SECOND_EDGE
        for k in (0, nodes - 1):
            first[k] = second[k] = 0.0
        return cls(step, first / step, second / step**2)

    def apply(self, stencil: Array, values: Array) -> Array:
        """A stencil [N, 5] on node values [N, ...]; nodes beyond the ends don't count (their weights are zero)."""
        padded = np.zeros((len(values) + 2 * REACH, *values.shape[1:]))
        padded[REACH:-REACH] = values
        shape = (-1, *([1] * (values.ndim - 1)))
        out = np.zeros_like(values)
        for offset in range(2 * REACH + 1):
            out += stencil[:, offset].reshape(shape) * padded[offset : offset + len(values)]
        return out

    def rate(self, values: Array) -> Array:
        """First derivative at the inner nodes."""
        return self.apply(self.first, values)

    def whole_rate(self, values: Array) -> Array:
        """First derivative at all nodes."""
        rate = self.rate(values)
        rate[0], rate[-1] = self.start_rate(values), -self.start_rate(values[::-1])
        return rate

    def acceleration(self, values: Array) -> Array:
        """Second derivative at the inner nodes."""
        return self.apply(self.second, values)

    def start_rate(self, values: Array) -> Array:
        """First derivative at node 0 from nodes 0 … 4, fourth order."""
        return np.tensordot(_ONE_SIDED, values[:5], axes=1) / self.step
