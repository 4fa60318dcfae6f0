"""The linear model is the derivative of the nonlinear robot, and of textbook pendulums where it is simple enough."""

from __future__ import annotations

import attrs
import numpy as np
import pytest

from ballbal_ros.balance.linear_model import ball_held_rate, linear_model, open_loop_pole
from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import Posture, WholeBody
from helpers.balancing import accelerations
from helpers.robots import posture, reach, shelver

STEP = 1e-4
MIRROR = np.diag([-1.0, 1.0, -1.0, 1.0, 1.0, -1.0, 1.0, -1.0])


def some_postures() -> list[Posture]:
    """The demo robot at both ends of `reach`, and one-sided with a load in one hand."""
    body = reach().body()
    lopsided = WholeBody(shelver(), [Load("left_hand", 2.5, [0.0, 0.02, -0.05])])
    aside = {"left_shoulder_pitch": -1.0, "left_shoulder_roll": 0.8, "left_elbow_pitch": -0.6}
    return [body.posture(reach().first), body.posture(reach().last), lopsided.posture(posture(aside))]


def derivatives(held: Posture, description: RobotDescription) -> tuple[Array, Array, Array]:
    """A [8, 8], B [8, 2], E [8, 2] by central differences of the nonlinear robot about its equilibrium lean."""

    def rate(z: Array) -> Array:
        state = z[:8].copy()
        state[:2] += held.equilibrium_lean
        lean, ball = accelerations(held, description, state, z[8:10], z[10:])
        return np.concatenate((state[2:4], lean, state[6:8], ball))

    columns = [(rate(STEP * unit) - rate(-STEP * unit)) / (2.0 * STEP) for unit in np.eye(12)]
    full = np.stack(columns, axis=1)
    return full[:, :8], full[:, 8:10], full[:, 10:]


def simple_robot(mass: float, height: float, inertia: float, **ball: float) -> tuple[Posture, RobotDescription]:
    """A slender symmetric body on a ball, with the demo robot's drive but no rotors."""
    drive = attrs.evolve(shelver().drive, reflected_inertia=np.zeros((3, 3)))
    changed = attrs.evolve(shelver().parameters, ball=attrs.evolve(shelver().parameters.ball, **ball))
    description = attrs.evolve(shelver(), drive=drive, parameters=changed)
    return Posture(mass, np.array([0.0, 0.0, height]), np.diag([inertia, inertia, 0.1])), description


@pytest.mark.parametrize("held", some_postures(), ids=["hanging", "reaching", "lopsided"])
def test_model_is_the_derivative_of_the_nonlinear_robot(held: Posture) -> None:
    """A, B and E agree with finite differences of the full equations, rotors included, to 1e-5 of the largest entry."""
    model = linear_model(held, shelver())
    found = model.state_matrix, model.torque_matrix, model.moment_matrix
    for analytic, numeric in zip(found, derivatives(held, shelver()), strict=True):
        np.testing.assert_allclose(analytic, numeric, atol=1e-5 * np.abs(numeric).max())


@pytest.mark.parametrize("held", some_postures(), ids=["hanging", "reaching", "lopsided"])
def test_equilibrium_is_at_rest(held: Posture) -> None:
    """At the equilibrium lean, without torque, nothing accelerates."""
    state = np.concatenate((linear_model(held, shelver()).equilibrium_lean, np.zeros(6)))
    for acceleration in accelerations(held, shelver(), state, np.zeros(2), np.zeros(2)):
        np.testing.assert_allclose(acceleration, 0.0, atol=1e-9)


def test_ball_held_rate_is_the_formula() -> None:
    """λ² = m g c_z / (I_cm + m c_z (c_z + r)) for a symmetric body (the project's physics.md), on both axes."""
    held, description = simple_robot(60.0, 0.61, 9.0)
    expected = np.sqrt(60.0 * GRAVITY * 0.61 / (9.0 + 60.0 * 0.61 * (0.61 + 0.115)))
    np.testing.assert_allclose(ball_held_rate(held, description), expected, rtol=1e-12)


