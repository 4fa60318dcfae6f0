"""The kinds of fault that the campaign draws from, and what the table of answers says must come of each."""

from __future__ import annotations

from collections.abc import Mapping

import attrs
import numpy as np

from ballbal_ros.balance.answer_table import ANSWERS
from ballbal_ros.balance.answers import (
    ACTUATOR,
    ARMS,
    CLOCK,
    DRIVE,
    ENCODER,
    IMU,
    ORIENTATION,
    SENSES,
    STOP,
    SUPPLY,
    TRIP,
)
from ballbal_ros.simulation.faults import Fault

UNNOTICED, HELD, STOPPED, RELEASED, FELL = "unnoticed", "held", "stopped", "released", "fell"
OUTCOMES = (UNNOTICED, HELD, STOPPED, RELEASED, FELL)
STANDS, STOPS, STANDS_OR_STOPS = (UNNOTICED, HELD), (STOPPED, RELEASED), (UNNOTICED, HELD, STOPPED, RELEASED)
LASTING = 60.0
"""A fault that does not go away, s."""
_TIME_TO_STOP = 0.05


@attrs.frozen
class Kind:
    """One kind: the ``row`` of the table that answers it, and what is drawn: durations (s), sizes (as the fault has
    them).

    ``may_end``: the outcomes that will do. Without it they follow from the row and the duration, and so does the time
    to react. With it, it is no matter of time alone whether the fault is told from noise, a push or a motion.
    ``three_may_fall``: nothing survives it for sure with three wheels alone.
    """

    row: tuple[str, str]
    durations: tuple[float, ...]
    sizes: tuple[float, ...] = (0.0,)
    may_end: tuple[str, ...] = ()
    signed: bool = False
    three_may_fall: bool = False

    def outcomes(self, fault: Fault, wheels: int) -> tuple[str, ...]:
        """The outcomes that will do for a fault of this kind, with so many wheels."""
        if self.may_end:
            return (*self.may_end, FELL) if self.three_may_fall and wheels == 3 else self.may_end
        deed = ANSWERS[self.row].deed(fault.duration)
        return (FELL,) if deed == TRIP else STOPS if deed == STOP else STANDS

    def latest(self, fault: Fault) -> float | None:
        """The time, s from the fault's start, by which it must have begun to stop or trip; None where there is none."""
        ends = [s.after for s in ANSWERS[self.row].steps if s.deed in (STOP, TRIP) and s.after <= fault.duration]
        return None if self.may_end or not ends else ends[0] + _TIME_TO_STOP


_GAPS = (0.02, 0.05, 0.08, 0.2, 0.3, 1.0)
_SPANS = (0.3, 1.0)

