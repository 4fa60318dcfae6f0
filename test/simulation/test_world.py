"""The world in MuJoCo is the robot of the description, and obeys the laws of physics.md."""

import attrs
import mujoco
import numpy as np
import pytest

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import body_rates, lean_rates, rotation_heading, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY, OutsideMotion, balance_rows
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.truth import Truth
from ballbal_ros.simulation.world import World, rotor_axes
from helpers.robots import shelver
from helpers.simulated import NO_LOSS, Moment, lean_and_heading, moving, simulation

LOADS = (
    Load("left_hand", 1.7, [0.02, 0.01, -0.08], [[0.01, 0.001, 0.0], [0.001, 0.012, 0.0], [0.0, 0.0, 0.006]]),
    Load("right_hand", 0.6, [0.0, 0.0, -0.05]),
)
BODILESS = """
  <link name="ghost"/>
  <joint name="ghostly" type="revolute"><parent link="head"/><child link="ghost"/>
    <axis xyz="0 0 1"/><limit lower="-1" upper="1" velocity="1" effort="1"/></joint>
"""


def world(truth: Truth | None = None, **changes: float) -> World:
    return World.build(shelver(), simulation({**NO_LOSS, **changes}), truth or Truth())


def upper_body(built: World, arm_position: Array) -> tuple[float, Array, Array]:
    """Mass, mass centre and inertia about it, in base_link, of all bodies but the ball, as MuJoCo places them."""
    model, data = built.model, mujoco.MjData(built.model)
    data.qpos[built.arm_position] = arm_position
    mujoco.mj_kinematics(model, data)
    bodies = list(built.bodies.values())
    mass = model.body_mass[bodies]
    center = mass @ data.xipos[bodies] / mass.sum()
    inertia = np.zeros((3, 3))
    for body in bodies:
        axes, apart = data.ximat[body].reshape(3, 3), data.xipos[body] - center
        inertia += axes @ np.diag(model.body_inertia[body]) @ axes.T
        inertia += model.body_mass[body] * (apart @ apart * np.eye(3) - np.outer(apart, apart))
    return float(mass.sum()), center, inertia


def test_masses_are_those_of_the_whole_body() -> None:
    """Mass, mass centre and inertia agree with WholeBody at random postures, with loads that come, change and go."""
    built, body, generator = world(), WholeBody(shelver()), np.random.default_rng(1)
    for load in (None, *LOADS, Load("left_hand", 0.9, [0.0, 0.03, 0.0]), Load("left_hand", 0.0)):
        if load is not None:
            built.set_load(load)
            body.set_load(load)
        for _ in range(5):
            arm = generator.uniform(-1.0, 1.0, shelver().joint_count)
            mass, center, inertia = upper_body(built, arm)
            posture = body.posture(arm)
            assert mass == pytest.approx(posture.mass, abs=1e-9)
            assert center == pytest.approx(posture.center, abs=1e-9)
            assert inertia == pytest.approx(posture.inertia, abs=1e-9)
        assert built.mass == pytest.approx(body.mass + shelver().parameters.ball.mass, abs=1e-9)
        assert built.model.body_subtreemass[built.base] == pytest.approx(built.mass, abs=1e-9)


def test_truth_moves_the_mass_centre_as_it_says() -> None:
    """A link's centre off by d moves the whole by d times the link's share; a mass factor adds its share."""
    arm = np.zeros(shelver().joint_count)
    mass, center, _ = upper_body(world(), arm)
    moved = upper_body(world(Truth(center={"base_link": (0.002, 0.0, -0.001)})), arm)
    link = 13.6  # base_link's mass in the URDF, kg
    assert moved[0] == pytest.approx(mass)
    assert moved[1] - center == pytest.approx(np.array([0.002, 0.0, -0.001]) * link / mass, abs=1e-12)
    heavier = upper_body(world(Truth(mass_factor={"base_link": 1.1})), arm)
    assert heavier[0] == pytest.approx(mass + 0.1 * link)
    with pytest.raises(ModelError, match="no_such_link is no link with a mass"):
        world(Truth(mass_factor={"no_such_link": 1.1}))


