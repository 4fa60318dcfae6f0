"""The robot from the side, drawn from its URDF's boxes, cylinders and spheres."""

from __future__ import annotations

import math
import xml.etree.ElementTree as ElementTree

import attrs
import numpy as np
import pinocchio as pin
from scipy.spatial import ConvexHull

from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import rotation_lean, rotation_rpy
from ballbal_ros.robot.description import RobotDescription

_GREY = (0.6, 0.6, 0.6)


@attrs.frozen(eq=False)
class Shape:
    """One solid: the frame it is fixed to, corner points [N, 3] in that frame, m, and its colour."""

    frame: int
    points: Array
    color: tuple[float, ...]


@attrs.frozen(eq=False)
class Outline:
    """A solid seen from the left: corners [N, 2] of its outline as (x, z), m, how far to the left it is, and its
    colour.
    """

    corners: Array
    depth: float
    color: tuple[float, ...]


def shapes(description: RobotDescription) -> list[Shape]:
    """The visual solids of a robot's URDF; meshes are left out, as this program opens no other file."""
    root = ElementTree.fromstring(description.urdf_text)
    colors = {m.get("name"): _color(m) for m in root.findall("material")}
    found = []
    for link in root.findall("link"):
        for visual in link.findall("visual"):
            points = _points(visual.find("geometry"))
            if points is None:
                continue
            origin = visual.find("origin")
            xyz, rpy = _triple(origin, "xyz"), _triple(origin, "rpy")
            material = visual.find("material")
            color = _GREY if material is None else colors.get(material.get("name")) or _color(material)
            frame = description.model.getFrameId(link.get("name", ""))
            found.append(Shape(frame, points @ rotation_rpy(rpy).T + xyz, color))
    return found


def _triple(element: ElementTree.Element | None, key: str) -> Array:
    return np.array([float(v) for v in ("0 0 0" if element is None else element.get(key, "0 0 0")).split()])


def _color(material: ElementTree.Element) -> tuple[float, ...]:
    element = material.find("color")
    return _GREY if element is None else tuple(float(v) for v in element.get("rgba", "0.6 0.6 0.6 1").split())


def _points(geometry: ElementTree.Element | None) -> Array | None:
    """Corner points of a box, cylinder or sphere about its own origin."""
    solid = None if geometry is None or len(geometry) == 0 else geometry[0]
    if solid is None:
        return None
    turn = np.linspace(0.0, 2.0 * math.pi, 24, endpoint=False)
    if solid.tag == "box":
        half = 0.5 * np.array([float(v) for v in solid.get("size", "0 0 0").split()])
        return half * np.array([[x, y, z] for x in (-1, 1) for y in (-1, 1) for z in (-1, 1)], float)
    radius = float(solid.get("radius", "0"))
    circle = radius * np.stack((np.cos(turn), np.sin(turn)), axis=-1)
    if solid.tag == "cylinder":
        half_length = 0.5 * float(solid.get("length", "0"))
        return np.vstack([np.column_stack((circle, np.full(len(turn), z))) for z in (-half_length, half_length)])
    if solid.tag == "sphere":
        rings = [
            np.column_stack((math.cos(a) * circle, np.full(len(turn), radius * math.sin(a))))
            for a in np.linspace(-1.5, 1.5, 9)
        ]
        return np.vstack(rings)
    return None


def outlines(
    description: RobotDescription, solids: list[Shape], arm_position: Array, lean: Array, ball_x: float
) -> list[Outline]:
    """The robot's outlines from the left, farthest first, at an arm position [n] and lean [2]; the floor is at z =
    0.
    """
    model = description.model
    data = model.createData()
    q = pin.neutral(model)
    q[7:] = arm_position
    pin.framesForwardKinematics(model, data, q)
    rotation = rotation_lean(np.asarray(lean, float))
    seen = []
    for solid in solids:
        placement = data.oMf[solid.frame]
        points = (solid.points @ placement.rotation.T + placement.translation) @ rotation.T
        flat = points[:, [0, 2]] + np.array([ball_x, description.parameters.ball.radius])
        seen.append(Outline(flat[ConvexHull(flat).vertices], float(points[:, 1].mean()), solid.color))
    return sorted(seen, key=lambda outline: outline.depth)
