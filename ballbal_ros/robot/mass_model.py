"""What weighing has found, laid over the URDF: masses, mass centres and inertias of links, and how the IMU sits."""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree

import attrs
import numpy as np

from ballbal_ros.errors import ModelError, nearest
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.loads import check_inertia
from ballbal_ros.robot.parameters import LinkMassParameters, MassModelParameters

_ORDER = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))
_NAMES = ("ixx", "ixy", "ixz", "iyy", "iyz", "izz")


@attrs.frozen(eq=False)
class LinkMass:
    """Mass in kg of a link, its mass centre [3], m, and inertia [3, 3] about it, kg m², in the link's axes."""

    name: str
    mass: float
    center: Array
    inertia: Array

    def as_parameters(self) -> LinkMassParameters:
        """The same as it stands in robot.yaml."""
        inertia = [float(self.inertia[place]) for place in _ORDER]
        return LinkMassParameters(mass=float(self.mass), center=[float(v) for v in self.center], inertia=inertia)


def inertia_matrix(values: list[float]) -> Array:
    """The matrix [3, 3] of ixx, ixy, ixz, iyy, iyz, izz."""
    matrix = np.zeros((3, 3))
    for (row, column), value in zip(_ORDER, values, strict=True):
        matrix[row, column] = matrix[column, row] = value
    return matrix


def weighed_urdf(text: str, model: MassModelParameters, file: str) -> str:
    """The URDF's text with the masses of ``model`` in it; ``file`` is named in errors.

    Raises :class:`ModelError` for a link that has no mass in the URDF, or for masses of no possible body.
    """
    if not model.links:
        return text
    root = ElementTree.fromstring(text)
    found = {str(link.get("name")): link for link in root.findall("link") if link.find("inertial") is not None}
    for name, given in model.link.items():
        if name not in found:
            what = f"mass_model.links names {name}, which has no mass in the URDF"
            raise ModelError(file, what, nearest(name, found))
        check_inertia(inertia_matrix(given.inertia), file, f"mass_model.{name}.inertia", point_allowed=True)
        inertial = found[name].find("inertial")
        assert inertial is not None
        for old in list(inertial):
            inertial.remove(old)
        place = " ".join(repr(float(v)) for v in given.center)
        ElementTree.SubElement(inertial, "origin", {"xyz": place, "rpy": "0 0 0"})
        ElementTree.SubElement(inertial, "mass", {"value": repr(float(given.mass))})
        values = {key: repr(float(v)) for key, v in zip(_NAMES, given.inertia, strict=True)}
        ElementTree.SubElement(inertial, "inertia", values)
    return ElementTree.tostring(root, encoding="unicode")
