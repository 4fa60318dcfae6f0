"""What is unknown about the links: masses, mass centres and shapes, such that a body has them whatever they are.

Each link has ten unknowns x, all 0 where the URDF is right and about 1 where it is wrong by one standard deviation:

    mass = m0 exp(s_m x_0)     centre = c0 + s_c (x_1, x_2, x_3)     S = L T Tᵀ Lᵀ,  L Lᵀ = S0

with S = Σ/m the mass distribution's covariance (m²), from which the inertia about the centre is m (tr(S) 1 - S), and T
lower triangular, its diagonal exp(s_s x_4..6), the rest s_s x_7..9. Mass and S are positive (definite) for all x: the
pseudo-inertia is that of a possible body (the parametrisation of Rucker and Wensing 2022, IEEE RA-L 7(2) 2756, at the
mass centre; written down from memory).
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree

import attrs
import numpy as np
import pinocchio as pin

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_rpy
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.mass_model import LinkMass, inertia_matrix
from ballbal_ros.robot.parameters import SpreadParameters

PER_LINK = 10
_SMALLEST = 1e-3
_STEP = 1e-4


@attrs.frozen(eq=False)
class Link:
    """A link as drawn: mass, centre [3], S's root [3, 3] (link axes), the moving segment that it is part of, its
    placement [4, 4] there.
    """

    name: str
    segment: int
    placement: Array
    mass: float
    center: Array
    root: Array


@attrs.frozen(eq=False)
class Links:
    """All links with mass. ``segments`` names the moving segments, each by its first link; segment 0 is the body."""

    links: tuple[Link, ...]
    segments: tuple[str, ...]
    spread: SpreadParameters

    @classmethod
    def of(cls, description: RobotDescription) -> Links:
        """The links of a robot, as its description has them now."""
        model, found = description.model, []
        segments = [""] * (model.njoints - 1)
        for frame in model.frames:
            joint = int(frame.parentJoint if hasattr(frame, "parentJoint") else frame.parent)
            if frame.type == pin.FrameType.BODY and joint > 0 and not segments[joint - 1]:
                segments[joint - 1] = str(frame.name)
        for element in ElementTree.fromstring(description.urdf_text).findall("link"):
            given = _given(element)
            if given is None or given.mass <= 0.0:
                continue
            frame = model.frames[model.getFrameId(given.name)]
            joint = int(frame.parentJoint if hasattr(frame, "parentJoint") else frame.parent)
            second = 0.5 * np.trace(given.inertia) * np.eye(3) - given.inertia
            values, axes = np.linalg.eigh(second / given.mass)
            spread = (axes * np.maximum(values, _SMALLEST**2)) @ axes.T
            placement = np.array(frame.placement.homogeneous)
            root = np.linalg.cholesky(spread)
            found.append(Link(given.name, joint - 1, placement, given.mass, given.center, root))
        return cls(tuple(found), tuple(segments), description.parameters.mass_model.spread)

    @property
    def unknowns(self) -> int:
        """How many unknowns there are."""
        return PER_LINK * len(self.links)

    def masses(self, x: Array) -> tuple[LinkMass, ...]:
        """The links at unknowns [10 links]."""
        out = []
        for link, own in zip(self.links, np.asarray(x).reshape(-1, PER_LINK), strict=True):
            mass, center, second = self._parts(link, own)
            spread = second - np.outer(center, center)
            out.append(LinkMass(link.name, mass, center, mass * (np.trace(spread) * np.eye(3) - spread)))
        return tuple(out)

    def total_mass(self, x: Array) -> float:
        """Mass of all, kg."""
        return float(sum(mass.mass for mass in self.masses(x)))

    def dynamic(self, x: Array) -> Array:
        """Inertial parameters [10 segments] of the moving segments in Pinocchio's order: mass, first moments, inertia
        about the joint's origin (xx, xy, yy, xz, yz, zz).
        """
        total = np.zeros((len(self.segments), PER_LINK))
        for link, own in zip(self.links, np.asarray(x).reshape(-1, PER_LINK), strict=True):
            total[link.segment] += self._dynamic(link, own)
        return total.ravel()

    def dynamic_by(self, x: Array) -> Array:
        """Derivatives [10 segments, 10 links] of :meth:`dynamic`, by central differences."""
        values = np.asarray(x).reshape(-1, PER_LINK)
        out = np.zeros((PER_LINK * len(self.segments), self.unknowns))
        for index, (link, own) in enumerate(zip(self.links, values, strict=True)):
            rows = slice(PER_LINK * link.segment, PER_LINK * (link.segment + 1))
            for k in range(PER_LINK):
                step = np.zeros(PER_LINK)
                step[k] = _STEP
                change = self._dynamic(link, own + step) - self._dynamic(link, own - step)
                out[rows, PER_LINK * index + k] = change / (2.0 * _STEP)
        return out

    def _parts(self, link: Link, own: Array) -> tuple[float, Array, Array]:
        """Mass, centre [3] and the second moments [3, 3] about the link's origin over the mass."""
        spread = self.spread
        mass = link.mass * float(np.exp(spread.mass * own[0]))
        center = link.center + spread.center * own[1:4]
        turn = np.diag(np.exp(spread.shape * own[4:7]))
        turn[1, 0], turn[2, 0], turn[2, 1] = spread.shape * own[7:10]
        root = link.root @ turn
        return mass, center, root @ root.T + np.outer(center, center)

    def _dynamic(self, link: Link, own: Array) -> Array:
        mass, center, second = self._parts(link, own)
        pseudo = np.zeros((4, 4))
        pseudo[:3, :3], pseudo[:3, 3], pseudo[3, :3], pseudo[3, 3] = second, center, center, 1.0
        pseudo = mass * (link.placement @ pseudo @ link.placement.T)
        (xx, xy, xz, hx), (_, yy, yz, hy), (_, _, zz, hz), _ = pseudo.tolist()
        return np.array((pseudo[3, 3], hx, hy, hz, yy + zz, -xy, xx + zz, -xz, -yz, xx + yy))


def _given(link: ElementTree.Element) -> LinkMass | None:
    """What a URDF link has, its inertia turned into the link's axes."""
    inertial = link.find("inertial")
    mass = None if inertial is None else inertial.find("mass")
    if inertial is None or mass is None:
        return None
    origin, inertia = inertial.find("origin"), inertial.find("inertia")
    place, rpy = (_three(None if origin is None else origin.get(key)) for key in ("xyz", "rpy"))
    names = ("ixx", "ixy", "ixz", "iyy", "iyz", "izz")
    values = [0.0 if inertia is None else float(inertia.get(name, "0")) for name in names]
    turn = rotation_rpy(rpy)
    return LinkMass(str(link.get("name")), float(mass.get("value", "0")), place, turn @ inertia_matrix(values) @ turn.T)


def _three(text: str | None) -> Array:
    return np.array([float(word) for word in (text or "0 0 0").split()])