KINDS: Mapping[str, Kind] = {
    "imu silent": Kind((IMU, "silent"), _GAPS),
    "imu frozen": Kind((IMU, "frozen"), _GAPS),
    "imu not a number": Kind((IMU, "not finite"), (0.002, 0.02, 0.05, 0.3, 1.0)),
    "imu late": Kind((IMU, "late"), _SPANS, (0.004, 0.008, 0.02), STANDS_OR_STOPS),
    "imu loses samples": Kind((IMU, "silent"), _SPANS, (0.2, 0.5, 0.8), STANDS_OR_STOPS),
    "imu noise": Kind((IMU, "jump"), _SPANS, (0.01, 0.05, 0.3, 2.0), STANDS_OR_STOPS),
    "gyro saturated": Kind((IMU, "saturated"), (0.002, 0.05, 0.3), (1.0,), signed=True),
    "gyro step": Kind((IMU, "jump"), (LASTING,), (0.005, 0.02, 0.1, 0.3, 1.0), STANDS_OR_STOPS, signed=True),
    "accelerometer step": Kind((IMU, "tilt"), (LASTING,), (0.05, 0.5, 3.0), STANDS_OR_STOPS, signed=True),
    "orientation missing": Kind((ORIENTATION, "missing"), (0.05, 0.5, LASTING)),
    "orientation not unit": Kind((ORIENTATION, "not a unit quaternion"), (0.05, 0.5, LASTING), (0.01, 0.3)),
    "orientation jumps": Kind((ORIENTATION, "jump"), (0.05, 0.5), (0.05, 0.5), STANDS_OR_STOPS, signed=True),
    "drive silent": Kind((DRIVE, "silent"), (0.02, 0.05, 0.08, 0.3, 1.0)),
    "drive not a number": Kind((DRIVE, "not finite"), (0.002, 0.02, 0.05, 0.3, 1.0)),
    "drive frozen": Kind((DRIVE, "encoders absurd"), (0.05, 0.3, 1.0), (0.0,), STANDS_OR_STOPS),
    "drive late": Kind((DRIVE, "late"), _SPANS, (0.004, 0.01, 0.03), STANDS_OR_STOPS),
    "drive loses samples": Kind((DRIVE, "silent"), _SPANS, (0.2, 0.5), STANDS_OR_STOPS),
    "drive noise": Kind((DRIVE, "encoders absurd"), _SPANS, (0.0002, 0.002, 0.01, 0.1), STANDS_OR_STOPS),
    "imu and drive silent": Kind((SENSES, "blind"), (0.02, 0.05, 0.08, 0.2, 2.0)),
    "encoder step": Kind((ENCODER, "jump"), (LASTING,), (0.01, 0.2, 1.0), STANDS, signed=True),
    "encoder stuck": Kind((ENCODER, "stuck"), (0.05, 0.5, 2.0), (0.0,), STANDS_OR_STOPS),
    "actuator dead": Kind((ACTUATOR, "dead, without a spare"), (LASTING,), (0.0,), STANDS_OR_STOPS),
    "wheel slips": Kind((ENCODER, "slip"), _SPANS, (1.0, 4.0), STANDS_OR_STOPS),
    "wheel slides": Kind((ENCODER, "slip"), _SPANS, (0.3,), STANDS_OR_STOPS, three_may_fall=True),
    "torque sags": Kind((SUPPLY, "sags"), (LASTING,), (0.9, 0.7, 0.6), STANDS),
    "battery sags": Kind((SUPPLY, "sags"), (LASTING,), (0.9, 0.7, 0.6), STANDS),
    "joints silent": Kind((ARMS, "silent"), (0.05, 0.3, 1.0), (0.0,), STANDS_OR_STOPS),
    "joints frozen": Kind((ARMS, "jump"), (0.05, 0.3, 1.0), (0.0,), STANDS_OR_STOPS),
    "joints noise": Kind((ARMS, "jump"), (0.3,), (0.0005, 0.01), STANDS_OR_STOPS),
    "joints not a number": Kind((ARMS, "not finite"), (0.002, 0.05, 0.3), (0.0,), STANDS_OR_STOPS),
    "joint step": Kind((ARMS, "jump"), (LASTING,), (0.003, 0.05, 0.5), STANDS_OR_STOPS, signed=True),
    "clock jumps": Kind((CLOCK, "jump"), (LASTING,), (0.5, 5.0), STOPS, signed=True),
    "messages doubled": Kind((CLOCK, "standing still"), _SPANS),
    "messages reordered": Kind((CLOCK, "backwards"), _SPANS),
    "ticks missed": Kind((CLOCK, "late tick"), (0.1, 0.3), (0.004, 0.01, 0.03)),
}


def drawn(kind: str, number: int, seed: int, begin: tuple[float, float]) -> Fault:
    """The fault of a trial: the same for the same arguments. It starts between ``begin``, s."""
    of, random = KINDS[kind], np.random.default_rng((seed, number))
    size = float(random.choice(of.sizes))
    start = round(float(random.uniform(*begin)) / 0.002) * 0.002
    return Fault(
        kind=kind,
        start=start,
        duration=float(random.choice(of.durations)),
        size=-size if of.signed and random.uniform() < 0.5 else size,
        which=int(random.integers(0, 12)),
        seed=int(random.integers(0, 2**31)),
    )
