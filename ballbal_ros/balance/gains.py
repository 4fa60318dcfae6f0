"""From weights and noise figures to gains: one regulator for lean and ball, one for the heading."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.balance.discrete import SampledPlant, discrete_lqr, sampled
from ballbal_ros.balance.linear_model import BALL, LinearModel, linear_model
from ballbal_ros.balance.margins import LONGEST_DELAY, Margins, loop_margins
from ballbal_ros.balance.noise import estimator_gain, heading_noise, station_noise
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.balance.regulator import Regulator, steady_trim
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture


@attrs.frozen(eq=False)
class Gains:
    """What the loop runs with, at one posture.

    ``station`` regulates x = [roll, pitch, roll_rate, pitch_rate, x, y, vx, vy] by [τ_x, τ_y] from [roll, pitch,
    roll_rate, pitch_rate, x, y], lean counted from the equilibrium, with the moment about the contact as disturbance
    [2]; ``heading`` regulates [heading, heading_rate] by τ_z from both, with the moment about z [1]. SI, rad.
    """

    parameters: BalanceParameters
    model: LinearModel
    station: Regulator
    heading: Regulator


@attrs.frozen
class Pole:
    """One closed-loop pole, or a pair: equivalent continuous ``frequency`` in rad/s, ``damping`` (1 for a real one)."""

    frequency: float
    damping: float


@attrs.frozen
class Requirement:
    """One margin and what is asked of it; ``at_least`` is False where less is better. ``unit`` "-" for none."""

    name: str
    value: float
    limit: float
    unit: str
    at_least: bool = True

    @property
    def ok(self) -> bool:
        """Whether the margin is what it must be."""
        return self.value >= self.limit if self.at_least else self.value <= self.limit


def design(posture: Posture, description: RobotDescription, parameters: BalanceParameters) -> Gains:
    """Gains for a posture; margins are measured apart, by :func:`margins`.

    Raises :class:`BallbalError` in one line where weights and noise figures have no solution.
    """
    model = linear_model(posture, description)
    return Gains(parameters, model, _station(model, parameters), _heading(model, parameters))


def margins(
    gains: Gains, plant: SampledPlant | None = None, longest_delay: float = LONGEST_DELAY
) -> tuple[Margins, Margins]:
    """Margins of (lean and ball, heading), each loop as sampled; ``plant`` is another than the one designed for.

    Delays are tried up to ``longest_delay``, s.
    """
    station = loop_margins(gains.station, ("x", "y"), plant, longest_delay)
    return station, loop_margins(gains.heading, ("z",), None, longest_delay)


def checked_design(
    posture: Posture, description: RobotDescription, parameters: BalanceParameters
) -> tuple[Gains, tuple[Margins, Margins]]:
    """Gains and margins; raises :class:`BallbalError` where a margin is below what ``margins.*`` asks for.

    Delays are tried no further than is asked for: a limit beyond counts as infinite.
    """
    gains = design(posture, description, parameters)
    found = margins(gains, longest_delay=parameters.margins.delay + 2.0 * parameters.loop.period)
    for requirement in requirements(found, parameters):
        if not requirement.ok:
            least = "at least" if requirement.at_least else "at most"
            unit = "" if requirement.unit == "-" else f" {requirement.unit}"
            raise BallbalError(
                "balance.yaml",
                f"the weights leave {requirement.name} {requirement.value:.3g}{unit}",
                f"it takes {least} {requirement.limit:g}{unit}: change weights.* or estimator.*, or margins.*",
            )
    return gains, found


def requirements(found: tuple[Margins, Margins], parameters: BalanceParameters) -> list[Requirement]:
    """Each measured margin beside what ``margins.*`` asks for."""
    asked = parameters.margins
    rows: list[Requirement] = []
    for loop, which in zip(found, ("lean and ball", "heading"), strict=True):
        for axis in loop.axes:
            rows.append(Requirement(f"gain margin up, {axis.axis}", axis.gain_up, asked.gain_up, "-"))
            rows.append(
                Requirement(f"gain margin down, {axis.axis}", axis.gain_down, asked.gain_down, "-", at_least=False)
            )
            rows.append(Requirement(f"phase margin, {axis.axis}", axis.phase, asked.phase, "deg"))
            rows.append(Requirement(f"delay margin, {axis.axis}", axis.delay, asked.delay, "s"))
        rows.append(Requirement(f"disk margin, {which}", loop.disk, asked.disk, "-"))
        rows.append(Requirement(f"delay it can bear, {which}", loop.delay_limit, asked.delay, "s"))
    return rows


def least_margins(found: tuple[Margins, Margins]) -> dict[str, float]:
    """The least margin of each kind over all axes, by a name that ends with its unit. Infinite: more than was tried."""
    axes = [axis for loop in found for axis in loop.axes]
    return {
        "gain margin up": min(axis.gain_up for axis in axes),
        "gain margin down": max(axis.gain_down for axis in axes),
        "phase margin deg": min(axis.phase for axis in axes),
        "delay margin ms": 1e3 * min(*(axis.delay for axis in axes), *(loop.delay_limit for loop in found)),
        "disk margin": min(loop.disk for loop in found),
    }


def poles(regulator: Regulator) -> list[Pole]:
    """Closed-loop poles, slowest first, pairs once; those of the delay, which die within a sample, left out."""
    found = []
    for z in np.linalg.eigvals(regulator.closed_loop()):
        if abs(z) > 1e-3 and z.imag >= -1e-12:
            s = np.log(complex(z)) / regulator.plant.period
            found.append(Pole(float(abs(s)), float(-s.real / abs(s))))
    return sorted(found, key=lambda pole: pole.frequency)


def _bryson(*deviations: float) -> Array:
    """diag(1 / deviation²), each deviation for both axes."""
    return np.diag([1.0 / d**2 for d in deviations for _ in range(2)])


def _station(model: LinearModel, parameters: BalanceParameters) -> Regulator:
    weights, loop = parameters.weights, parameters.loop
    matrices = model.state_matrix, model.torque_matrix, model.moment_matrix
    plant = sampled(*matrices, model.measurement_matrix, loop.period, loop.delay)
    q = _bryson(weights.lean, weights.lean_rate, weights.ball_position, weights.ball_velocity)
    estimator = estimator_gain(plant, station_noise(model, parameters))
    return _regulator(plant, q, _bryson(weights.torque), estimator, BALL if parameters.trim else None)


def _heading(model: LinearModel, parameters: BalanceParameters) -> Regulator:
    weights, loop = parameters.weights, parameters.loop
    plant = sampled(*model.heading_matrices, np.eye(2), loop.period, loop.delay)
    q = np.diag([weights.heading**-2, weights.heading_rate**-2])
    estimator = estimator_gain(plant, heading_noise(model, parameters))
    held = slice(0, 1) if parameters.trim else None
    return _regulator(plant, q, np.array([[weights.heading_torque**-2]]), estimator, held)


def _regulator(plant: SampledPlant, q: Array, r: Array, estimator: Array, held: slice | None) -> Regulator:
    """Feedback that reckons with past torques, and the trim that holds the states ``held`` at zero."""
    n, m, k = *plant.continuous[1].shape, plant.disturbance.shape[1]
    augmented_a, augmented_b = plant.augmented()
    weight = np.zeros(augmented_a.shape)
    weight[:n, :n] = q
    feedback = discrete_lqr(augmented_a, augmented_b, weight, r)
    trim_state, trim_input = np.zeros((n, k)), np.zeros((m, k))
    if held is not None:
        trim_state, trim_input = steady_trim(*plant.continuous, held)
    return Regulator(plant, read_only(feedback), read_only(estimator), trim_state, trim_input)
