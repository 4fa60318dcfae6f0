"""From rests and swings to masses: the most probable robot, given the URDF as it may be wrong and what was seen."""

from __future__ import annotations

import attrs
import numpy as np
import pinocchio as pin

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.mass_model import LinkMass
from ballbal_ros.robot.parameters import MassModelParameters
from ballbal_ros.weighing.least_squares import Fit, most_probable
from ballbal_ros.weighing.links import Links
from ballbal_ros.weighing.regressor import Motion, Rows, balance_regressor

_TILT_STEP = 1e-3
_ROUNDS = 3
# Rolling resistance of a rubber-coated ball on a hard floor, as a share of the load (common practice, no source).
RESISTANCE, RESISTANCE_SPREAD = 0.003, 0.003
# Encoders against IMU: a few ticks at most.
LATE_SPREAD = 0.005


@attrs.frozen(kw_only=True)
class Noise:
    """What the rows are off by besides the masses, as standard deviations, N m: of one rest's mean, of a sample in a
    swing (which are not independent). ``scale``: of the scale that the total mass was weighed on, kg.
    """

    rest: float = 0.03
    swing: float = 0.3
    scale: float = 0.05


@attrs.frozen(eq=False)
class Evidence:
    """What was seen: the robot at rest (one sample for each rest) and moving, and its mass if a scale has told, kg
    (without the ball).
    """

    rests: Motion
    swings: Motion
    mass: float | None = None


@attrs.frozen(eq=False)
class Weighed:
    """What was found. ``fit`` is over [10 links, tilt (2), rolling resistance, lateness of the drive's angles] in units
    of the prior's standard deviations, about the ``links`` as drawn. ``rest_error`` [rests, 2] and ``swing_error``
    (rms): moments that are left, N m.
    """

    links: Links
    model: pin.Model
    fit: Fit
    imu_tilt: Array
    resistance: float
    late: float
    rest_error: Array
    swing_error: float

    @property
    def own(self) -> Array:
        """The links' unknowns [10 links]."""
        return self.fit.estimate[: self.links.unknowns]

    def masses(self) -> tuple[LinkMass, ...]:
        """The links as found."""
        return self.links.masses(self.own)

    def mass_model(self) -> MassModelParameters:
        """What robot.yaml is to hold."""
        masses = self.masses()
        return MassModelParameters(
            links=[mass.name for mass in masses],
            link={mass.name: mass.as_parameters() for mass in masses},
            imu_tilt=[float(v) for v in self.imu_tilt],
            spread=self.links.spread,
        )


class _Problem:
    """Residuals over their standard deviations, and their derivatives, about one guess of the tilt."""

    def __init__(self, description: RobotDescription, links: Links, evidence: Evidence, noise: Noise, tilt: Array):
        self.links, self.tilt, self.count = links, tilt, len(evidence.rests)
        self.mass, self.scale = evidence.mass, noise.scale
        motion = evidence.rests.joined(evidence.swings)
        self.rows = balance_regressor(description, motion, tilt)
        self.by_tilt = [
            (balance_regressor(description, motion, tilt + step).by_dynamic - self.rows.by_dynamic) / _TILT_STEP
            for step in _TILT_STEP * np.eye(2)
        ]
        self.sigma = np.full((len(motion), 1), noise.swing)
        self.sigma[: self.count] = noise.rest

    def at(self, z: Array) -> tuple[Array, Array, float, float]:
        """Links' unknowns, tilt, rolling resistance and lateness at z."""
        size, spread = self.links.unknowns, self.links.spread
        resistance, late = z[size + 2 :].tolist()
        tilt = spread.imu_tilt * z[size : size + 2]
        return z[:size], tilt, RESISTANCE + RESISTANCE_SPREAD * resistance, LATE_SPREAD * late

    def _rows_at(self, tilt: Array) -> Rows:
        by = self.rows.by_dynamic
        for change, slope in zip(tilt - self.tilt, self.by_tilt, strict=True):
            by = by + change * slope
        return attrs.evolve(self.rows, by_dynamic=by)

    def moments(self, z: Array) -> Array:
        """Outside moments [N, 2], N m, that would have to be there at z."""
        own, tilt, resistance, late = self.at(z)
        return self._rows_at(tilt).residual(self.links.dynamic(own), resistance, late)

    def residual(self, z: Array) -> Array:
        """All residuals, white."""
        out = (self.moments(z) / self.sigma).ravel()
        if self.mass is None:
            return out
        return np.append(out, (self.links.total_mass(self.at(z)[0]) - self.mass) / self.scale)

    def by(self, z: Array) -> Array:
        """Their derivatives [m, n]."""
        own, tilt, _, _ = self.at(z)
        dynamic, slope = self.links.dynamic(own), self.links.dynamic_by(own)
        by_links = self._rows_at(tilt).by_dynamic @ slope
        columns = [by_links]
        columns += [(self.links.spread.imu_tilt * (each @ dynamic))[:, :, None] for each in self.by_tilt]
        columns.append(RESISTANCE_SPREAD * self.rows.rolling[:, :, None])
        columns.append(LATE_SPREAD * self.rows.late[:, :, None])
        out = np.concatenate(columns, axis=2) / self.sigma[:, :, None]
        out = out.reshape(-1, out.shape[2])
        if self.mass is None:
            return out
        total = np.zeros(out.shape[1])
        total[: len(own)] = slope[::10].sum(axis=0) / self.scale
        return np.vstack((out, total))


def identify(description: RobotDescription, evidence: Evidence, noise: Noise | None = None) -> Weighed:
    """The most probable links and IMU tilt. ``description`` is the robot as drawn: the prior is about it."""
    links, noise = Links.of(description), noise or Noise()
    z, tilt = np.zeros(links.unknowns + 4), np.zeros(2)
    for _ in range(_ROUNDS):
        problem = _Problem(description, links, evidence, noise, tilt)
        fit = most_probable(problem.residual, problem.by, z)
        z = fit.estimate
        tilt = problem.at(z)[1]
    moments = problem.moments(z)
    swings = moments[problem.count :]
    return Weighed(
        links=links,
        model=description.model,
        fit=fit,
        imu_tilt=tilt,
        resistance=problem.at(z)[2],
        late=problem.at(z)[3],
        rest_error=moments[: problem.count],
        swing_error=float(np.sqrt((swings**2).mean())) if len(swings) else 0.0,
    )
