"""What was found, how well, and what the data can't tell: in words and numbers for a person or a program."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import attrs
import numpy as np
import pinocchio as pin

from ballbal_ros.robot.arrays import Array
from ballbal_ros.weighing.identify import LATE_SPREAD, RESISTANCE, RESISTANCE_SPREAD, Weighed
from ballbal_ros.weighing.links import PER_LINK

# Found to less than this share of what it was known to before: then the data have told it.
_TOLD = 0.5
_AXES = ("x", "y", "z")
_PARALLEL = 0.99


@attrs.frozen
class Finding:
    """One number: as drawn, as found, its standard error, and its standard deviation before weighing."""

    name: str
    unit: str
    drawn: float
    found: float
    error: float
    before: float

    @property
    def told(self) -> bool:
        """Whether the data have told it, rather than the URDF."""
        return self.error < _TOLD * self.before


@attrs.frozen(eq=False)
class Draw:
    """A robot that is as likely as the one found: relative to it, mass factors, shifts of mass centres (m), tilt."""

    mass_factor: Mapping[str, float]
    center: Mapping[str, tuple[float, ...]]
    imu_tilt: tuple[float, float]


def findings(weighed: Weighed) -> tuple[Finding, ...]:
    """Total mass, the first moment of the body and of the arms' segments (see :func:`turning_moments`), IMU tilt,
    rolling resistance, lateness of the drive's angles.
    """
    return tuple(_findings(weighed))


def turning_moments(model: pin.Model) -> tuple[Array, list[Array]]:
    """What posture can tell of each moving segment: rows [segments, 3, 10 segments] times the inertial parameters give
    the first moment of the segment with all that it carries drawn in to its next joint, kg m, in its joint's axes.

    What is along the joint's own axis doesn't move when it turns: it counts with the segment before (the minimal
    parameters of Gautier and Khalil 1990, IEEE Trans. Robotics and Automation 6(3) 368; written down from memory).
    Also the axes [3] of all segments, 0 for the body.
    """
    count, data = model.njoints - 1, model.createData()
    rows, masses = np.zeros((count, 3, PER_LINK * count)), np.zeros((count, PER_LINK * count))
    pin.computeJointJacobians(model, data, pin.neutral(model))
    axes = [np.zeros(3)]
    for joint in range(2, model.njoints):
        column = pin.getJointJacobian(model, data, joint, pin.ReferenceFrame.LOCAL)[:, model.joints[joint].idx_v]
        axes.append(np.array(column[3:]))
    for k in range(count - 1, -1, -1):
        rows[k, :, PER_LINK * k + 1 : PER_LINK * k + 4] += np.eye(3)
        masses[k, PER_LINK * k] += 1.0
        if k > 0:
            parent, placement = int(model.parents[k + 1]) - 1, model.jointPlacements[k + 1]
            # A slide turns nothing: all that it carries keeps its direction.
            along = np.outer(axes[k], axes[k]) if np.any(axes[k]) else np.eye(3)
            rows[parent] += placement.rotation @ np.tensordot(along, rows[k], 1)
            rows[parent] += np.outer(placement.translation, masses[k])
            masses[parent] += masses[k]
    return rows, axes


def _findings(weighed: Weighed) -> Iterator[Finding]:
    links, size = weighed.links, weighed.links.unknowns
    covariance = weighed.fit.covariance
    before, after = links.dynamic(np.zeros(size)), links.dynamic(weighed.own)
    slope = links.dynamic_by(weighed.own)

    def finding(name: str, unit: str, row: Array, scale: float = 1.0) -> Finding:
        """What was found of one quantity, ``scale`` times ``row`` of the parameters."""
        gradient = scale * (row @ slope)
        error = float(np.sqrt(gradient @ covariance[:size, :size] @ gradient))
        values = scale * float(row @ before), scale * float(row @ after)
        return Finding(name, unit, *values, error, float(np.linalg.norm(gradient)))

    total = np.zeros(len(after))
    total[::PER_LINK] = 1.0
    yield finding("total mass", "kg", total)
    moments, axes = turning_moments(weighed.model)
    for k, segment in enumerate(links.segments):
        for letter, row, along in zip(_AXES, moments[k], axes[k], strict=True):
            if abs(along) < _PARALLEL and (k == 0 or np.any(axes[k])):
                yield finding(f"{segment} {letter}", "g m", row, 1e3)
    rest = np.sqrt(np.diag(covariance))[size:]
    for k, name in enumerate(("roll", "pitch")):
        scale = 1e3 * links.spread.imu_tilt
        found = float(1e3 * weighed.imu_tilt[k])
        yield Finding(f"IMU tilt, {name}", "mrad", 0.0, found, float(scale * rest[k]), scale)
    error = float(RESISTANCE_SPREAD * rest[2])
    yield Finding("rolling resistance", "-", RESISTANCE, weighed.resistance, error, RESISTANCE_SPREAD)
    lag = 1e3 * LATE_SPREAD
    yield Finding("drive later than IMU", "ms", 0.0, 1e3 * weighed.late, float(lag * rest[3]), lag)


def not_told(weighed: Weighed) -> tuple[str, ...]:
    """What the data can't tell, a sentence each."""
    size, covariance = weighed.links.unknowns, weighed.fit.covariance
    slope, moments = weighed.links.dynamic_by(weighed.own), turning_moments(weighed.model)[0]
    sentences = []
    for axis, k, name, of in ((0, 1, "pitch", "x"), (1, 0, "roll", "y")):
        gradient = moments[0, axis] @ slope
        both = float(gradient @ covariance[:size, size + k])
        spread = float(np.sqrt(gradient @ covariance[:size, :size] @ gradient * covariance[size + k, size + k]))
        sentences.append(
            f"IMU tilt in {name} against the body's first moment in {of} (correlation {both / spread:+.2f}): at one "
            "posture they show the same lean. Turning on the spot doesn't part them, as both turn along; only the "
            "height of the mass centre, which changes with the posture, does. Their sum, which a plan needs, is told."
        )
    sentences.append("the scale of all masses: at rest twice the masses lean alike. A scale (--mass) tells it.")
    sentences.append("how a rigid segment's mass is shared among the links in it: they move as one.")
    sentences.append("spin friction of the floor: the ball was not made to spin, as it holds the heading.")
    return tuple(sentences)


def draws(weighed: Weighed, count: int, seed: int = 0) -> Iterator[Draw]:
    """Robots drawn from what is left uncertain."""
    rng = np.random.default_rng([seed, 0xD4A3])
    values, axes = np.linalg.eigh(weighed.fit.covariance)
    root = axes * np.sqrt(np.maximum(values, 0.0))
    size, found = weighed.links.unknowns, weighed.masses()
    for _ in range(count):
        off = root @ rng.standard_normal(len(root))
        other = weighed.links.masses(weighed.own + off[:size])
        tilt = weighed.links.spread.imu_tilt * off[size : size + 2]
        yield Draw(
            {mass.name: new.mass / mass.mass for mass, new in zip(found, other, strict=True)},
            {mass.name: tuple((new.center - mass.center).tolist()) for mass, new in zip(found, other, strict=True)},
            (float(tilt[0]), float(tilt[1])),
        )
