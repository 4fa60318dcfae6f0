"""Parameters of balance.yaml's ``hand_load``: how the robot finds out what its hands hold."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter


@attrs.frozen(kw_only=True)
class HandLoadParameters:
    """How the robot finds out what its hands hold, from how it stands. Standard deviations."""

    body_moment: float = parameter(
        "double",
        1.0,
        unit="N m",
        low=1e-3,
        high=1e3,
        meaning="how far the mass model of body and empty hands may be off, as a moment about the contact, each axis",
    )
    reading_noise: float = parameter(
        "double",
        0.06,
        unit="N m",
        low=1e-3,
        high=1e2,
        meaning="error of a moment read at rest, each axis: that of the lean, as slow as the attitude, times m g c_z",
    )
    rolling_moment: float = parameter(
        "double",
        0.15,
        unit="N m",
        low=0.0,
        high=1e2,
        meaning="moment with which the floor resists rolling; half of it counts as unknown while the ball creeps",
    )
    said_share: float = parameter(
        "double",
        0.1,
        unit="-",
        low=0.0,
        high=1.0,
        meaning="how far an announced load's mass may be off, as a share of it; 0: it is taken at its word",
    )
    said_center: float = parameter(
        "double",
        0.01,
        unit="m",
        low=0.0,
        high=1.0,
        meaning="how far an announced load's mass centre may be off, each axis",
    )
    unknown_center: float = parameter(
        "double",
        0.04,
        unit="m",
        low=0.0,
        high=1.0,
        meaning="how far an unknown load's mass centre may be from the hand link's origin, each axis",
    )
    event: float = parameter(
        "double",
        0.6,
        unit="N m",
        low=0.05,
        high=1e2,
        meaning="change of the moment, standing in one posture, from which on something was taken, put down or pulls",
    )
    use_error: float = parameter(
        "double",
        0.05,
        unit="kg",
        low=1e-3,
        high=10.0,
        meaning="standard error of a hand's load at which the estimate is used",
    )
    use_share: float = parameter(
        "double",
        0.05,
        unit="-",
        low=0.0,
        high=1.0,
        meaning="the same as a share of its mass; the larger of both holds",
    )
