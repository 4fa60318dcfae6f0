"""The simulated sensors have the errors that such sensors have, and no others."""

import math

import attrs
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import lean_and_heading_from_quat_xyzw, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.simulation.parameters import SimulatedImuParameters
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.sensors import AttitudeFilter, ImuErrors
from ballbal_ros.simulation.truth import Truth
from helpers.robots import shelver
from helpers.simulated import NO_EFFORT, NO_NOISE, robot, simulation

RATE = simulation().loop_rate
# The defaults are a mid-range MEMS IMU's: the published calibration of the EuRoC data set's ADIS16448. shelver's is
# better.
MID_RANGE = SimulatedImuParameters()


def rows(count: int, seed: int = 0) -> Array:
    source = ImuErrors(MID_RANGE, RATE, np.random.default_rng(seed)).rows()
    return np.array([next(source) for _ in range(count)])


def rotation(quat_xyzw: tuple[float, float, float, float] | None) -> Array:
    assert quat_xyzw is not None
    return np.asarray(Rotation.from_quat(quat_xyzw).as_matrix())


def test_noise_has_the_published_densities() -> None:
    """White noise has the densities of EuRoC's ADIS16448 (1.7e-4 rad/s/√Hz, 2e-3 m/s²/√Hz), axis by axis."""
    noise = rows(60_000)
    # Differences of neighbours are free of bias and walk; white samples of density s have variance s² rate.
    white = np.diff(noise, axis=0) / math.sqrt(2.0 * RATE)
    assert white[:, :3].std(axis=0) == pytest.approx([1.7e-4] * 3, rel=0.02)
    assert white[:, 3:6].std(axis=0) == pytest.approx([2e-3] * 3, rel=0.02)
    correlation = np.corrcoef(white.T) - np.eye(9)
    assert np.abs(correlation).max() < 0.02


def test_gyro_bias_walks_with_the_published_density() -> None:
    """In time t the bias walks by 1.9e-5 sqrt(t) rad/s (EuRoC), and it starts as spread as the parameter says."""
    still = attrs.evolve(MID_RANGE, gyro_noise=0.0)
    starts, walked = [], []
    for seed in range(300):
        source = ImuErrors(still, RATE, np.random.default_rng(seed)).rows()
        bias = np.array([next(source)[:3] for _ in range(2001)])
        starts.append(bias[0])
        walked.append(bias[-1] - bias[0])
    assert np.std(starts) == pytest.approx(MID_RANGE.gyro_bias, rel=0.08)
    assert np.std(walked) == pytest.approx(1.9e-5 * math.sqrt(2000 / RATE), rel=0.08)


def test_imu_at_rest_reads_plus_g() -> None:
    """REP-145: at rest with z up the acceleration reads +g; leaning, it is the vertical in the IMU's own axes."""
    simulated = robot(NO_NOISE)
    for _ in range(20):
        simulated.step(NO_EFFORT)
    measured = simulated.measurement()
    up = (rotation_lean(np.array(simulated.lean)) @ shelver().rotation_imu_in_base).T[:, 2]
    assert measured.imu_acceleration == pytest.approx(GRAVITY * up, abs=1e-6)
    assert measured.imu_rate == pytest.approx(np.zeros(3), abs=1e-9)
    assert rotation(measured.imu_quat_xyzw)[2] == pytest.approx(up, abs=1e-9)


def falling(simulated: SimulatedRobot, ticks: int) -> SimulatedRobot:
    """Let go, and push, so that everything moves."""
    simulated.support = False
    simulated.push("torso", [0.0, 0.0, 0.2], [20.0, 12.0, 0.0])
    for _ in range(ticks):
        simulated.step(np.array([0.6, -0.5, 0.2]))
    return simulated


def test_imu_feels_the_motion_of_its_place() -> None:
    """Rate is the body's, acceleration the mean over the tick of d²p/dt² + g at the IMU's place, both in IMU axes."""
    simulated = falling(robot(NO_NOISE), 100)
    place = np.array(shelver().parameters.imu.position)

    def state() -> tuple[Array, Array]:
        """Axes of the body in odom, and velocity of the IMU's place, of now."""
        axes = rotation(simulated.body_quat_xyzw)
        return axes, simulated.ball_velocity + axes @ np.cross(simulated.body_rate, place)

    before = state()
    simulated.step(np.array([0.6, -0.5, 0.2]))
    after, measured = state(), simulated.measurement()
    felt = (after[1] - before[1]) * RATE + np.array([0.0, 0.0, GRAVITY])
    axes = 0.5 * (before[0] + after[0]) @ shelver().rotation_imu_in_base
    assert measured.imu_acceleration == pytest.approx(axes.T @ felt, abs=0.02)
    assert np.linalg.norm(felt - [0.0, 0.0, GRAVITY]) > 0.3
    # The rate of the tick's instant, from the attitudes one tick before and one after.
    simulated.step(np.array([0.6, -0.5, 0.2]))
    turned = Rotation.from_matrix(before[0].T @ state()[0]).as_rotvec() * 0.5 * RATE
    assert measured.imu_rate == pytest.approx(shelver().rotation_imu_in_base.T @ turned, abs=1e-4)


