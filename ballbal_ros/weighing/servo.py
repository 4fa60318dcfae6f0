"""How the arm servos lag: from what was commanded and what was measured, joint by joint."""

from __future__ import annotations

import attrs
import numpy as np
from scipy import signal
from scipy.optimize import minimize_scalar

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.spline import JointPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import JointServoParameters
from ballbal_ros.weighing.record import Record

_LOW, _HIGH = 3.0, 300.0
_MOVED = 0.05
_MOVES = 3
_AFTER = 0.5


@attrs.frozen(eq=False)
class Servo:
    """What the servos follow (``kind`` as robot.yaml's arm.servo), with which ``bandwidth`` [n], rad/s; ``left`` [n]:
    rms of measured less expected, rad or m, and ``ideal_left`` [n]: had they followed exactly. Joints that hardly
    moved have nan for all, and get the others' median.
    """

    kind: str
    names: tuple[str, ...]
    bandwidth: Array
    left: Array
    ideal_left: Array

    def into(self, description: RobotDescription) -> RobotDescription:
        """The description with this servo."""
        arm = description.parameters.arm
        if self.kind == "ideal":
            arm = attrs.evolve(arm, servo="ideal", joints=[], joint={})
        else:
            usual = float(np.nanmedian(self.bandwidth))
            told = np.where(np.isfinite(self.bandwidth), self.bandwidth, usual)
            each = {name: JointServoParameters(bandwidth=float(w)) for name, w in zip(self.names, told, strict=True)}
            arm = attrs.evolve(arm, servo=self.kind, servo_bandwidth=usual, joints=list(self.names), joint=each)
        parameters = attrs.evolve(description.parameters, arm=arm)
        return description.from_urdf(parameters, description.drawn_urdf_text, description.urdf_path, "robot.yaml")


def identify_servo(record: Record, description: RobotDescription) -> Servo:
    """Fit each kind of servo to the first moves recorded, and take the one that leaves least.

    A joint's bandwidth is found by bounded scalar minimisation of the squared difference of measured and followed
    positions. A kind that does not halve what the simpler one leaves is not believed: ideal is simplest.
    """
    if not record.moves:
        raise BallbalError("weigh-in", "holds no moves to tell the arm servos by", "let it move the arms")
    seen = [_seen(record, start, path) for start, path in record.moves[:_MOVES]]
    count = description.joint_count
    fits = {"ideal": (np.full(count, np.nan), np.array([_left(seen, j, "ideal", 1.0) for j in range(count)]))}
    moved = np.array([max(np.ptp(measured[:, j]) for _, _, measured in seen) > _MOVED for j in range(count)])
    if not moved.any():
        raise BallbalError("weigh-in", "no joint moved enough to tell its servo", "choose other postures")
    for kind in ("position_velocity", "position"):
        bandwidth, left = np.full(count, np.nan), np.full(count, np.nan)
        for j in np.flatnonzero(moved).tolist():
            bandwidth[j], left[j] = _fit(seen, j, kind)
        fits[kind] = bandwidth, left
    best = "ideal"
    for kind, (_, left) in fits.items():
        if np.sqrt(np.nanmean(left[moved] ** 2)) < 0.5 * np.sqrt(np.nanmean(fits[best][1][moved] ** 2)):
            best = kind
    bandwidth, left = fits[best]
    return Servo(best, description.joint_names, bandwidth, left, fits["ideal"][1])


def _fit(seen: list[tuple[float, Array, Array]], joint: int, kind: str) -> tuple[float, float]:
    """(bandwidth, rad/s; what it leaves) of one joint."""
    bounds = float(np.log(_LOW)), float(np.log(_HIGH))
    found = minimize_scalar(lambda w: _left(seen, joint, kind, float(np.exp(w))), bounds=bounds, method="bounded")
    return float(np.exp(found.x)), float(found.fun)


def _seen(record: Record, start: float, path: JointPath) -> tuple[float, Array, Array]:
    """The record's period, s, and commanded and measured positions [M, n] from the command's start on."""
    times = record.times - start
    inside = (times >= 0.0) & (times <= path.duration + _AFTER)
    return record.period, path.sample(times[inside])[0], record.arms[inside]


def _left(seen: list[tuple[float, Array, Array]], joint: int, kind: str, bandwidth: float) -> float:
    """Root mean square of measured less followed position of one joint, rad or m.

    The followed one is w² / (s + w)² of the command, with 2 w s besides where its rate is followed too; exact for a
    command that is linear from sample to sample.
    """
    total, count = 0.0, 0
    for period, commanded, measured in seen:
        command = followed = commanded[:, joint]
        if kind != "ideal":
            above = np.array([bandwidth**2] if kind == "position" else [2.0 * bandwidth, bandwidth**2])
            below = np.array([1.0, 2.0 * bandwidth, bandwidth**2])
            numerator, denominator, _ = signal.cont2discrete((above, below), period, method="foh")
            followed = command[0] + signal.lfilter(np.ravel(numerator), denominator, command - command[0])
        total += float(((measured[:, joint] - followed) ** 2).sum())
        count += len(command)
    return float(np.sqrt(total / max(count, 1)))