def test_open_loop_pole_is_that_of_the_wheeled_pendulum() -> None:
    """With the ball free, p² = m g l M / (M (I + m l²) - m² l²), as for a pendulum on a cart of m_b + I_b/r².

    The cart-pendulum's characteristic equation stands in textbooks of control (Åström and Murray, *Feedback Systems*,
    balance systems; written down from memory). The drive's torque acts on the body too; here there is none.
    """
    mass, height, inertia = 60.0, 0.61, 9.0
    held, description = simple_robot(mass, height, inertia)
    total = mass + description.ball_apparent_mass
    about_ball = inertia + mass * height**2
    expected = np.sqrt(mass * GRAVITY * height * total / (total * about_ball - (mass * height) ** 2))
    np.testing.assert_allclose(open_loop_pole(held, description), expected, rtol=1e-12)
    poles = np.linalg.eigvals(linear_model(held, description).state_matrix)
    np.testing.assert_allclose(np.sort(poles.real)[-2:], expected, rtol=1e-6)


def test_rates_of_the_demo_robot() -> None:
    """The demo robot's rates lie near physics.md's first try: 3.3 rad/s with the ball held, 6.6 rad/s or less free."""
    held = reach().body().posture(reach().first)
    assert ball_held_rate(held, shelver()) == pytest.approx((3.2, 3.2), abs=0.2)
    assert 5.0 < min(open_loop_pole(held, shelver())) < max(open_loop_pole(held, shelver())) < 6.6


def test_rotors_slow_the_fall() -> None:
    """Inertia of the rotors, which turn as the body falls off the ball, makes the open-loop pole slower, λ not."""
    held = some_postures()[0]
    bare = attrs.evolve(shelver(), drive=attrs.evolve(shelver().drive, reflected_inertia=np.zeros((3, 3))))
    assert np.all(np.array(open_loop_pole(held, shelver())) < open_loop_pole(held, bare))
    np.testing.assert_allclose(ball_held_rate(held, shelver()), ball_held_rate(held, bare), rtol=1e-12)


def test_mirrored_posture_has_the_mirrored_model() -> None:
    """Seen in a mirror, roll and y change their signs, pitch and x stay."""
    held = some_postures()[2]
    flip = np.diag([1.0, -1.0, 1.0])
    model = linear_model(held, shelver())
    other = linear_model(Posture(held.mass, flip @ held.center, flip @ held.inertia @ flip), shelver())
    turn = np.diag([-1.0, 1.0])
    np.testing.assert_allclose(other.state_matrix, MIRROR @ model.state_matrix @ MIRROR, atol=1e-9)
    np.testing.assert_allclose(other.torque_matrix, MIRROR @ model.torque_matrix @ turn, atol=1e-9)
    np.testing.assert_allclose(other.moment_matrix, MIRROR @ model.moment_matrix @ turn, atol=1e-9)
    np.testing.assert_allclose(other.equilibrium_lean, turn @ model.equilibrium_lean, atol=1e-12)


def test_moment_and_lean_are_the_same_to_the_ball() -> None:
    """Gravity makes of a lean off balance a moment m g c: A by lean = m g c E (what the trim rests on)."""
    for held in some_postures():
        model = linear_model(held, shelver())
        tilted = np.cos(model.equilibrium_lean[1])
        stiffness = held.mass * GRAVITY * np.linalg.norm(held.center) * np.diag([tilted, 1.0])
        expected = model.moment_matrix @ stiffness
        np.testing.assert_allclose(model.state_matrix[:, :2], expected, rtol=1e-9, atol=1e-9)


def test_heading_inertia_is_about_the_vertical() -> None:
    """Upright it is the body's I_zz and the rotors', as the floor holds the ball's spin."""
    held, description = simple_robot(60.0, 0.61, 9.0)
    assert linear_model(held, description).heading_inertia == pytest.approx(0.1)
    rotors = shelver().drive.reflected_inertia[2, 2]
    assert linear_model(held, shelver()).heading_inertia == pytest.approx(0.1 + rotors)


def test_hanging_body_is_refused() -> None:
    """A mass centre below the ball's centre is no pendulum to balance: one line says so."""
    held, description = simple_robot(60.0, -0.1, 9.0)
    with pytest.raises(ModelError, match="above the ball's centre"):
        linear_model(held, description)