def test_ideal_attitude_is_the_true_one() -> None:
    """With `ideal` the orientation is that of the IMU in odom; an unknown tilt of its mounting shows in it."""
    ideal = {**NO_NOISE, "imu.attitude": "ideal"}
    for truth, error in ((Truth(), 0.0), (Truth(imu_tilt=(0.01, -0.02)), math.hypot(0.01, 0.02))):
        simulated = falling(robot(ideal, truth=truth), 100)
        in_odom = rotation(simulated.measurement().imu_quat_xyzw) @ shelver().rotation_imu_in_base.T
        difference = rotation(simulated.body_quat_xyzw).T @ in_odom
        angle = math.acos(min(1.0, (np.trace(difference) - 1.0) / 2.0))
        assert angle == pytest.approx(error, abs=1e-4)


def test_attitude_filter_tilts_under_acceleration() -> None:
    """Under a lasting acceleration a it goes to the tilt atan(a/g), with its time constant; the heading stays."""
    period, time_constant, acceleration = 1.0 / RATE, 5.0, 0.8
    tilting = AttitudeFilter((1.0, 0.0, 0.0, 0.0), time_constant, period)
    found = []
    for _ in range(round(40.0 / period)):
        w, x, y, z = tilting.update(np.zeros(3), np.array([acceleration, 0.0, GRAVITY]))
        found.append(lean_and_heading_from_quat_xyzw(x, y, z, w))
    final = math.atan2(acceleration, GRAVITY)
    roll, pitch, heading = found[-1]
    assert -pitch == pytest.approx(final, rel=1e-3)
    assert (roll, heading) == pytest.approx((0.0, 0.0), abs=1e-9)
    # For a small angle the approach is exponential.
    assert -found[round(time_constant / period)][1] / final == pytest.approx(1.0 - math.exp(-1.0), rel=0.01)


def test_attitude_filter_follows_a_turning_body() -> None:
    """Without lasting acceleration it follows a body that wobbles about all axes, heading too, to 1 mrad over 10 s."""
    period, instant = 1.0 / RATE, 1e-6

    def body(times: Array) -> Rotation:
        yaw_pitch_roll = (0.3 * times, 0.15 * np.sin(1.3 * times), 0.1 * np.sin(2.0 * times))
        return Rotation.from_euler("ZYX", np.stack(yaw_pitch_roll, axis=1))

    times = np.arange(0.0, 10.0, period)
    true = body(times)
    rates = (true.inv() * body(times + instant)).as_rotvec() / instant
    ups = true.inv().apply([0.0, 0.0, GRAVITY])
    x, y, z, w = true[0].as_quat()
    follower = AttitudeFilter((w, x, y, z), 5.0, period)
    follower.update(rates[0], ups[0])
    for rate, up in zip(rates[1:], ups[1:]):
        w, x, y, z = follower.update(rate, up)
    assert (true[-1].inv() * Rotation.from_quat([x, y, z, w])).magnitude() < 1e-3


def test_encoders_count_whole_steps() -> None:
    """Angles are whole counts within half a count of the truth; the drive's rate is their difference quotient."""
    simulated = falling(robot(), 60)
    before = simulated.measurement().drive_angle
    simulated.step(NO_EFFORT)
    measured, counts = simulated.measurement(), shelver().drive.encoder_step
    assert measured.drive_angle / counts == pytest.approx(np.rint(measured.drive_angle / counts), abs=1e-6)
    assert simulated.drive_rate == pytest.approx((measured.drive_angle - before) * RATE)
    off = measured.arm_position - simulated.arm_position
    assert np.abs(off).max() <= 0.5 * simulation().arm_encoder_step * 1.0001


@pytest.mark.parametrize("delay_steps", [1, 2, 5])
def test_delayed_sensors_say_what_was(delay_steps: int) -> None:
    """With a sensor delay of k physics steps the measurement at t is the truth of t - k steps, also within a tick."""
    step = simulation().physics_step
    late = robot({**NO_NOISE, "imu.attitude": "ideal", "arm_encoder_step": 0.0, "sensor_delay": delay_steps * step})
    fine = robot({**NO_NOISE, "imu.attitude": "ideal", "arm_encoder_step": 0.0, "loop_rate": 1.0 / step})
    force = np.zeros(3)
    for simulated in (late, fine):
        simulated.support = False
        simulated.push("torso", [0.0, 0.0, 0.2], [20.0, 12.0, 0.0])
    for _ in range(50):
        late.step(force)
    for _ in range(100 - delay_steps):
        fine.step(force)
    assert late.measurement().imu_rate == pytest.approx(fine.measurement().imu_rate, abs=2e-5)
    assert late.measurement().drive_angle == pytest.approx(fine.measurement().drive_angle, abs=2e-4)
    assert np.abs(fine.measurement().imu_rate).max() > 0.02