def rows_of(built: World, moment: Moment, hand_force: Array) -> tuple[Array, Array, float]:
    """Residual [2] and drive torque [3] (base_footprint) by the model for MuJoCo's accelerations, and N m at stake."""
    body = WholeBody(shelver(), LOADS)
    lean, heading = lean_and_heading(moment.qpos)
    arm_at, arm_rate = built.arm_position, built.arm_rate
    terms = body.terms(
        moment.qpos[arm_at][None], moment.qvel[arm_rate][None], moment.qacc[arm_rate][None], ("left_hand",)
    )
    roll_rate, pitch_rate, heading_rate = lean_rates(lean, moment.qvel[3:6])
    rates = np.array([[roll_rate, pitch_rate]])
    # The body's acceleration is linear in the three angles' accelerations: find these.
    columns = []
    for u in np.vstack((np.zeros(3), np.eye(3))):
        found = body_rates(lean[None], rates, u[None, :2], np.array([heading_rate]), u[2:])
        columns.append(found.acceleration[0])
    angles = np.linalg.solve(np.array(columns[1:]).T - columns[0][:, None], moment.qacc[3:6] - columns[0])
    turn = rotation_heading(heading).T
    outside = OutsideMotion(
        (turn @ moment.qacc[:3])[None, :2],
        np.array([heading_rate]),
        angles[2:],
        (turn @ hand_force)[None, None],
        np.zeros((1, 1, 3)),
    )
    radius = shelver().parameters.ball.radius
    rows = balance_rows(terms, outside, lean[None], rates, angles[None, :2], radius, shelver().ball_apparent_mass)
    at_stake = float(np.abs(rows.torque[0, :2]).max() + body.mass * GRAVITY * radius)
    return rows.residual[0], rows.torque[0], at_stake


@pytest.mark.parametrize("seed", range(4))
def test_simulated_motion_fulfils_the_balance_rows(seed: int) -> None:
    """Leaning, rolling, turning, arms moving: the moment about the contact is gravity's alone, N the drive torque."""
    built, generator = world(), np.random.default_rng(seed)
    for load in LOADS:
        built.set_load(load)
    arm_torque, ball_torque = generator.normal(size=12), np.array([3.0, -2.0, 0.0])
    last = list(moving(built, generator, 60, arm_torque, ball_torque))[-1]
    residual, torque, at_stake = rows_of(built, last, np.zeros(3))
    assert np.abs(residual).max() < 1e-3 * at_stake
    armature = built.model.dof_armature[built.rolling]
    on_body = -(ball_torque - armature * last.qacc[built.rolling])
    lean, _ = lean_and_heading(last.qpos)
    assert torque == pytest.approx(rotation_lean(lean) @ on_body, abs=2e-3 * at_stake)


def test_energy_is_conserved_without_torque() -> None:
    """Without torque and resistance kinetic (rotors included) and potential energy keep their sum, to first order."""
    drifts = []
    for physics_step in (0.001, 0.00025):
        built, generator = world(physics_step=physics_step, loop_rate=500.0), np.random.default_rng(3)
        # The joints' end stops take energy: there are none here.
        built.model.jnt_limited[:] = 0
        energies, kinetic = [], []
        data = mujoco.MjData(built.model)
        for moment in moving(built, generator, round(0.3 / physics_step), np.zeros(12), np.zeros(3)):
            data.qpos[:], data.qvel[:] = moment.qpos, moment.qvel
            mujoco.mj_forward(built.model, data)
            mujoco.mj_energyPos(built.model, data)
            mujoco.mj_energyVel(built.model, data)
            energies.append(float(data.energy.sum()))
            kinetic.append(float(data.energy[1]))
        drifts.append(np.ptp(energies) / np.ptp(kinetic))
    assert drifts[0] < 0.01
    assert drifts[1] < 0.5 * drifts[0]


def test_ball_rolls_without_slip() -> None:
    """The ball's centre moves as r times the ball's rate, to a thousandth of the speed, and stays on the floor."""
    built = world()
    radius = shelver().parameters.ball.radius
    for moment in list(moving(built, np.random.default_rng(5), 200, np.zeros(12), np.array([5.0, 4.0, 0.0])))[20:]:
        axes = np.zeros(9)
        mujoco.mju_quat2Mat(axes, moment.qpos[3:7])
        rate = axes.reshape(3, 3) @ (moment.qvel[3:6] + built.rotation_drive_in_base @ moment.qvel[built.rolling])
        slip = np.hypot(moment.qvel[0] - radius * rate[1], moment.qvel[1] + radius * rate[0])
        assert slip < 1e-3 * max(np.hypot(*moment.qvel[:2]), 0.1)
        assert abs(moment.qpos[2] - radius) < 5e-6


def test_rotor_axes_are_principal() -> None:
    """A reflected inertia that is not diagonal is taken in its principal axes: right-handed, and the same tensor."""
    generator = np.random.default_rng(2)
    root = generator.normal(size=(3, 3))
    axes, values = rotor_axes(root @ root.T)
    assert axes @ np.diag(values) @ axes.T == pytest.approx(root @ root.T)
    assert np.linalg.det(axes) == pytest.approx(1.0)
    assert rotor_axes(np.diag([3.0, 1.0, 2.0]))[0] == pytest.approx(np.eye(3))


def test_urdf_that_mujoco_refuses_is_one_line() -> None:
    """What MuJoCo can't build (here a link that moves and has no mass) becomes one line that names the URDF."""
    text = shelver().urdf_text.replace("</robot>", BODILESS + "</robot>")
    with pytest.raises(ModelError) as caught:
        World.build(attrs.evolve(shelver(), urdf_text=text), simulation(), Truth())
    assert "shelver.urdf" in str(caught.value) and "\n" not in str(caught.value)
