"""The balance rows against Pinocchio's full recursion and its analytic derivatives, and against statics."""

import attrs
import numpy as np
import pinocchio as pin
import pytest

from ballbal_ros.robot.attitude import body_rates, rotation_heading, rotation_lean
from ballbal_ros.robot.balance_rows import GRAVITY, BalanceRows, OutsideMotion, UpperBodyTerms, balance_rows
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import shelver

HANDS = ("left_hand", "right_hand")


@attrs.frozen
class Moment:
    """One moment of a wild motion: everything moves and both hands are pulled at."""

    arm: np.ndarray
    lean: np.ndarray
    outside: OutsideMotion
    heading: float
    ball_velocity: np.ndarray

    @classmethod
    def random(cls, seed: int) -> "Moment":
        rng, n = np.random.default_rng(seed), shelver().joint_count
        outside = OutsideMotion(
            rng.normal(size=(1, 2)),
            rng.normal(size=1),
            rng.normal(size=1),
            20.0 * rng.normal(size=(1, 2, 3)),
            3.0 * rng.normal(size=(1, 2, 3)),
        )
        lean = np.stack((rng.uniform(-0.5, 0.5, 2), rng.normal(size=2), rng.normal(size=2)))
        return cls(rng.normal(size=(3, n)) * 0.8, lean, outside, rng.uniform(-3, 3), rng.normal(size=2))

    def terms(self) -> UpperBodyTerms:
        body = WholeBody(shelver(), [Load("left_hand", 1.5, [0.0, 0.02, -0.05])])
        return body.terms(*(row[None] for row in self.arm), HANDS)

    def rows(self) -> BalanceRows:
        return rows(self.terms(), self.outside, self.lean[None])

    def pinocchio(self) -> tuple[pin.Model, pin.Data, np.ndarray, np.ndarray, np.ndarray]:
        """Model, configuration, velocity and acceleration of the free-flyer, in `odom` with the heading."""
        model = shelver().model.copy()
        frame = model.frames[model.getFrameId("left_hand")]
        joint = frame.parentJoint if hasattr(frame, "parentJoint") else frame.parent
        held = pin.Inertia(1.5, np.array([0.0, 0.02, -0.05]), np.zeros((3, 3)))
        model.inertias[joint] = model.inertias[joint] + frame.placement.act(held)
        turn = rotation_heading(self.heading)
        rotation = turn @ rotation_lean(self.lean[0])
        rates = body_rates(*self.lean, self.outside.heading_rate[0], self.outside.heading_acceleration[0])
        velocity = rotation.T @ turn @ np.append(self.ball_velocity, 0.0)
        # Pinocchio's is the spatial acceleration of the moving frame.
        acceleration = rotation.T @ turn @ np.append(self.outside.ball_acceleration[0], 0.0) - np.cross(
            rates.rate, velocity
        )
        place = np.concatenate(([0.4, -1.3, 0.115], pin.Quaternion(rotation).coeffs()))
        return (
            model,
            model.createData(),
            np.concatenate((place, self.arm[0])),
            np.concatenate((velocity, rates.rate, self.arm[1])),
            np.concatenate((acceleration, rates.acceleration, self.arm[2])),
        )


def rows(terms: UpperBodyTerms, outside: OutsideMotion, lean: np.ndarray) -> BalanceRows:
    """The rows of leans [N, 3, 2] (lean, rate, acceleration)."""
    radius = shelver().parameters.ball.radius
    return balance_rows(terms, outside, lean[:, 0], lean[:, 1], lean[:, 2], radius, shelver().ball_apparent_mass)


@pytest.mark.parametrize("seed", range(6))
def test_force_and_torque_are_pinocchios(seed: int):
    """Force and torque on the body are Pinocchio's local rows, rotated, less the hands' wrenches, at any heading.

    (physics.md, *Equations of motion*: Euler-angle rows are something else.)
    """
    moment = Moment.random(seed)
    model, data, q, v, a = moment.pinocchio()
    local = pin.rnea(model, data, q, v, a)[:6]
    rotation = rotation_lean(moment.lean[0])
    force, torque = rotation @ local[:3], rotation @ local[3:]
    pin.framesForwardKinematics(model, data, q)
    center = data.oMi[1].translation
    for index, hand in enumerate(HANDS):
        in_odom = data.oMf[model.getFrameId(hand)].translation - center
        at = rotation_heading(moment.heading).T @ in_odom
        pull = moment.outside.hand_force[0, index]
        force = force - pull
        torque = torque - np.cross(at, pull) - moment.outside.hand_moment[0, index]
    ours = moment.rows()
    np.testing.assert_allclose(ours.force[0], force, atol=1e-10)
    np.testing.assert_allclose(ours.torque[0], torque, atol=1e-10)
    ball, r = shelver().parameters.ball, shelver().parameters.ball.radius
    row = force[:2] + (ball.mass + ball.inertia / r**2) * moment.outside.ball_acceleration[0]
    np.testing.assert_allclose(ours.residual[0], [torque[0] - r * row[1], torque[1] + r * row[0]], atol=1e-10)


