"""The whole body on Pinocchio: mass centre, inertia, momentum, with loads in the hands."""

from __future__ import annotations

from collections.abc import Iterable

import attrs
import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.balance_rows import GRAVITY, UpperBodyTerms
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load


@attrs.frozen(eq=False)
class Posture:
    """The upper body (all that stands on the ball) at one arm position, arms and loads included, in ``base_link``.

    ``inertia`` [3, 3] is about the mass centre. Making one means that the kinematics have been run.
    """

    mass: float
    center: Array = attrs.field(converter=read_only)
    inertia: Array = attrs.field(converter=read_only)

    def like(self, other: Posture | None) -> bool:
        """Whether it is the same to what no gain would notice: 0.1 mm of mass centre, 0.01 kg m² of inertia, 1 g."""
        if other is None or abs(self.mass - other.mass) > 1e-3:
            return False
        center, inertia = self.center - other.center, self.inertia - other.inertia
        return float(np.abs(center).max()) < 1e-4 and float(np.abs(inertia).max()) < 1e-2

    @property
    def inertia_about_ball(self) -> Array:
        """Inertia [3, 3] about the ball's centre, kg m²."""
        c = self.center
        return np.asarray(self.inertia + self.mass * (c @ c * np.eye(3) - np.outer(c, c)))

    @property
    def equilibrium_lean(self) -> tuple[float, float]:
        """(roll, pitch) in rad that puts the mass centre straight above the ball: Ry(pitch) Rx(roll) c is vertical."""
        x, y, z = self.center.tolist()
        return float(np.arctan2(y, z)), float(np.arctan2(-x, np.hypot(y, z)))


