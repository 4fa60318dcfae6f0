"""The simulated robot as a whole: stands, falls, is pushed, carries, and repeats itself to the bit."""

import math

import mujoco
import numpy as np
import pytest

from ballbal_ros.errors import BallbalError, ModelError
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.robot import SimulatedRobot
from ballbal_ros.simulation.truth import Truth
from helpers.robots import reach, shelver
from helpers.simulated import NO_EFFORT, robot, simulation, without_stiction

RADIUS = shelver().parameters.ball.radius


def run(simulated: SimulatedRobot, time: float, effort: np.ndarray = NO_EFFORT) -> SimulatedRobot:
    for _ in range(round(time * simulation().loop_rate)):
        simulated.step(effort)
    return simulated


def test_it_starts_at_rest_and_stays_in_balance_without_noise() -> None:
    """Let go at the model's equilibrium lean nothing happens for a second: the contact carries all from the start."""
    simulated = robot()
    lean = reach().body().posture(reach().first).equilibrium_lean
    assert simulated.lean == pytest.approx(lean) and abs(simulated.heading) < 1e-12 and simulated.support
    simulated.support = False
    run(simulated, 1.0)
    assert simulated.floor_force == pytest.approx([0.0, 0.0, simulated.world.mass * GRAVITY], abs=1e-3)
    assert np.hypot(*simulated.ball_position[:2]) < 1e-6 and not simulated.fell


def test_wrong_mass_model_makes_it_fall_and_it_stays_down() -> None:
    """With a mass centre further to the front than the model has it, it falls to the front, says so, and lies still."""
    simulated = robot(truth=Truth(center={"torso": (0.2, 0.0, 0.0)}))
    simulated.support = False
    run(simulated, 3.0)
    assert simulated.fell and simulated.lean[1] > math.radians(40.0)
    lean, time = simulated.lean, simulated.time
    run(simulated, 0.1)
    assert simulated.lean == lean and simulated.time == pytest.approx(time + 0.1)
    assert simulated.measurement().finite


def test_stand_holds_against_arms_drive_and_push() -> None:
    """On the stand the body moves by less than 0.1 mm and 0.1 mrad, whatever the arms, the drive and a push do."""
    simulated = robot()
    simulated.command_arms(reach().path(), 0.05)
    simulated.push("torso", [0.0, 0.0, 0.2], [50.0, -30.0, 0.0])
    start, lean = simulated.ball_position, simulated.lean
    for _ in range(450):
        simulated.step(np.array([4.0, -2.0, 3.0]))
        assert np.linalg.norm(simulated.ball_position - start) < 1e-4
        assert np.abs(np.subtract(simulated.lean, lean)).max() < 1e-4


def test_stand_takes_hold_where_the_body_is() -> None:
    """A stand that comes back catches the robot where it is by then, and holds it there."""
    simulated = robot()
    simulated.support = False
    simulated.push("torso", [0.0, 0.0, 0.2], [40.0, 0.0, 0.0])
    run(simulated, 0.3)
    simulated.release_push()
    simulated.support = True
    caught = simulated.lean
    run(simulated, 1.0)
    assert simulated.lean == pytest.approx(caught, abs=5e-3) and not simulated.fell
    assert np.linalg.norm(simulated.ball_velocity) < 1e-6


def test_encoders_see_the_ball_relative_to_the_body() -> None:
    """Ball rate in the heading's x is r (relative rate + pitch rate): summed up, it is the way of the ball's centre."""
    simulated = robot()
    simulated.support = False
    simulated.push("torso", [0.0, 0.0, 0.2], [15.0, 0.0, 0.0])
    effort, spin_map = shelver().drive.effort(np.array([0.0, 0.8, 0.0])), shelver().drive.spin_map
    at, lean, angle = simulated.ball_position, simulated.lean, simulated.measurement().drive_angle
    run(simulated, 0.6, effort)
    relative = spin_map @ (simulated.measurement().drive_angle - angle)
    way = RADIUS * (relative[1] + simulated.lean[1] - lean[1])
    moved = simulated.ball_position - at
    assert abs(moved[0]) > 0.1 and abs(simulated.lean[1] - lean[1]) > 0.1
    assert way == pytest.approx(moved[0], rel=0.005)


def test_push_acts_as_a_force_at_its_point() -> None:
    """Floor and stand answer a push by the opposite force and the opposite moment about the ball's centre."""
    simulated, force, at = robot(), np.array([7.0, -4.0, 3.0]), np.array([0.05, 0.02, -0.03])
    run(simulated, 0.1)
    constraint = simulated.data.qfrc_constraint.copy()
    simulated.push("left_hand", at.tolist(), force.tolist())
    run(simulated, 1.0)
    body = simulated.world.bodies["left_hand"]
    axes = simulated.data.xmat[simulated.world.base].reshape(3, 3)
    point = simulated.data.xpos[body] + simulated.data.xmat[body].reshape(3, 3) @ at
    change = simulated.data.qfrc_constraint - constraint
    assert change[:3] == pytest.approx(-force, abs=1e-2)
    # The arm yields a little to the push (its servo is a spring), which moves the arm's own weight.
    moment = np.cross(point - simulated.ball_position, force)
    on_ball = axes @ (change[3:6])
    assert on_ball == pytest.approx(-moment, abs=0.05 * np.linalg.norm(moment))
    simulated.release_push()
    run(simulated, 1.0)
    assert simulated.data.qfrc_constraint[:3] == pytest.approx(constraint[:3], abs=1e-2)