@pytest.mark.parametrize("seed", range(6))
def test_derivatives_are_pinocchios_chained_to_roll_and_pitch(seed: int):
    """The derivatives by lean, rate and acceleration are computeRNEADerivatives', chained by hand."""
    moment = attrs.evolve(Moment.random(seed), ball_velocity=np.zeros(2))
    none = np.zeros((1, 2, 3))
    moment = attrs.evolve(moment, outside=attrs.evolve(moment.outside, hand_force=none, hand_moment=none))
    model, data, q, v, a = moment.pinocchio()
    local = pin.rnea(model, data, q, v, a)[:6].copy()
    by_q, by_v, by_a = (np.array(d)[:6] for d in pin.computeRNEADerivatives(model, data, q, v, a)[:3])
    rates = body_rates(*moment.lean, moment.outside.heading_rate[0], moment.outside.heading_acceleration[0])
    # A small change of roll or pitch turns the body about these axes of base_link: those of the roll and pitch rates.
    axes = rates.rate_by_lean[:, 2:4]
    change_q, change_v, change_a = (np.zeros((model.nv, 6)) for _ in range(3))
    change_q[3:6, :2] = axes
    change_v[3:6], change_a[3:6] = rates.rate_by_lean, rates.acceleration_by_lean
    # The ball's acceleration stays in odom, so it turns against the body in base_link.
    change_a[:3, :2] = -np.cross(axes.T, a[:3]).T
    changed = by_q @ change_q + by_v @ change_v + by_a @ change_a
    rotation, expected = rotation_lean(moment.lean[0]), np.zeros((6, 6))
    for column in range(6):
        axis = axes[:, column] if column < 2 else np.zeros(3)
        expected[:3, column] = rotation @ (np.cross(axis, local[:3]) + changed[:3, column])
        expected[3:, column] = rotation @ (np.cross(axis, local[3:]) + changed[3:, column])
    np.testing.assert_allclose(moment.rows().wrench_by_lean[0], expected, atol=1e-9)


@pytest.mark.parametrize("seed", range(4))
def test_all_derivatives_are_finite_differences(seed: int):
    """With hands pulled too, every derivative of residual, force and torque agrees with finite differences."""
    moment = Moment.random(seed)
    terms, now, h = moment.terms(), moment.rows(), 1e-6
    for column in range(6):
        step = np.zeros(6)
        step[column] = h
        after, before = (rows(terms, moment.outside, (moment.lean + s * step.reshape(3, 2))[None]) for s in (1.0, -1.0))
        np.testing.assert_allclose(
            now.by_lean[..., column], (after.residual - before.residual) / (2 * h), atol=5e-7, rtol=1e-7
        )
        wrench = [np.concatenate((each.force, each.torque), axis=1) for each in (after, before)]
        np.testing.assert_allclose(
            now.wrench_by_lean[..., column], (wrench[0] - wrench[1]) / (2 * h), atol=5e-7, rtol=1e-7
        )
    for axis in range(2):
        step = np.eye(2)[axis]
        moved = attrs.evolve(moment.outside, ball_acceleration=moment.outside.ball_acceleration + step)
        difference = rows(terms, moved, moment.lean[None]).residual - now.residual
        np.testing.assert_allclose(now.by_ball_acceleration[..., axis], difference, atol=1e-10)


def test_at_rest_the_rows_are_the_moment_of_gravity_about_the_contact():
    """With nothing moving, the residual is minus the moment of gravity and hands about the contact (statics)."""
    moment = Moment.random(3)
    body, none = WholeBody(shelver()), np.zeros((1, shelver().joint_count))
    terms = body.terms(moment.arm[0][None], none, none, HANDS)
    rest = OutsideMotion.at_rest(1, 2)
    outside = attrs.evolve(rest, hand_force=moment.outside.hand_force, hand_moment=moment.outside.hand_moment)
    lean = np.stack((moment.lean[0], np.zeros(2), np.zeros(2)))
    rotation, contact = rotation_lean(lean[0]), np.array([0.0, 0.0, -shelver().parameters.ball.radius])
    center = rotation @ body.center_of_mass(moment.arm[0])
    about = np.cross(center - contact, [0.0, 0.0, -body.mass * GRAVITY])
    for index, hand in enumerate(HANDS):
        at = rotation @ body.hand_position(hand, moment.arm[0]) - contact
        about = about + np.cross(at, outside.hand_force[0, index]) + outside.hand_moment[0, index]
    np.testing.assert_allclose(rows(terms, outside, lean[None]).residual[0], -about[:2], atol=1e-10)


def test_a_blend_is_between_its_two_ends_in_every_term():
    """Blending two loads by shares gives the same shares of the rows: all terms are linear in the masses."""
    arm = np.random.default_rng(8).normal(size=(3, 5, shelver().joint_count)) * 0.6
    light = WholeBody(shelver()).terms(*arm, HANDS)
    heavy = WholeBody(shelver(), [Load("right_hand", 2.0, [0.0, 0.0, -0.1])]).terms(*arm, HANDS)
    half = WholeBody(shelver(), [Load("right_hand", 1.0, [0.0, 0.0, -0.1])]).terms(*arm, HANDS)
    share = np.linspace(0.0, 1.0, 5)
    moment = Moment.random(9)
    outside = OutsideMotion(
        *(
            None if (value := getattr(moment.outside, f.name)) is None else np.repeat(value, 5, axis=0)
            for f in attrs.fields(OutsideMotion)
        )
    )
    lean = np.repeat(moment.lean[None], 5, axis=0)
    mixed, none, whole = (rows(terms, outside, lean) for terms in (light.blend(heavy, share), light, heavy))
    for name in ("residual", "force", "torque"):
        first, last = getattr(none, name), getattr(whole, name)
        expected = first + share[:, None] * (last - first)
        np.testing.assert_allclose(getattr(mixed, name), expected, atol=1e-10)
    np.testing.assert_allclose(rows(half, outside, lean).torque, 0.5 * (none.torque + whole.torque), atol=1e-10)
