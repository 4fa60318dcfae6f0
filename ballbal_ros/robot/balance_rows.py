"""The two balance rows (physics.md): the moment about the contact point comes from gravity and outside forces alone.

The arms' motion is given, so all that depends on it is computed once, in ``base_link``: mass moment μ = m c, inertia
I about the ball's centre, momentum L of the moving arms, and their rates. With the body's rate ω and acceleration α,
the ball's acceleration a, and R from ``base_link`` to ``base_footprint``:

    f = μ'' + 2 ω×μ' + α×μ + ω×(ω×μ)                  n = I α + I' ω + L' + ω×(I ω + L)
    F = m (a + g z) + R f - Σ f_h                      N = R n + (R μ)×(a + g z) - Σ ((R p_h)×f_h + m_h)

F and N are what the ball must give to the body, as force and as moment about its centre; N is the drive torque τ. The
rows are

    roll:  N_x - r (F_y + M_b a_y) = 0                 pitch:  N_y + r (F_x + M_b a_x) = 0

with M_b = m_b + I_b / r². This is the rigid-body dynamics of the tree, regrouped: it agrees with Pinocchio's full
recursion and its derivatives to rounding (tested), and a whole motion is one array operation.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import attrs
import numpy as np
from numpy.typing import NDArray

from ballbal_ros.robot.arrays import Array, apply, cross, skew
from ballbal_ros.robot.attitude import body_rates, rotation_lean

GRAVITY = 9.80665
_E_X = np.array([1.0, 0.0, 0.0])
_E_Y = np.array([0.0, 1.0, 0.0])


@attrs.frozen(eq=False)
class UpperBodyTerms:
    """What the arms' motion alone decides, at N samples, in ``base_link`` and about the ball's centre.

    ``mass`` [N]; ``moment`` = m c and its first and second rate [N, 3]; ``inertia`` and its rate [N, 3, 3];
    ``angular`` momentum of the arms' motion and its rate [N, 3]; ``hand_position`` [N, hands, 3] for the named hands.
    """

    mass: Array
    hands: tuple[str, ...]
    moment: Array
    moment_rate: Array
    moment_acceleration: Array
    inertia: Array
    inertia_rate: Array
    angular: Array
    angular_rate: Array
    hand_position: Array

    @classmethod
    def empty(cls, samples: int, mass: float, hands: Sequence[str] = ()) -> UpperBodyTerms:
        """Arrays of the right shapes, to be filled."""
        vectors = [np.zeros((samples, 3)) for _ in range(5)]
        matrices = [np.zeros((samples, 3, 3)) for _ in range(2)]
        return cls(
            np.full(samples, mass),
            tuple(hands),
            vectors[0],
            vectors[1],
            vectors[2],
            matrices[0],
            matrices[1],
            vectors[3],
            vectors[4],
            np.zeros((samples, len(hands), 3)),
        )

    def __len__(self) -> int:
        return len(self.moment)

    def at(self, samples: NDArray[np.int64]) -> UpperBodyTerms:
        """The terms at these samples [M] of them."""
        fields = [f.name for f in attrs.fields(UpperBodyTerms) if f.name != "hands"]
        chosen: dict[str, Any] = {name: getattr(self, name)[samples] for name in fields}
        return attrs.evolve(self, **chosen)

    def blend(self, other: UpperBodyTerms, share: Array) -> UpperBodyTerms:
        """``(1 - share)`` of these terms and ``share`` [N] of the other ones: all of them are linear in the masses."""

        def mix(mine: Array, theirs: Array) -> Array:
            """Between the values of both, by their shares."""
            weight = share.reshape(-1, *([1] * (mine.ndim - 1)))
            return np.asarray(mine + weight * (theirs - mine))

        fields = [f.name for f in attrs.fields(UpperBodyTerms) if f.name not in ("hands", "hand_position")]
        mixed: dict[str, Any] = {name: mix(getattr(self, name), getattr(other, name)) for name in fields}
        return attrs.evolve(self, **mixed)

    def static_lean(self) -> Array:
        """Equilibrium lean [N, 2] with nothing moving and no outside force: the mass centre straight above the ball."""
        x, y, z = self.moment[:, 0], self.moment[:, 1], self.moment[:, 2]
        return np.stack((np.arctan2(y, z), np.arctan2(-x, np.hypot(y, z))), axis=-1)


@attrs.frozen(eq=False)
class OutsideMotion:
    """What is given besides the arms, at N samples, in ``base_footprint`` axes.

    ``ball_acceleration`` [N, 2]; heading rate and acceleration [N]; ``hand_force`` and ``hand_moment`` [N, hands, 3],
    which the world exerts on the hands of the terms. ``couple`` [N, 2]: what else turns the body about x and y, N m.
    """

    ball_acceleration: Array
    heading_rate: Array
    heading_acceleration: Array
    hand_force: Array
    hand_moment: Array
    couple: Array | None = None

    @classmethod
    def at_rest(cls, samples: int, hands: int = 0) -> OutsideMotion:
        """Ball and heading at rest, nobody pulling."""
        return cls(
            np.zeros((samples, 2)),
            np.zeros(samples),
            np.zeros(samples),
            np.zeros((samples, hands, 3)),
            np.zeros((samples, hands, 3)),
        )


@attrs.frozen(eq=False)
class BalanceRows:
    """The rows and the wrench behind them, at N samples, in ``base_footprint`` axes.

    ``residual`` [N, 2] as (roll, pitch), N m; ``by_lean`` [N, 2, 6], columns as in
    :class:`~ballbal_ros.robot.attitude.BodyRates`; ``by_ball_acceleration`` [N, 2, 2]; ``force`` [N, 3] and
    ``torque`` [N, 3] on the body at the ball's centre (the torque is the drive torque); ``wrench_by_lean`` [N, 6, 6]
    their derivatives.
    """

    residual: Array
    by_lean: Array
    by_ball_acceleration: Array
    force: Array
    torque: Array
    wrench_by_lean: Array


def balance_rows(
    terms: UpperBodyTerms,
    outside: OutsideMotion,
    lean: Array,
    lean_rate: Array,
    lean_acceleration: Array,
    ball_radius: float,
    ball_apparent_mass: float,
) -> BalanceRows:
    """The balance rows of a motion with leans [N, 2], their rates and accelerations; see the module's equations."""
    rotation = rotation_lean(lean)
    rates = body_rates(lean, lean_rate, lean_acceleration, outside.heading_rate, outside.heading_acceleration)
    w, alpha, mu = rates.rate, rates.acceleration, terms.moment
    w_cross_mu = cross(w, mu)
    spin = apply(terms.inertia, w) + terms.angular
    f = terms.moment_acceleration + 2.0 * cross(w, terms.moment_rate) + cross(alpha, mu) + cross(w, w_cross_mu)
    n = apply(terms.inertia, alpha) + apply(terms.inertia_rate, w) + terms.angular_rate + cross(w, spin)
    skew_w = skew(w)
    f_by = (-2.0 * skew(terms.moment_rate) - skew(w_cross_mu) - skew_w @ skew(mu)) @ rates.rate_by_lean
    f_by -= skew(mu) @ rates.acceleration_by_lean
    n_by = (terms.inertia_rate - skew(spin) + skew_w @ terms.inertia) @ rates.rate_by_lean
    n_by += terms.inertia @ rates.acceleration_by_lean

    lifted = np.concatenate((outside.ball_acceleration, np.full((len(lean), 1), GRAVITY)), axis=1)
    mu_f, f_f, n_f = apply(rotation, mu), apply(rotation, f), apply(rotation, n)
    force = terms.mass[:, None] * lifted + f_f
    torque = n_f + cross(mu_f, lifted)
    force_by, torque_by = rotation @ f_by, rotation @ n_by
    for column, turned in enumerate(_turned(rotation, (f, n, mu), (f_f, n_f, mu_f))):
        force_by[:, :, column] += turned[0]
        torque_by[:, :, column] += turned[1] + cross(turned[2], lifted)
    if outside.couple is not None:
        torque[:, :2] -= outside.couple
    for hand in range(outside.hand_force.shape[1]):
        pull, at = outside.hand_force[:, hand], terms.hand_position[:, hand]
        at_f = apply(rotation, at)
        force -= pull
        torque -= cross(at_f, pull) + outside.hand_moment[:, hand]
        for column, turned in enumerate(_turned(rotation, (at,), (at_f,))):
            torque_by[:, :, column] -= cross(turned[0], pull)
    return _rows(terms, outside, force, torque, force_by, torque_by, mu_f, ball_radius, ball_apparent_mass)


