"""Loads in the hands."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array, read_only

MOST_TO_COME = 200


def _vector(value: object) -> Array:
    return read_only(np.array(value, dtype=float))


@attrs.frozen(eq=False)
class Load:
    """A load in a hand: mass in kg, mass centre [3] in m in the hand link's frame, inertia [3, 3] in kg m² about it,
    same axes.
    """

    hand: str
    mass: float
    center: Array = attrs.field(factory=lambda: np.zeros(3), converter=_vector)
    inertia: Array = attrs.field(factory=lambda: np.zeros((3, 3)), converter=_vector)

    def check(self, where: str, limit: float = np.inf) -> None:
        """Raise :class:`ModelError` unless mass, centre and inertia are physically possible and within the hand's
        limit.
        """
        if not (np.isfinite(self.mass) and 0.0 <= self.mass <= limit):
            raise ModelError(where, f"mass in {self.hand} is {self.mass} kg", f"it takes 0 to {limit:g} kg")
        if self.center.shape != (3,) or not np.all(np.isfinite(self.center)) or np.abs(self.center).max() > 2.0:
            raise ModelError(
                where, f"center in {self.hand} is {self.center.tolist()} m", "it takes three numbers within 2 m"
            )
        check_inertia(self.inertia, where, f"inertia in {self.hand}", point_allowed=True)


class LoadChanges:
    """What the hands hold, change by change, each with its stamp, s. What is past is kept as far as it still holds."""

    def __init__(self) -> None:
        self._changes: list[tuple[float, Load]] = []
        self.count = 0

    def add(self, stamp: float, load: Load, now: float) -> None:
        """A hand's load from ``stamp`` on; raises :class:`ModelError` where too many are to come yet."""
        to_come = self.after(now)
        if stamp > now and len(to_come) >= MOST_TO_COME:
            what = f"would be the {len(to_come) + 1}th change that is still to come"
            raise ModelError("hand_load", what, f"announce at most {MOST_TO_COME}")
        held = [(at, held) for at, held in self._changes if at <= now]
        last = list({held.hand: (at, held) for at, held in held}.values())
        self._changes = sorted([*last, *to_come, (stamp, load)], key=lambda change: change[0])
        self.count += 1

    def held_at(self, time: float) -> list[Load]:
        """The load of each hand at a time."""
        return list({load.hand: load for stamp, load in self._changes if stamp <= time}.values())

    def after(self, time: float) -> list[tuple[float, Load]]:
        """The changes after a time, in order."""
        return [(stamp, load) for stamp, load in self._changes if stamp > time]


def check_inertia(inertia: Array, where: str, what: str, *, point_allowed: bool = False) -> None:
    """Raise :class:`ModelError` unless a 3x3 inertia is possible: positive definite, and each principal value ≤ the
    sum of the others.

    ``point_allowed`` lets the zero inertia of a point mass pass.
    """
    if inertia.shape != (3, 3) or not np.all(np.isfinite(inertia)) or not np.allclose(inertia, inertia.T, atol=1e-9):
        raise ModelError(where, f"{what} is not a finite symmetric 3x3 matrix", "give ixx ixy ixz iyy iyz izz in kg m²")
    principal = np.linalg.eigvalsh(inertia)
    slack = 1e-9 + 1e-6 * principal[-1]
    if point_allowed and principal[0] >= -1e-12 and principal[-1] <= principal[0] + principal[1] + slack:
        return
    if principal[0] <= 0.0:
        raise ModelError(
            where, f"{what} has the principal value {principal[0]:.3g} kg m²", "all three must be positive"
        )
    if principal[-1] > principal[0] + principal[1] + slack:
        raise ModelError(
            where,
            f"{what} is of no possible body: {principal[2]:.4g} > {principal[0]:.4g} + {principal[1]:.4g} kg m²",
            "no principal value may exceed the sum of the others",
        )
