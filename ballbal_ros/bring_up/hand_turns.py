"""Encoders first, without any torque: a person turns the ball by hand, and each encoder must count what the geometry
says.

For a turn of the ball by 2π about a unit axis u of ``base_link``, the body at rest, actuator j turns by

    Δθ_j = 2π (row j of ``rate_map``) · u.

Three turns about three axes tell of each encoder whose wheel it is on, its sign and its scale: row by row, the least
squares fit of what was counted to each contact's row.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.findings import LOOK, OK, WRONG, Finding
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.drive import Drive

_AREA = "encoder"
_COUNTS_NOTHING = 0.05
_FITS, _AS_GOOD = 0.35, 0.1
_BY_HAND = 0.15
_WRAPS = 3.0


@attrs.frozen
class Turn:
    """One turn of the ball by hand: its name, how to do it, and its axis in ``base_link``."""

    name: str
    how: str
    axis: tuple[float, float, float]


TURNS = (
    Turn("round", "about the plumb line, against the clock as seen from above", (0.0, 0.0, 1.0)),
    Turn("forward", "as if it rolled forward: its underside goes to the back", (0.0, 1.0, 0.0)),
    Turn("left", "as if it rolled to the left: its underside goes to the right", (-1.0, 0.0, 0.0)),
)


@attrs.frozen(eq=False)
class EncoderMap:
    """What each encoder was found to be: ``contact`` [n] the index of the contact whose wheel it is on, ``scale`` [n]
    what it counts for each radian (negative: the wrong way); 0 for one that counts nothing.
    """

    contact: tuple[int, ...]
    scale: tuple[float, ...]

    @classmethod
    def as_described(cls, count: int) -> EncoderMap:
        """Every encoder as robot.yaml has it."""
        return cls(tuple(range(count)), (1.0,) * count)

    def true_angle(self, reading: Array) -> Array:
        """Actuator angles [n], rad, in the order of the contacts, from what the encoders say; NaN where none tells."""
        angle = np.full(len(self.contact), np.nan)
        for index, (contact, scale) in enumerate(zip(self.contact, self.scale)):
            if scale:
                angle[contact] = reading[index] / scale
        return angle


class HandTurns:
    """Takes the encoders' angles while a person turns the ball, one :data:`TURNS` after the other."""

    def __init__(self, drive: Drive) -> None:
        self._drive = drive
        self._turned: list[Array] = []
        self._from: Array | None = None
        self._last: Array | None = None
        self._wraps = np.zeros(len(drive.names), bool)

    @property
    def next(self) -> Turn | None:
        """The turn that is to be done now; None when all have been."""
        return TURNS[len(self._turned)] if len(self._turned) < len(TURNS) else None

    def see(self, angle: Array) -> None:
        """Take angles [n], rad, as they come."""
        if self._from is None:
            self._from = angle.copy()
        if self._last is not None:
            self._wraps |= np.abs(angle - self._last) > _WRAPS
        self._last = angle.copy()

    def done(self) -> None:
        """The person says that the turn is done."""
        if self._from is None or self._last is None:
            raise ValueError("no angle has come yet")
        self._turned.append(self._last - self._from)
        self._from = self._last

    def judge(self) -> tuple[EncoderMap, list[Finding]]:
        """What each encoder is, and what that means, in words."""
        turned = np.array(self._turned).T
        axes = np.array([turn.axis for turn in TURNS[: len(self._turned)]]).T
        expected = 2.0 * math.pi * self._drive.rate_map @ axes
        contacts, scales, found = [], [], []
        for index in range(len(self._drive.names)):
            contact, scale, finding = self._one(index, turned[index], expected)
            contacts.append(contact)
            scales.append(scale)
            found.append(finding)
        return EncoderMap(tuple(contacts), tuple(scales)), found

    def _one(self, index: int, turned: Array, expected: Array) -> tuple[int, float, Finding]:
        name = self._drive.names[index]

        def say(verdict: str, what: str, do: str = "") -> Finding:
            """A finding on this actuator."""
            return Finding(_AREA, name, verdict, what, do)

        if bool(self._wraps[index]):
            do = "have the driver count on beyond a turn: the loop takes an angle that never jumps"
            return index, 0.0, say(WRONG, "jumps by more than 3 rad from one message to the next: it wraps around", do)
        size = float(np.linalg.norm(turned))
        if size < _COUNTS_NOTHING * float(np.linalg.norm(expected[index])):
            do = "check its cable and supply, its coupling, and the driver's entry for it"
            return index, 0.0, say(WRONG, "counts nothing while the ball turns", do)
        scales = [float(turned @ row / (row @ row)) for row in expected]
        misfits = [float(np.linalg.norm(turned - s * row)) / size for s, row in zip(scales, expected)]
        contact = int(np.argmin(misfits))
        if misfits[index] <= misfits[contact] + _AS_GOOD:
            contact = index
        if misfits[contact] > _FITS:
            do = "turn it once more, exactly about each axis, by one whole turn; see that no wheel slips"
            return index, 1.0, say(WRONG, "fits no wheel: what it counted is no turn about the axes asked for", do)
        return contact, scales[contact], self._words(index, contact, scales[contact])

    def _words(self, index: int, contact: int, scale: float) -> Finding:
        name, parts, remedies = self._drive.names[index], [], []
        if contact != index:
            other = self._drive.names[contact]
            parts.append(f"is the one on {other}'s wheel")
            remedies.append(f"name it {other} in the driver, or swap the plugs")
        if scale < 0.0:
            parts.append("counts the wrong way")
            remedies.append("turn its sign in the driver")
        if not abs(abs(scale) - 1.0) <= _BY_HAND:
            parts.append(f"counts {abs(scale):.2f} times what the geometry says")
            remedies.append(
                f"divide the driver's radians per count by {abs(scale):.2f}, or mend effective_radius in robot.yaml"
            )
        if not parts:
            return Finding(_AREA, name, OK, f"right wheel, right way, scale {abs(scale):.2f} (by hand: to 15 %)")
        return Finding(_AREA, name, WRONG, ", ".join(parts), "; ".join(remedies))


def taken_as_described(drive: Drive) -> tuple[EncoderMap, list[Finding]]:
    """Where nobody turns the ball: what is not known then, in words."""
    what = "the ball was not turned by hand: scale, sign and order of the encoders are taken as described"
    do = "a wrong torque constant and a wrong encoder scale look alike: turn it by hand before you trust either"
    return EncoderMap.as_described(len(drive.names)), [Finding(_AREA, "all", LOOK, what, do)]
