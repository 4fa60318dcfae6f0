"""From what a robot did within a second of rest to a reading: means by one window, of lean and accelerations alike.

A robot that balances is never at rest: lean and ball sway by what its sensors' noise makes of them, and one
acceleration of a thousandth of g counts as much as 60 g at arm's length. With a window w(t) that vanishes at both ends
with its slope, the mean of an acceleration is the mean of the place itself under another window,

    ∫ w x'' dt = ∫ w'' x dt,

free of any derivative of what was measured. As the balance rows are linear in lean and accelerations, which are small,
they hold for the means as they do at each instant, if all are taken by the same window. It is Hann's, whose
second derivative is a cosine.
"""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.robot.arrays import Array
from ballbal_ros.weighing.reading import Reading

# Speed at which rolling resistance is felt by 0.7, m/s: a ball that rests sits in its dent (our own figure).
_CREEP = 1e-3


def resting(arm_position: Array, looks: Array, heading: float) -> Reading:
    """The reading of a robot with arms at ``arm_position`` [n], from evenly spaced ``looks`` [N, 7]: time, s; lean
    (roll, pitch), rad; ball x and y, m, in ``odom``, and its velocity, m/s, in ``base_footprint``. ``heading``, rad.
    """
    time, lean, ball, velocity = looks[:, 0], looks[:, 1:3], looks[:, 3:5], looks[:, 5:7]
    length = float(time[-1] - time[0])
    phase = 2.0 * math.pi * (time - time[0]) / length
    step = np.gradient(time)
    step[[0, -1]] *= 0.5
    mean = step * (1.0 - np.cos(phase))
    mean /= mean.sum()
    bend = step * (2.0 * math.pi / length) ** 2 * np.cos(phase) / length
    x, y = (bend @ _from_line(ball, phase)).tolist()
    sin, cos = math.sin(heading), math.cos(heading)
    creep = velocity / np.sqrt((velocity**2).sum(axis=1) + _CREEP**2)[:, None]
    return Reading(
        arm_position,
        mean @ lean,
        np.array((cos * x + sin * y, cos * y - sin * x)),
        bend @ _from_line(lean, phase),
        mean @ creep,
    )


def _from_line(values: Array, phase: Array) -> Array:
    """Values [N, 2] from the line through their first and last: it has no acceleration, however uneven the times."""
    share = (phase / phase[-1])[:, None]
    return np.asarray(values - values[0] - share * (values[-1] - values[0]))
