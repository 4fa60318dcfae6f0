"""The capturable region: how far off it may be, and the drive can still bring it back.

For one axis, arms locked, the linear model (:mod:`ballbal_ros.balance.linear_model`) says of lean error φ, ball
velocity v, torque τ and outside moment d

    φ'' = p² φ + b τ + e d,      v' = a φ + k τ + …

The unstable coordinate ξ = φ + φ'/p + (e/p²) d grows by itself, ξ' = p ξ + (b/p) τ. With |τ| ≤ T it comes back if and
only if |ξ| < |b| T / p² (the set of null-controllable states of an unstable first-order system under saturation; Hu
and Lin 2001, *Control Systems with Actuator Saturation*, from memory). What brings it back also rolls the ball: η = v
- (a/p²) φ' changes by c τ, c = k - a b / p², and full torque for a time t brings back |ξ| = |b| T / p² (1 - exp(-p
t)). So with a speed V that the drive can still follow

    |ξ| < |b| T / p² (1 - exp(-p (V ∓ η) / (|c| T))).

T is the least of the torque limit, what the actuators give, each as far as the battery lets it, and what the floor's
friction bears while the ball pushes the body back.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.balance.linear_model import LinearModel
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import Posture

_NEAR = 0.3


@attrs.frozen
class Axis:
    """One axis: ``pole`` p, 1/s; ``by_torque`` b/p², rad/(N m); ``by_moment`` e/p², rad/(N m); ``roll_by_torque`` |c|,
    m/s²/(N m); ``roll_by_rate`` a/p², m/rad; ``forward``: +1 where a positive lean is brought back by a ball that
    rolls the positive way.
    """

    pole: float
    by_torque: float
    by_moment: float
    roll_by_torque: float
    roll_by_rate: float
    forward: float


@attrs.frozen
class CapturableRegion:
    """The region at a posture, for (roll, pitch). ``torque`` T and ``friction_torque``, its bound by the floor, in N
    m; ``speed`` V in m/s.
    """

    axes: tuple[Axis, Axis]
    torque: float
    friction_torque: float
    speed: float
    reserve: float

    @classmethod
    def of(
        cls, model: LinearModel, posture: Posture, description: RobotDescription, torque: float, reserve: float
    ) -> CapturableRegion:
        """The region where the drive gives at most ``torque``, N m, about any level axis; ``reserve`` is the share of
        it that is kept.
        """
        axes = _axis(model, 0, 7), _axis(model, 1, 6)
        grip = description.parameters.floor.friction * (posture.mass + description.parameters.ball.mass) * GRAVITY
        friction = grip / max(_force_by_torque(model, posture, description, i) for i in (0, 1))
        rate_map = description.drive.rate_map
        turning = np.hypot(rate_map[:, 0], rate_map[:, 1])
        speed = float(
            np.min(description.parameters.ball.radius * description.drive.rate_limit / np.maximum(turning, 1e-9))
        )
        return cls(axes, min(torque, friction), friction, speed, reserve)

    def limit(
        self, axis: int, used: float = 0.0, velocity: float = 0.0, lean_rate: float = 0.0, way: float = 1.0
    ) -> float:
        """Greatest |ξ|, rad, about an axis (0 roll, 1 pitch) with a torque ``used`` already (N m).

        ``velocity`` of the ball along that lean, m/s, ``lean_rate``, rad/s, and ``way``, the sign of ξ, count for the
        speed.
        """
        of = self.axes[axis]
        torque = max(self.torque - used, 0.05 * self.torque)
        eta = of.forward * (velocity - of.roll_by_rate * lean_rate) * way
        left = max(self.speed - eta, 0.0)
        share = 1.0 - math.exp(-of.pole * left / (of.roll_by_torque * torque))
        return (1.0 - self.reserve) * of.by_torque * torque * share

    def use(
        self,
        lean: tuple[float, float],
        lean_rate: tuple[float, float],
        moment: tuple[float, float],
        velocity: tuple[float, float],
        used: float,
    ) -> float:
        """How much of the region is used; beyond 1 it does not come back.

        ``lean`` (roll, pitch) off the reference and its rate, rad and rad/s; outside ``moment`` (roll, pitch), N m;
        ball ``velocity`` (x, y), m/s; ``used``: torque that the reference itself needs, N m.
        """
        roll, pitch = self.axes
        xi = lean[0] + lean_rate[0] / roll.pole, lean[1] + lean_rate[1] / pitch.pole
        if math.hypot(*xi) < _NEAR * roll.by_torque * self.torque and used < 0.5 * self.torque:
            # Far within, whatever speed and moment do: the common case, and cheap.
            return math.hypot(*xi) / (roll.by_torque * self.torque)
        x, y = xi[0] + roll.by_moment * moment[0], xi[1] + pitch.by_moment * moment[1]
        on_roll = self.limit(0, used, velocity[1], lean_rate[0], math.copysign(1.0, x))
        on_pitch = self.limit(1, used, velocity[0], lean_rate[1], math.copysign(1.0, y))
        return math.hypot(x / max(on_roll, 1e-6), y / max(on_pitch, 1e-6))


def _axis(model: LinearModel, lean: int, ball_rate: int) -> Axis:
    state, torque, moment = model.state_matrix, model.torque_matrix, model.moment_matrix
    square = float(state[2 + lean, lean])
    b, e = float(torque[2 + lean, lean]), float(moment[2 + lean, lean])
    a, k = float(state[ball_rate, lean]), float(torque[ball_rate, lean])
    c = k - a * b / square
    # Back from a positive lean the torque is against b, and the ball goes the way of -c b.
    return Axis(math.sqrt(square), abs(b) / square, e / square, abs(c), a / square, math.copysign(1.0, -c * b))


def _force_by_torque(model: LinearModel, posture: Posture, description: RobotDescription, axis: int) -> float:
    """Greatest force of the floor, N for each N m, while a torque brings back as much lean as it can, or holds none at
    all.
    """
    ball_rate, sign = ((7, -1.0), (6, 1.0))[axis]
    mass, lever = posture.mass + description.parameters.ball.mass, posture.mass * float(np.linalg.norm(posture.center))
    state, torque = model.state_matrix, model.torque_matrix
    by_lean = mass * float(state[ball_rate, axis]) + sign * lever * float(state[2 + axis, axis])
    by_torque = mass * float(torque[ball_rate, axis]) + sign * lever * float(torque[2 + axis, axis])
    at_edge = by_torque - by_lean * float(torque[2 + axis, axis]) / float(state[2 + axis, axis])
    return max(abs(at_edge), abs(by_torque))
