"""What one posture at rest tells."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.robot.arrays import Array


@attrs.frozen(eq=False)
class Reading:
    """The robot at rest in one posture, as means over about a second, in ``base_footprint`` axes: arm position [n];
    lean [2], rad; accelerations of the ball [2], m/s², and of the lean [2], rad/s², which are small; and which way the
    ball creeps [2], 1 where it rolls that way all the time, so that the floor's resistance is felt whole.
    """

    arm_position: Array
    lean: Array
    ball_acceleration: Array
    lean_acceleration: Array = attrs.field(factory=lambda: np.zeros(2))
    creep: Array = attrs.field(factory=lambda: np.zeros(2))
