"""What is in a hand, from postures at rest: the least squares, its standard error, and the rule for its use."""

from __future__ import annotations

import attrs
import numpy as np
import pytest
from scipy.linalg import solve_discrete_are, solve_discrete_lyapunov

from ballbal_ros.balance.hand_load_parameters import HandLoadParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.weighing.hand_load import HandLoadEstimate, HandWeighing, good_enough
from ballbal_ros.weighing.reading import Reading
from helpers.rehearsing import files, story

GRAVITY = 9.80665
HAND = "left_hand"
POSES = ((-0.3, -0.5, 0.0), (-1.3, -0.2, 0.7), (-0.3, -1.5, 1.0))
GIVEN = HandLoadParameters()


def posture(shoulder: float, elbow: float, wrist: float) -> Array:
    position = story("reach").posture.copy()
    for name, value in (("shoulder_pitch", shoulder), ("elbow_pitch", elbow), ("wrist_pitch", wrist)):
        position[files().description.joint_index(f"left_{name}", "test")] = value
    return position


def at_rest(body: WholeBody, position: Array, pull: Array, noise: Array) -> Reading:
    """The lean at which gravity on all of the body and a moment ``pull`` [2], N m, balance; read with an error of
    ``noise`` [2], N m.
    """
    here = body.posture(position)
    mu = here.mass * here.center
    lean = np.array(here.equilibrium_lean)
    for _ in range(30):
        x, y, _ = rotation_lean(lean) @ mu
        lean = lean - (GRAVITY * np.array([-y, x]) + pull) / (GRAVITY * np.linalg.norm(mu))
    return Reading(position, lean + noise / (GRAVITY * np.linalg.norm(mu)), np.zeros(2))


def weighed(mass: float, seed: int) -> HandLoadEstimate:
    """Body and centre off at random, as the parameters say they may be; it stands in three postures with the load."""
    random = np.random.default_rng(seed)
    pull = GIVEN.body_moment * random.standard_normal(2)
    weighing, body = HandWeighing(files().description, GIVEN), WholeBody(files().description)

    def read(pose: tuple[float, float, float]) -> Reading:
        return at_rest(body, posture(*pose), pull, GIVEN.reading_noise * random.standard_normal(2))

    weighing.add(read(POSES[0]))
    weighing.open(HAND)
    body.set_load(Load(HAND, mass, GIVEN.unknown_center * random.standard_normal(3)))
    for pose in POSES:
        weighing.add(read(pose))
    return weighing.estimate(HAND)


@pytest.mark.parametrize("mass", [0.2, 1.0, 3.0])
def test_the_standard_error_is_honest(mass: float):
    """Over 100 draws of noise, body error and mass centre, 95 % of the errors (90 to 99 of 100) lie within 1.96
    standard errors.
    """
    found = [weighed(mass, seed) for seed in range(100)]
    within = sum(abs(each.mass - mass) <= 1.96 * each.mass_error for each in found)
    assert 90 <= within <= 99
    assert all(each.mass_error <= 0.06 for each in found)


def test_the_noise_of_a_reading_is_what_the_attitude_leaves():
    """shelver's ``reading_noise`` within 5 %: the stationary error of the attitude's two-state Kalman filter (lean and
    gyro bias), whose gains reckon with balance.yaml's noise while gyro and accelerometer have simulation.yaml's
    (discrete Riccati and Lyapunov equations, SciPy), times m g c_z; and that of the lean's acceleration under Hann's
    window of T = 1 s, √(2 π² / T³) of the gyro's density, times the inertia about the contact.
    """
    given, imu, body = files().balance, files().simulation.imu, WholeBody(files().description)
    period = given.loop.period
    density = given.estimator.rate_noise * np.sqrt(period)
    step, see = np.array([[1.0, -period], [0.0, 1.0]]), np.array([[1.0, 0.0]])
    growth = np.diag([density**2 * period, given.estimator.rate_walk**2 * period])
    noise = (density * given.attitude_time) ** 2 / period
    known = solve_discrete_are(step.T, see.T, growth, [[noise]])
    gain = known @ see.T / (known[0, 0] + noise)
    left = np.eye(2) - gain @ see
    true = left @ np.diag([imu.gyro_noise**2 * period, imu.gyro_walk**2 * period]) @ left.T
    true += gain @ gain.T * (imu.accelerometer_noise / GRAVITY) ** 2 / period
    lean = np.sqrt(solve_discrete_lyapunov(left @ step, true)[0, 0])
    at = body.posture(posture(*POSES[0]))
    inertia = at.inertia_about_ball[1, 1] + files().description.parameters.ball.radius * at.mass * at.center[2]
    by_lean = lean * GRAVITY * at.mass * at.center[2]
    by_acceleration = imu.gyro_noise * np.sqrt(2.0 * np.pi**2) * inertia
    assert given.hand_load.reading_noise == pytest.approx(np.hypot(by_lean, by_acceleration), rel=0.05)


