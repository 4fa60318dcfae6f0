"""Whether arm postures, and the straight ways between them, keep the robot's parts clear of each other."""

from __future__ import annotations

import itertools

import numpy as np
import pinocchio as pin

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

_STEP = 0.1


class Clearance:
    """Distances between the URDF's collision shapes (Pinocchio with coal), all pairs but those on one rigid segment
    and on neighbours, which touch at their joint.

    Raises :class:`ModelError` where the URDF has no shapes, or shapes from files, which are not looked for.
    """

    def __init__(self, description: RobotDescription, margin: float) -> None:
        """``margin``: the least distance that will do, m."""
        self._model, self._margin = description.model, margin
        try:
            kind = pin.GeometryType.COLLISION
            shapes = pin.buildGeomFromUrdfString(description.model, description.urdf_text, kind)
        except Exception as error:
            raise ModelError(description.urdf_path, f"collision shapes can't be made: {error}", "mend them") from error
        joints = [shape.parentJoint for shape in shapes.geometryObjects]
        parents = description.model.parents
        for first, second in itertools.combinations(range(len(joints)), 2):
            a, b = joints[first], joints[second]
            if a != b and parents[a] != b and parents[b] != a:
                shapes.addCollisionPair(pin.CollisionPair(first, second))
        if not len(shapes.collisionPairs):
            what = "has no collision shapes that could meet"
            raise ModelError(description.urdf_path, what, "give its links <collision>: postures are chosen by them")
        self._shapes, self._data, self._q = shapes, description.model.createData(), pin.neutral(description.model)
        self._shape_data = pin.GeometryData(shapes)
        for request in self._shape_data.collisionRequests:
            request.security_margin = margin

    def clear(self, arm_position: Array) -> bool:
        """Whether all parts are further from each other than the margin at a posture [n]."""
        self._q[7:] = arm_position
        pin.updateGeometryPlacements(self._model, self._data, self._shapes, self._shape_data, self._q)
        return not pin.computeCollisions(self._shapes, self._shape_data, True)

    def gap(self, arm_position: Array) -> float:
        """The least distance between parts that could meet, m; negative: they meet."""
        self._q[7:] = arm_position
        pin.computeDistances(self._model, self._data, self._shapes, self._shape_data, self._q)
        return float(min(result.min_distance for result in self._shape_data.distanceResults))

    def way_clear(self, first: Array, last: Array) -> bool:
        """Whether the straight way from one posture [n] to another is clear, looked at every 0.1 rad or m."""
        count = max(2, int(np.ceil(np.abs(last - first).max() / _STEP)) + 1)
        # From the middle outward: what is not clear is found sooner.
        shares = sorted(np.linspace(0.0, 1.0, count).tolist(), key=lambda share: abs(share - 0.5))
        return all(self.clear(first + share * (last - first)) for share in shares)
