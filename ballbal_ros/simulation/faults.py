"""Faults on purpose: what goes wrong with senses, drive and clock of a simulated robot, seeded and repeatable.

A fault sits between the robot and the loop, so that both stay what they are: it changes what the loop is told, and what
becomes of the efforts that it sends.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable

import attrs
import numpy as np

from ballbal_ros.balance.measurement import Measurement
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

_NAN = float("nan")


@attrs.frozen(kw_only=True)
class Fault:
    """One fault: its ``kind``, from ``start`` for ``duration`` s, how much (``size``, unit by kind), and of ``which``
    part (an index).
    """

    kind: str
    start: float
    duration: float
    size: float = 0.0
    which: int = 0
    seed: int = 0

    def on(self, now: float) -> bool:
        """Whether it is there at ``now``, s."""
        return self.start - 1e-9 <= now < self.start + self.duration - 1e-9


class FaultyRobot:
    """What stands between a simulated robot and its loop while a fault is there. One for each run."""

    def __init__(self, description: RobotDescription, fault: Fault, period: float) -> None:
        self.fault = fault
        self._period = period
        self._random = np.random.default_rng(fault.seed)
        self._change = CHANGES.get(fault.kind)
        self._drive = ON_DRIVE.get(fault.kind)
        if self._change is None and self._drive is None:
            raise KeyError(fault.kind)
        self._past: deque[Measurement] = deque(maxlen=200)
        self._first: Measurement | None = None
        self._shift = 0.0
        self._skipped = False
        drive = description.drive
        self._effort_limit = drive.effort_limit
        self.slip = Slip(
            drive.effort_limit,
            drive.rate_limit,
            [m.rotor_inertia + 1e-3 for m in description.parameters.drive.contact.values()],
        )
        self.slipped = np.zeros(len(drive.names))

    def measure(self, true: Measurement) -> Measurement | None:
        """What the loop is told instead of ``true``; None where it is told nothing, and makes no tick."""
        told = attrs.evolve(
            true,
            imu_stamp=true.stamp,
            drive_stamp=true.stamp,
            arm_stamp=true.stamp,
            drive_angle=true.drive_angle + self.slipped,
        )
        fault, as_it_was = self.fault, attrs.evolve(told)
        if self._change is not None and (fault.on(true.stamp) or self._shift):
            if self._first is None:
                self._first = self._past[-1] if self._past else told
            changed = self._change(self, told)
        else:
            changed = told
        self._past.append(as_it_was)
        return changed

    def effort(self, commanded: Array, now: float) -> Array:
        """What the drive makes of the efforts [n] that it is sent."""
        if self._drive is None or not self.fault.on(now):
            return commanded
        return self._drive(self, commanded)

    # What follows is one function for each kind of fault on what is told.

    def _last(self) -> Measurement:
        """The last measurement from before the fault."""
        if self._first is None:
            raise RuntimeError("no fault is on")
        return self._first

    def _silent(self, told: Measurement, *parts: str) -> Measurement:
        first = self._last()
        for part in parts:
            _copy(first, told, part)
        return told

    def _some_lost(self, told: Measurement, part: str) -> Measurement:
        if self._random.uniform() < self.fault.size and self._past:
            before = self._past[-1]
            _copy(before, told, part)
        return told

    def _late(self, told: Measurement, part: str) -> Measurement:
        ticks = round(self.fault.size / self._period)
        if len(self._past) >= ticks > 0:
            _copy(self._past[-ticks], told, part)
        return told

    def _frozen(self, told: Measurement, part: str) -> Measurement:
        stamp = told.stamp
        _copy(self._last(), told, part)
        setattr(told, f"{part}_stamp", stamp)
        return told

    def _noise(self, told: Measurement, part: str) -> Measurement:
        size, normal = self.fault.size, self._random.standard_normal
        if part == "imu":
            told.imu_rate = told.imu_rate + size * normal(3)
        elif part == "drive":
            told.drive_angle = told.drive_angle + size * normal(len(told.drive_angle))
        else:
            told.arm_position = told.arm_position + size * normal(len(told.arm_position))
        return told

    def _step(self, told: Measurement, part: str) -> Measurement:
        which, size = self.fault.which, self.fault.size
        name = {"gyro": "imu_rate", "accelerometer": "imu_acceleration", "drive": "drive_angle", "arm": "arm_position"}[
            part
        ]
        values = np.array(getattr(told, name), float)
        values[which % len(values)] += size
        setattr(told, name, values)
        return told

    def _not_a_number(self, told: Measurement, part: str) -> Measurement:
        which = self.fault.which
        name = {"imu": "imu_rate", "drive": "drive_angle", "arm": "arm_position"}[part]
        values = np.array(getattr(told, name), float)
        values[which % len(values)] = (_NAN, math.inf, -math.inf)[which % 3]
        setattr(told, name, values)
        return told

    def _saturated(self, told: Measurement) -> Measurement:
        told.imu_rate = np.array(told.imu_rate)
        told.imu_rate[self.fault.which % 3] = math.copysign(35.0, self.fault.size)
        return told

    def _orientation(self, told: Measurement, way: str) -> Measurement:
        quat = told.imu_quat_xyzw
        if way == "missing" or quat is None:
            told.imu_quat_xyzw = None
        elif way == "long":
            told.imu_quat_xyzw = tuple((1.0 + self.fault.size) * v for v in quat)  # type: ignore[assignment]
        else:
            turn = 0.5 * self.fault.size
            x, y, z, w = quat
            sin, cos = math.sin(turn), math.cos(turn)
            told.imu_quat_xyzw = (cos * x + sin * w, cos * y - sin * z, cos * z + sin * y, cos * w - sin * x)
        return told

    def _stuck(self, told: Measurement) -> Measurement:
        which = self.fault.which % len(told.drive_angle)
        told.drive_angle = told.drive_angle.copy()
        told.drive_angle[which] = self._last().drive_angle[which]
        return told

    def _time_jump(self, told: Measurement) -> Measurement:
        """The clock, and so every stamp from now on, is off."""
        self._shift = self.fault.size
        for name in ("stamp", "imu_stamp", "drive_stamp", "arm_stamp"):
            setattr(told, name, getattr(told, name) + self._shift)
        return told

    def _doubled(self, told: Measurement) -> Measurement:
        """Each message comes twice, the second time in place of the next."""
        self._skipped = not self._skipped
        return attrs.evolve(self._past[-1]) if self._skipped and self._past else told

    def _reordered(self, told: Measurement) -> Measurement:
        """Now and then one that is older comes."""
        if self._random.uniform() < 0.2 and len(self._past) >= 3:
            return attrs.evolve(self._past[-3])
        return told

    def _no_tick(self, told: Measurement) -> Measurement | None:
        """The process gets no time: nothing is answered for ``size`` s at a stretch, then one tick is."""
        rest = max(1, round(self.fault.size / self._period))
        number = round((told.stamp - self.fault.start) / self._period)
        return told if number % (rest + 1) == rest else None

    # And one for each kind of fault in the drive.

    def _dead(self, effort: Array) -> Array:
        sent = effort.copy()
        sent[self.fault.which % len(sent)] = 0.0
        return sent

    def _weak(self, effort: Array) -> Array:
        return self.fault.size * effort

    def _bounded(self, effort: Array) -> Array:
        """The battery gives so much of the greatest effort, and no more."""
        most = self.fault.size * self._effort_limit
        return np.clip(effort, -most, most)

    def _slips(self, effort: Array) -> Array:
        which = self.fault.which % len(effort)
        sent = effort.copy()
        sent[which], slid = self.slip.go_on(which, float(effort[which]), self.fault.size, self._period)
        self.slipped[which] += slid
        return sent


class Slip:
    """An actuator whose contact bears less effort than it gives: the rest spins its rotor up against the ball."""

    def __init__(self, effort_limit: Array, rate_limit: Array, inertia: list[float]) -> None:
        self._limit, self._fastest, self._inertia = effort_limit.tolist(), rate_limit.tolist(), inertia
        self._rate = [0.0] * len(inertia)

    def go_on(self, which: int, effort: float, bears: float, period: float) -> tuple[float, float]:
        """Effort that reaches the ball, N m, and how far the actuator slides on it within the period, rad.

        ``bears``: effort, N m, that the contact bears.
        """
        rate = self._rate[which]
        passed = max(-bears, min(bears, effort)) if rate == 0.0 else math.copysign(bears, rate)
        after = rate + period * (effort - passed) / self._inertia[which]
        if rate * after < 0.0 or (rate == 0.0 and abs(effort) <= bears):
            after = 0.0
        self._rate[which] = max(-self._fastest[which], min(self._fastest[which], after))
        return passed, period * self._rate[which]


def _copy(old: Measurement, new: Measurement, part: str) -> None:
    """Put one part of an old measurement, its stamp too, into a new one."""
    names = {
        "imu": ("imu_quat_xyzw", "imu_rate", "imu_acceleration"),
        "drive": ("drive_angle",),
        "arm": ("arm_position",),
    }
    for name in (*names[part], f"{part}_stamp"):
        setattr(new, name, getattr(old, name))


Change = Callable[[FaultyRobot, Measurement], "Measurement | None"]
CHANGES: dict[str, Change] = {
    "imu silent": lambda f, m: f._silent(m, "imu"),
    "drive silent": lambda f, m: f._silent(m, "drive"),
    "imu and drive silent": lambda f, m: f._silent(m, "imu", "drive"),
    "joints silent": lambda f, m: f._silent(m, "arm"),
    "imu loses samples": lambda f, m: f._some_lost(m, "imu"),
    "drive loses samples": lambda f, m: f._some_lost(m, "drive"),
    "imu late": lambda f, m: f._late(m, "imu"),
    "drive late": lambda f, m: f._late(m, "drive"),
    "imu frozen": lambda f, m: f._frozen(m, "imu"),
    "drive frozen": lambda f, m: f._frozen(m, "drive"),
    "joints frozen": lambda f, m: f._frozen(m, "arm"),
    "imu noise": lambda f, m: f._noise(m, "imu"),
    "drive noise": lambda f, m: f._noise(m, "drive"),
    "joints noise": lambda f, m: f._noise(m, "arm"),
    "gyro step": lambda f, m: f._step(m, "gyro"),
    "accelerometer step": lambda f, m: f._step(m, "accelerometer"),
    "encoder step": lambda f, m: f._step(m, "drive"),
    "joint step": lambda f, m: f._step(m, "arm"),
    "imu not a number": lambda f, m: f._not_a_number(m, "imu"),
    "drive not a number": lambda f, m: f._not_a_number(m, "drive"),
    "joints not a number": lambda f, m: f._not_a_number(m, "arm"),
    "gyro saturated": lambda f, m: f._saturated(m),
    "orientation missing": lambda f, m: f._orientation(m, "missing"),
    "orientation not unit": lambda f, m: f._orientation(m, "long"),
    "orientation jumps": lambda f, m: f._orientation(m, "turned"),
    "encoder stuck": lambda f, m: f._stuck(m),
    "clock jumps": lambda f, m: f._time_jump(m),
    "messages doubled": lambda f, m: f._doubled(m),
    "messages reordered": lambda f, m: f._reordered(m),
    "ticks missed": lambda f, m: f._no_tick(m),
}
ON_DRIVE: dict[str, Callable[[FaultyRobot, Array], Array]] = {
    "actuator dead": lambda f, e: f._dead(e),
    "torque sags": lambda f, e: f._weak(e),
    "battery sags": lambda f, e: f._bounded(e),
    "wheel slips": lambda f, e: f._slips(e),
    "wheel slides": lambda f, e: f._slips(e),
}