def test_readings_of_one_posture_count_for_what_they_add():
    """Four readings in each of three postures, a second apart: the attitude forgets their common error within 3 s, and
    the ball creeps on a floor that is known by half. The errors are as large as the covariance says (300 draws;
    root mean square of both, 10 %), and less than with one reading each.
    """
    random = np.random.default_rng(5)
    body, kept = WholeBody(files().description), np.exp(-1.0 / 3.0)
    rests = [at_rest(body, posture(*pose), np.zeros(2), np.zeros(2)) for pose in POSES]
    slope = [GRAVITY * at.mass * at.center[2] for at in (body.posture(rest.arm_position) for rest in rests)]
    errors, said = [], []
    for _ in range(300):
        weighing = HandWeighing(files().description, GIVEN, attitude_time=3.0)
        resists = GIVEN.rolling_moment * (1.0 + 0.5 * random.standard_normal())
        for rest, by_lean in zip(rests, slope):
            slow = random.standard_normal(2)
            for _ in range(4):
                creep = random.uniform(-0.4, 0.4, 2)
                moment = GIVEN.reading_noise * slow + resists * np.array([creep[1], -creep[0]])
                weighing.add(attrs.evolve(rest, lean=rest.lean - moment / by_lean, creep=creep))
                slow = kept * slow + np.sqrt(1.0 - kept**2) * random.standard_normal(2)
        moment, error = weighing.outside_moment()
        errors.append(moment)
        said.append(error)
    measured = float(np.sqrt(np.mean(np.square(errors))))
    assert measured == pytest.approx(float(np.sqrt(np.mean(np.square(said)))), rel=0.1)
    assert measured < 0.9 * GIVEN.reading_noise / np.sqrt(3.0)


def test_a_hand_calculation_of_one_kilogram():
    """Without noise and prior, 1 kg held x m ahead of where it was makes g x N m more: the two-pan balance."""
    exact = attrs.evolve(GIVEN, reading_noise=1e-3, body_moment=1e-3, unknown_center=0.0)
    weighing, body = HandWeighing(files().description, exact), WholeBody(files().description)
    weighing.open(HAND)
    body.set_load(Load(HAND, 1.0))
    moments = []
    for pose in POSES[:2]:
        reading = at_rest(body, posture(*pose), np.zeros(2), np.zeros(2))
        moments.append(weighing.missing_moment(reading)[1])
        ahead = [(rotation_lean(reading.lean) @ body.hand_position(HAND, posture(*pose)))[0]]
        assert moments[-1] == pytest.approx(GRAVITY * ahead[0], abs=1e-6)
        weighing.add(reading)
    assert weighing.estimate(HAND).mass == pytest.approx(1.0, abs=1e-3)


def test_the_estimate_is_that_of_a_reference_library():
    """Prior and readings put as rows into NumPy's least squares (LAPACK's gelsd) give the same mass."""
    weighing, body = HandWeighing(files().description, GIVEN), WholeBody(files().description)
    weighing.open(HAND)
    body.set_load(Load(HAND, 1.3, [0.02, 0.0, -0.03]))
    design, seen = [], []
    for pose in POSES:
        reading = at_rest(body, posture(*pose), np.array([0.1, -0.2]), np.zeros(2))
        weighing.add(reading)
        design.append(np.hstack([np.eye(2), weighing.lever(reading, HAND)]) / GIVEN.reading_noise)
        seen.append(weighing.missing_moment(reading) / GIVEN.reading_noise)
    found = weighing.estimate(HAND)
    limit, spread = files().description.parameters.hands.load_limit, found.mass * GIVEN.unknown_center
    prior = np.diag(1.0 / np.array([GIVEN.body_moment, GIVEN.body_moment, limit, spread, spread, spread]))
    reference = np.linalg.lstsq(np.vstack([*design, prior]), np.concatenate([*seen, np.zeros(6)]), rcond=None)[0]
    assert found.mass == pytest.approx(reference[2], abs=1e-4)


def test_an_estimate_is_used_by_its_standard_error_alone():
    """50 g or 5 %, whichever is more, and a gain on what was known: the rule as it is written down."""

    def estimate(mass: float, error: float, before: float = 3.0) -> HandLoadEstimate:
        return HandLoadEstimate(HAND, mass, error, np.zeros(3), np.zeros(3), before, 1, 3.0)

    assert good_enough(estimate(0.2, 0.05), GIVEN) and not good_enough(estimate(0.2, 0.06), GIVEN)
    assert good_enough(estimate(2.0, 0.1), GIVEN) and not good_enough(estimate(2.0, 0.11), GIVEN)
    assert not good_enough(estimate(2.0, 0.05, before=0.06), GIVEN)
    assert estimate(0.01, 0.02).load.mass == 0.0 and estimate(3.2, 0.02).load.mass == 3.0


def test_an_empty_hand_makes_no_load_that_can_not_be():
    """Something was put down, and nobody said so: what is found then, next to nothing, has no centre metres away. (Such
    a load is refused by the mass model, in the middle of a tick.)
    """
    body, balance, rng, used = WholeBody(files().description), files().balance.hand_load, np.random.default_rng(0), 0
    for _ in range(60):
        weighing = HandWeighing(files().description, balance, [Load(HAND, 1.0, [0.0, 0.0, -0.05])])
        weighing.open(HAND)
        for _ in range(4):
            position = rng.uniform(-0.8, 0.3, files().description.joint_count)
            weighing.add(at_rest(body, position, np.zeros(2), rng.normal(0.0, 0.06, 2)))
        found = weighing.estimate(HAND)
        used += good_enough(found, balance)
        found.load.check("found load", found.limit)
        assert np.abs(found.center).max() < 0.5
    assert used > 30
