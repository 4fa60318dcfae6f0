"""Gains for every posture: designed on a grid when the loop is made, blended at run time.

Reaching out changes the robot by a third of its inertia, and gains for hanging arms do not hold it then. For one axis
the linear model
depends on mass moment and inertia of the upper body about its mass centre, for the heading on the inertia about the
vertical. So a grid over what this robot's postures and loads can reach is enough, and no design is made while it
stands.
"""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping
from typing import Any

import attrs
import numpy as np

from ballbal_ros.balance.controller import ControllerMatrices, controller_matrices
from ballbal_ros.balance.gains import design
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import Posture, WholeBody

_GRID = 4
_SAMPLES = 300
_ROLL, _PITCH, _HEADING = 0, 1, 2
_STATE_AXIS = (0, 1, 0, 1, 1, 0, 1, 0, 2, 2, 0, 1, 2)
_INPUT_AXIS = (0, 1, 2)


@attrs.frozen
class PostureRange:
    """What postures and loads of a robot can reach: mass (mean), mass moment m h, inertia about x and y, and about z:
    least, most.
    """

    mass: float
    moment: tuple[float, float]
    inertia: tuple[float, float]
    heading: tuple[float, float]

    @classmethod
    def of(cls, description: RobotDescription, present: Posture) -> PostureRange:
        """Sample postures within the joint limits and loads within the hands', always the same ones; ``present`` is
        among them.
        """
        random = np.random.default_rng(0)
        body = WholeBody(description)
        hands, limit = description.parameters.hands.links, description.parameters.hands.load_limit
        low = np.maximum(description.position_low, -np.pi)
        high = np.minimum(description.position_high, np.pi)
        found = [present]
        for _ in range(_SAMPLES):
            for hand in hands:
                body.set_load(Load(hand, float(random.uniform(0.0, limit))))
            found.append(body.posture(random.uniform(low, high)))
        masses = np.array([p.mass for p in found])
        moments = np.array([p.mass * np.linalg.norm(p.center) for p in found])
        about = np.array([np.diag(p.inertia) for p in found])
        return cls(float(masses.mean()), _wide(moments), _wide(about[:, :2]), _wide(about[:, 2]))

    @classmethod
    def of_numbers(cls, numbers: Mapping[str, Any]) -> PostureRange:
        """The range that ``attrs.asdict`` took apart, be it by way of JSON."""
        pairs = [(float(low), float(high)) for low, high in (numbers[n] for n in ("moment", "inertia", "heading"))]
        return cls(float(numbers["mass"]), *pairs)


def _wide(values: Array) -> tuple[float, float]:
    return 0.98 * float(values.min()), 1.02 * float(values.max())


class GainSchedule:
    """Controller matrices by posture; see the module. Making one designs the whole grid (about 0.1 s)."""

    def __init__(
        self, description: RobotDescription, parameters: BalanceParameters, present: Posture | PostureRange
    ) -> None:
        """``present``: a posture that the grid must reach besides the robot's others, or a whole range found before."""
        self.reach = present if isinstance(present, PostureRange) else PostureRange.of(description, present)
        reach = self.reach
        moments, inertias, headings = self._lay_grid()
        designed = []
        for index, (moment, inertia) in enumerate((m, i) for m in moments for i in inertias):
            posture = Posture(
                reach.mass,
                np.array([0.0, 0.0, moment / reach.mass]),
                np.diag([inertia, inertia, headings[index]]),
            )
            designed.append(controller_matrices(design(posture, description, parameters)))
        self._shapes = tuple(m.shape for m in (designed[0].correct, designed[0].act, designed[0].predict))
        width = max(shape[1] for shape in self._shapes)
        self._stack = np.zeros((len(designed), len(self._axes), width))
        for layer, matrices in zip(self._stack, designed):
            row = 0
            for matrix in (matrices.correct, matrices.act, matrices.predict):
                layer[row : row + len(matrix), : matrix.shape[1]] = matrix
                row += len(matrix)
        self._output, self._history = designed[0].output, designed[0].history

    def _lay_grid(self) -> tuple[Array, Array, Array]:
        reach = self.reach
        self._moment = np.linspace(*reach.moment, _GRID)
        self._inertia = np.linspace(*reach.inertia, _GRID)
        self._heading = np.linspace(*reach.heading, _GRID * _GRID)
        self._axes = np.array((*_STATE_AXIS, *_INPUT_AXIS, *_STATE_AXIS))
        self._weights = np.zeros((3, _GRID * _GRID))
        return self._moment, self._inertia, self._heading

    def pack(self) -> tuple[dict[str, Any], bytes]:
        """What the schedule is made of, for another process: what JSON holds, and the numbers; see :meth:`unpacked`."""
        head: dict[str, Any] = {"reach": attrs.asdict(self.reach), "shapes": self._shapes, "history": self._history}
        head["sizes"] = [self._stack.shape, self._output.shape]
        return head, self._stack.tobytes() + self._output.tobytes()

    @classmethod
    def unpacked(cls, head: Mapping[str, Any], numbers: bytes) -> GainSchedule:
        """The schedule that :meth:`pack` took apart."""
        made = cls.__new__(cls)
        made.reach = PostureRange.of_numbers(head["reach"])
        made._lay_grid()
        made._shapes, made._history = tuple(tuple(shape) for shape in head["shapes"]), int(head["history"])
        stack, output = (tuple(size) for size in head["sizes"])
        every = np.frombuffer(numbers)
        made._stack = every[: math.prod(stack)].reshape(stack)
        made._output = every[math.prod(stack) :].reshape(output)
        return made

    def mixed(self, other: GainSchedule, share: float) -> GainSchedule:
        """``share`` of another schedule on the same grid, the rest of this one: at each posture the mix of both."""
        between = copy.copy(self)
        between._stack = (1.0 - share) * self._stack + share * other._stack
        between._weights = np.zeros_like(self._weights)
        return between

    def at(self, posture: Posture) -> ControllerMatrices:
        """The matrices for a posture, each axis by its own inertia; beyond the grid those of its edge."""
        x, y, z = posture.center.tolist()
        moment = posture.mass * (x * x + y * y + z * z) ** 0.5
        column, part = _place(self._moment, moment)
        weights = self._weights
        weights[:] = 0.0
        for axis in (_ROLL, _PITCH):
            row, share = _place(self._inertia, float(posture.inertia[axis, axis]))
            for i, by_moment in ((column, 1.0 - part), (column + 1, part)):
                weights[axis, i * _GRID + row] = by_moment * (1.0 - share)
                weights[axis, i * _GRID + row + 1] = by_moment * share
        row, share = _place(self._heading, float(posture.inertia[2, 2]))
        weights[_HEADING, row], weights[_HEADING, row + 1] = 1.0 - share, share
        mixed = np.einsum("rg,grc->rc", weights[self._axes], self._stack)
        (rows, wide), (inputs, seen), (_, width) = self._shapes
        return ControllerMatrices(
            np.ascontiguousarray(mixed[:rows, :wide]),
            self._output,
            np.ascontiguousarray(mixed[rows : rows + inputs, :seen]),
            np.ascontiguousarray(mixed[rows + inputs :, :width]),
            self._history,
        )


def _place(grid: Array, value: float) -> tuple[int, float]:
    """Index of the grid's interval and the fraction within it, kept on the grid."""
    fraction = (value - float(grid[0])) / float(grid[1] - grid[0])
    fraction = min(max(fraction, 0.0), len(grid) - 1.0)
    index = min(int(fraction), len(grid) - 2)
    return index, fraction - index