def _turned(
    rotation: Array, in_base: tuple[Array, ...], in_footprint: tuple[Array, ...]
) -> tuple[tuple[Array, ...], tuple[Array, ...]]:
    """Derivatives of R v by roll, R (e_x × v), and by pitch, e_y × (R v)."""
    by_roll = tuple(apply(rotation, cross(_E_X, v)) for v in in_base)
    by_pitch = tuple(cross(_E_Y, v) for v in in_footprint)
    return by_roll, by_pitch


def _rows(
    terms: UpperBodyTerms,
    outside: OutsideMotion,
    force: Array,
    torque: Array,
    force_by: Array,
    torque_by: Array,
    mu_f: Array,
    r: float,
    ball_apparent_mass: float,
) -> BalanceRows:
    ball = ball_apparent_mass * outside.ball_acceleration
    residual = np.stack(
        (torque[:, 0] - r * (force[:, 1] + ball[:, 1]), torque[:, 1] + r * (force[:, 0] + ball[:, 0])), axis=-1
    )
    by_lean = np.stack((torque_by[:, 0] - r * force_by[:, 1], torque_by[:, 1] + r * force_by[:, 0]), axis=1)
    by_ball = np.zeros((len(force), 2, 2))
    lever = mu_f[:, 2] + r * (terms.mass + ball_apparent_mass)
    by_ball[:, 0, 1], by_ball[:, 1, 0] = -lever, lever
    return BalanceRows(residual, by_lean, by_ball, force, torque, np.concatenate((force_by, torque_by), axis=1))
