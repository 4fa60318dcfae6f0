"""Parameters of balance.yaml's ``limits``: within what the loop works, and which measurements it believes."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter


@attrs.frozen(kw_only=True)
class GuardParameters:
    """Within what the loop works at all."""

    engage_lean: float = parameter(
        "double",
        0.06,
        unit="rad",
        low=0.001,
        high=0.5,
        meaning="greatest distance from the equilibrium lean at which it engages",
    )
    engage_rate: float = parameter(
        "double", 0.3, unit="rad/s", low=0.001, high=10.0, meaning="greatest rate of the lean at which it engages"
    )
    engage_time: float = parameter(
        "double",
        0.1,
        unit="s",
        low=0.0,
        high=60.0,
        meaning="how long every condition of engaging must hold before torque comes in",
    )
    capture_reserve: float = parameter(
        "double",
        0.1,
        unit="-",
        low=0.0,
        high=0.9,
        meaning="share kept of the region from which torque, friction and speed can bring it back; beyond, torque goes "
        "off",
    )
    trip_lean: float = parameter(
        "double",
        0.5,
        unit="rad",
        low=0.01,
        high=1.2,
        meaning="distance from the reference lean past which torque goes off at once, whatever the capturable region "
        "says",
    )
    trim_moment: float = parameter(
        "double",
        25.0,
        unit="N m",
        low=0.1,
        high=1e3,
        runtime=True,
        meaning="greatest outside moment that the trim leans against",
    )
    trim_rate: float = parameter(
        "double",
        25.0,
        unit="N m/s",
        low=0.1,
        high=1e5,
        runtime=True,
        meaning="how fast the trim may follow an outside moment; a push is faster",
    )
    torque_rate: float = parameter(
        "double",
        3000.0,
        unit="N m/s",
        low=1.0,
        high=1e6,
        meaning="how fast the drive torque that it commands about any axis may change",
    )
    drive_power: float = parameter(
        "double", 1500.0, unit="W", low=1.0, high=1e6, meaning="greatest power of all drive actuators together"
    )
    rate_start: float = parameter(
        "double",
        0.1,
        unit="rad/s",
        low=1e-3,
        high=100.0,
        meaning="how far a measured rate may be from that of the tick before, and be believed",
    )
    rate_jump: float = parameter(
        "double",
        0.4,
        unit="rad/s",
        low=1e-3,
        high=100.0,
        meaning="how far a measured rate may be from what model and other senses expect, and be believed",
    )
    tilt: float = parameter(
        "double",
        0.04,
        unit="rad",
        low=1e-3,
        high=1.0,
        meaning="how far lean and accelerometer may differ over 0.1 s, and be believed",
    )
    turning: float = parameter(
        "double",
        0.08,
        unit="rad/s",
        low=1e-3,
        high=100.0,
        meaning="how far gyro and drive may differ in the rate of the heading over 0.1 s, and be believed",
    )
    wheel_start: float = parameter(
        "double",
        0.003,
        unit="rad",
        low=1e-5,
        high=100.0,
        meaning="how far an actuator's turn in a tick may be from that in the tick before, and be believed",
    )
    wheel_slip: float = parameter(
        "double",
        0.001,
        unit="rad",
        low=1e-5,
        high=100.0,
        meaning="how far one actuator's turn in a tick may alone be from what is expected, and be believed",
    )
    wheel_jump: float = parameter(
        "double",
        0.01,
        unit="rad",
        low=1e-4,
        high=100.0,
        meaning="how far an actuator's turn in a tick may be from what model and other senses expect, and be believed",
    )
    torque: float = parameter(
        "double",
        40.0,
        unit="N m",
        low=0.1,
        high=1e3,
        runtime=True,
        meaning="greatest drive torque that it commands about any axis, within limits.drive_torque of robot.yaml",
    )