class WholeBody:
    """The mass model of one robot with what its hands hold. Not thread-safe: it owns Pinocchio's working data.

    Arm positions [n], rates [n] and accelerations [n] are in the description's joint order; rad or m, s.
    """

    def __init__(self, description: RobotDescription, loads: Iterable[Load] = ()) -> None:
        self.description = description
        self._model = description.model.copy()
        self._data = self._model.createData()
        self._bare = {hand: pin.Inertia(self._model.inertias[self._hand_joint(hand)]) for hand in self.hands}
        self._loads: dict[str, Load] = {}
        self._q = pin.neutral(self._model)
        self._v = np.zeros(self._model.nv)
        self._a = np.zeros(self._model.nv)
        self._arm = self._q[7:]
        self._mass = pin.computeTotalMass(self._model)
        self._com = self._data.com[0]
        self._com_inertia = self._data.Ig
        for load in loads:
            self.set_load(load)

    @property
    def hands(self) -> tuple[str, ...]:
        """The links that can hold a load."""
        return tuple(self.description.parameters.hands.links)

    @property
    def loads(self) -> dict[str, Load]:
        """What each hand holds; a hand that holds nothing is not in it."""
        return dict(self._loads)

    @property
    def mass(self) -> float:
        """Mass of all that stands on the ball, kg."""
        return self._mass

    def _hand_frame(self, hand: str) -> int:
        return int(self._model.getFrameId(hand))

    def _hand_joint(self, hand: str) -> int:
        frame = self._model.frames[self._hand_frame(hand)]
        return int(frame.parentJoint if hasattr(frame, "parentJoint") else frame.parent)

    def set_load(self, load: Load, where: str = "load") -> None:
        """Replace what one hand holds; mass 0 takes it away.

        Raises :class:`ModelError` for an unknown hand or impossible load.
        """
        if load.hand not in self._bare:
            raise ModelError(where, f"unknown hand {load.hand}", nearest(load.hand, self._bare))
        load.check(where, self.description.parameters.hands.load_limit)
        if load.mass > 0.0:
            self._loads[load.hand] = load
        else:
            self._loads.pop(load.hand, None)
        joint = self._hand_joint(load.hand)
        inertia = next(pin.Inertia(self._bare[h]) for h in self.hands if self._hand_joint(h) == joint)
        for held in self._loads.values():
            if self._hand_joint(held.hand) == joint:
                placement = self._model.frames[self._hand_frame(held.hand)].placement
                inertia = inertia + placement.act(pin.Inertia(held.mass, held.center.copy(), held.inertia.copy()))
        self._model.inertias[joint] = inertia
        self._mass = pin.computeTotalMass(self._model)

    def posture(self, arm_position: Array) -> Posture:
        """Mass, mass centre and inertia at an arm position [n]; one pass through the tree."""
        self._arm[:] = arm_position
        pin.ccrba(self._model, self._data, self._q, self._v)
        return Posture(self._mass, self._com.copy(), self._com_inertia.inertia)

    def center_of_mass(self, arm_position: Array) -> Array:
        """The mass centre [3] in ``base_link``, m: the least work, for the control tick."""
        self._arm[:] = arm_position
        return np.asarray(pin.centerOfMass(self._model, self._data, self._q, False))

    def center_velocity(self, arm_position: Array, arm_rate: Array) -> Array:
        """Velocity of the mass centre [3] in ``base_link`` as the arms move, m/s."""
        return np.asarray(self.center_jacobian(arm_position) @ arm_rate)

    def center_jacobian(self, arm_position: Array) -> Array:
        """Jacobian of the mass centre [3, n] in ``base_link`` by the arm joints."""
        self._arm[:] = arm_position
        return np.array(pin.jacobianCenterOfMass(self._model, self._data, self._q)[:, 6:])

    def momentum(self, arm_position: Array, arm_rate: Array) -> tuple[Array, Array]:
        """Linear [3] (N s) and angular momentum [3] (N m s, about the ball's centre) of the moving arms, body at
        rest, ``base_link``.
        """
        self._arm[:] = arm_position
        rate = np.concatenate((np.zeros(6), arm_rate))
        matrix = np.array(pin.crba(self._model, self._data, self._q)[:6])
        total = matrix @ rate
        return total[:3], total[3:]

    def holding_effort(self, arm_position: Array) -> Array:
        """Torques [n] that hold the arms against their weight, the body upright; N m (N for a slide)."""
        self._arm[:] = arm_position
        return np.array(pin.computeGeneralizedGravity(self._model, self._data, self._q)[6:])

    def hand_position(self, hand: str, arm_position: Array) -> Array:
        """Origin of a hand link [3] in ``base_link``, m."""
        self._arm[:] = arm_position
        pin.forwardKinematics(self._model, self._data, self._q)
        return np.array(pin.updateFramePlacement(self._model, self._data, self._hand_frame(hand)).translation)

    def hand_placement(self, hand: str, arm_position: Array) -> tuple[Array, Array]:
        """Origin [3], m, and turn [3, 3] of a hand link in ``base_link``."""
        self._arm[:] = arm_position
        pin.forwardKinematics(self._model, self._data, self._q)
        placement = pin.updateFramePlacement(self._model, self._data, self._hand_frame(hand))
        return np.array(placement.translation), np.array(placement.rotation)

    def terms(self, position: Array, rate: Array, acceleration: Array, hands: Iterable[str] = ()) -> UpperBodyTerms:
        """The upper body along an arm motion [N, n]: one pass of Pinocchio a sample, all that the balance rows need.

        ``hands`` adds these hand links' origins, for outside forces.
        """
        names = tuple(hands)
        terms = UpperBodyTerms.empty(len(position), self.mass, names)
        model, data, q, v, a = self._model, self._data, self._q, self._v.copy(), self._a.copy()
        frames = [self._hand_frame(name) for name in names]
        arm_q, arm_v, arm_a = q[7:], v[6:], a[6:]
        weight = self.mass * GRAVITY
        first_of_equals = _first_of_equals(position, rate, acceleration)
        for k in np.unique(first_of_equals).tolist():
            arm_q[:], arm_v[:], arm_a[:] = position[k], rate[k], acceleration[k]
            matrix = pin.crba(model, data, q)
            upper = matrix[:6, 6:] @ arm_v
            terms.moment[k] = matrix[1, 5], matrix[2, 3], matrix[0, 4]
            terms.inertia[k] = matrix[3:6, 3:6]
            terms.moment_rate[k], terms.angular[k] = upper[:3], upper[3:]
            coriolis = pin.computeCoriolisMatrix(model, data, q, v)[3:6, 3:6]
            terms.inertia_rate[k] = coriolis + coriolis.T
            force = pin.rnea(model, data, q, v, a)
            terms.moment_acceleration[k], terms.angular_rate[k] = force[:3], force[3:6]
            for j, frame in enumerate(frames):
                terms.hand_position[k, j] = pin.updateFramePlacement(model, data, frame).translation
        terms = terms.at(first_of_equals)
        upper_triangle = np.triu(terms.inertia)
        terms.inertia[:] = upper_triangle + np.triu(terms.inertia, 1).transpose(0, 2, 1)
        terms.moment_acceleration[:, 2] -= weight
        terms.angular_rate[:, 0] -= terms.moment[:, 1] * GRAVITY
        terms.angular_rate[:, 1] += terms.moment[:, 0] * GRAVITY
        return terms


def _first_of_equals(*motion: Array) -> NDArray[np.int64]:
    """For each sample [N] of a motion, the first of the run of equal ones that it is in: arms rest for long times."""
    moves = np.ones(len(motion[0]), bool)
    moves[1:] = np.any([np.any(np.diff(each, axis=0) != 0.0, axis=1) for each in motion], axis=0)
    return np.asarray(np.maximum.accumulate(np.where(moves, np.arange(len(moves)), 0)))