def test_load_changes_what_is_carried() -> None:
    """A load set while it stands changes what is carried at once, by what truth makes of it; mass 0 takes it away."""
    simulated = robot(truth=Truth(load_factor={"left_hand": 1.25}))
    start = simulated.world.mass
    simulated.set_load(Load("left_hand", 0.0))
    assert simulated.world.mass == pytest.approx(start - 2.5)
    run(simulated, 0.2)
    assert simulated.floor_force[2] == pytest.approx(simulated.world.mass * GRAVITY, abs=1e-2)
    simulated.set_load(Load("left_hand", 1.0, [0.0, 0.0, -0.05]))
    assert simulated.world.mass == pytest.approx(start - 1.25)


def test_load_change_keeps_the_state() -> None:
    """Taking a load in motion changes no position and no rate at that instant."""
    simulated = robot()
    simulated.support = False
    simulated.command_arms(reach().path(), 0.0)
    run(simulated, 0.4)
    before = simulated.data.qpos.copy(), simulated.data.qvel.copy()
    simulated.set_load(Load("right_hand", 0.5, [0.0, 0.0, -0.05]))
    assert np.array_equal(simulated.data.qpos, before[0]) and np.array_equal(simulated.data.qvel, before[1])


def story(seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Truth and measurements [ticks, ...] of a run in which all that can happen happens."""
    simulated, generator = robot(seed=seed), np.random.default_rng(7)
    simulated.command_arms(reach().path(), 0.1)
    true, measured = [], []
    for tick in range(300):
        if tick == 20:
            simulated.support = False
        if tick == 100:
            simulated.push("torso", [0.0, 0.0, 0.2], [20.0, 5.0, 0.0])
        if tick == 120:
            simulated.release_push()
        if tick == 200:
            simulated.set_load(Load("left_hand", 1.0, [0.0, 0.0, -0.05]))
        seen = simulated.measurement()
        imu = (*seen.imu_quat_xyzw, *seen.imu_rate, *seen.imu_acceleration)
        measured.append(np.concatenate((imu, seen.drive_angle, seen.arm_position)))
        true.append(np.concatenate((simulated.ball_position, simulated.body_quat_xyzw)))
        simulated.step(generator.normal(size=3))
    return np.array(true), np.array(measured)


def test_one_seed_gives_one_run_to_the_bit() -> None:
    """Two runs with one seed are the same to the bit; another seed changes the measurements, and only these."""
    first, again, other = story(3), story(3), story(4)
    assert np.array_equal(first[0], again[0]) and np.array_equal(first[1], again[1])
    assert np.array_equal(first[0], other[0]) and not np.array_equal(first[1], other[1])


def test_rotors_add_their_inertia() -> None:
    """About z, on a floor without torsion, what turns under the held body is ball and reflected rotor inertia."""
    drive, ball = shelver().drive, shelver().parameters.ball
    simulated = robot({"floor.torsion": 0.0, "drive.delay": 0.0}, description=without_stiction())
    run(simulated, 0.1, drive.effort(np.array([0.0, 0.0, -2.0])))
    spinning = ball.inertia + drive.reflected_inertia[2, 2]
    turned = (drive.spin_map @ simulated.measurement().drive_angle)[2]
    assert turned == pytest.approx(0.5 * 2.0 / spinning * 0.1**2, rel=0.01)
    spin = simulated.data.qvel[simulated.world.rolling][2]
    assert spin == pytest.approx(2.0 / spinning * 0.1, rel=0.01)


def test_rolling_resistance_acts_as_its_moment() -> None:
    """While the ball rolls along x the whole loses angular momentum about the contact at the rate C N r."""
    changes = []
    for resistance in (0.0, 0.01):
        simulated = robot({"floor.rolling_resistance": resistance})
        simulated.support = False
        simulated.data.qvel[0] = 0.5
        simulated.data.qvel[simulated.world.rolling] = 0.0, 0.5 / RADIUS, 0.0
        mujoco.mj_step1(simulated.world.model, simulated.data)
        changes.append(momentum_about_contact(run(simulated, 0.01)))
    # In so short a time gravity's moment hardly differs between the two.
    lost = 0.01 * simulated.world.mass * GRAVITY * RADIUS * 0.01
    assert changes[1] - changes[0] == pytest.approx(-lost, rel=0.01)


def momentum_about_contact(simulated: SimulatedRobot) -> float:
    """Angular momentum about the y axis through the point where the run began on the floor, N m s."""
    data = simulated.data
    mujoco.mj_subtreeVel(simulated.world.model, data)
    mass, center = simulated.world.mass, data.subtree_com[0]
    velocity = data.subtree_linvel[0]
    return float(data.subtree_angmom[0][1] + mass * (center[2] * velocity[0] - center[0] * velocity[2]))


def test_no_log_file_is_left(tmp_path, monkeypatch) -> None:  # type: ignore[no-untyped-def]
    """MuJoCo's warnings leave no file in the working directory."""
    monkeypatch.chdir(tmp_path)
    simulated = robot()
    simulated.support = False
    simulated.data.qvel[:] = 1e12
    simulated.step(NO_EFFORT)
    assert simulated.fell and list(tmp_path.iterdir()) == []


def test_wrong_words_are_refused_in_one_line() -> None:
    """Unknown hands and links, and efforts that are no finite numbers, are refused; nothing has changed then."""
    simulated = robot()
    with pytest.raises(ModelError, match="unknown hand left_hant; did you mean left_hand?"):
        simulated.set_load(Load("left_hant", 1.0))
    with pytest.raises(ModelError, match="push: unknown link tors; did you mean torso?"):
        simulated.push("tors", [0, 0, 0], [1, 0, 0])
    with pytest.raises(BallbalError, match="drive_effort"):
        simulated.step(np.array([np.nan, 0.0, 0.0]))
    assert simulated.time == 0.0
