"""The parameters of balance.yaml: loop, weights, estimator noise, safety limits, margins that must be kept."""

from __future__ import annotations

import attrs

from ballbal_ros.balance.guard_parameters import GuardParameters
from ballbal_ros.balance.hand_load_parameters import HandLoadParameters
from ballbal_ros.declaration import parameter, section

COMPENSATIONS = ("planned", "quasi_static", "none")


@attrs.frozen(kw_only=True)
class LoopParameters:
    """When the loop measures and when its torque arrives."""

    rate: float = parameter("double", 500.0, unit="Hz", low=50.0, high=5000.0, meaning="how often the loop runs")
    delay: float = parameter(
        "double",
        0.002,
        unit="s",
        low=0.0,
        high=0.05,
        meaning="from the instant of the measurement until the torque that answers it acts on the ball",
    )

    @property
    def period(self) -> float:
        """One loop period, s."""
        return 1.0 / self.rate


@attrs.frozen(kw_only=True)
class WeightParameters:
    """Acceptable deviations: each enters the quadratic cost as 1 / deviation² (Bryson's rule); less holds tighter."""

    lean: float = parameter(
        "double", 0.05, unit="rad", low=1e-5, high=10.0, runtime=True, meaning="acceptable lean error"
    )
    lean_rate: float = parameter(
        "double", 0.5, unit="rad/s", low=1e-5, high=100.0, runtime=True, meaning="acceptable error of the lean's rate"
    )
    ball_position: float = parameter(
        "double",
        0.01,
        unit="m",
        low=1e-6,
        high=10.0,
        runtime=True,
        meaning="acceptable distance of the ball from its station",
    )
    ball_velocity: float = parameter(
        "double", 0.1, unit="m/s", low=1e-5, high=10.0, runtime=True, meaning="acceptable error of the ball's velocity"
    )
    torque: float = parameter(
        "double",
        10.0,
        unit="N m",
        low=1e-3,
        high=1e4,
        runtime=True,
        meaning="acceptable drive torque about x and y beyond the plan's",
    )
    heading: float = parameter(
        "double", 0.02, unit="rad", low=1e-5, high=10.0, runtime=True, meaning="acceptable heading error"
    )
    heading_rate: float = parameter(
        "double",
        0.2,
        unit="rad/s",
        low=1e-5,
        high=100.0,
        runtime=True,
        meaning="acceptable error of the heading's rate",
    )
    heading_torque: float = parameter(
        "double",
        1.0,
        unit="N m",
        low=1e-3,
        high=1e4,
        runtime=True,
        meaning="acceptable drive torque about z beyond the plan's",
    )


@attrs.frozen(kw_only=True)
class EstimatorParameters:
    """Noise that the estimator reckons with. Measurements: standard deviation of a sample; others: densities."""

    lean_noise: float = parameter(
        "double", 4e-4, unit="rad", low=1e-7, high=1.0, runtime=True, meaning="noise of the measured lean, each axis"
    )
    rate_noise: float = parameter(
        "double", 3.8e-3, unit="rad/s", low=1e-7, high=10.0, runtime=True, meaning="noise of the rate gyro, each axis"
    )
    rate_walk: float = parameter(
        "double", 1.9e-5, unit="rad/s²/√Hz", low=1e-9, high=1.0, meaning="how fast the rate gyro's bias wanders"
    )
    drive_noise: float = parameter(
        "double",
        4.8e-5,
        unit="rad",
        low=1e-8,
        high=1.0,
        runtime=True,
        meaning="noise of the ball's angle relative to the body, from the drive's encoders",
    )
    torque_noise: float = parameter(
        "double",
        0.02,
        unit="N m/√Hz",
        low=1e-6,
        high=100.0,
        runtime=True,
        meaning="what the drive's torque may be off by: stiction, ripple, the floor",
    )
    moment_noise: float = parameter(
        "double",
        0.02,
        unit="N m/√Hz",
        low=1e-6,
        high=100.0,
        runtime=True,
        meaning="fast part of the outside moment about the contact",
    )
    moment_walk: float = parameter(
        "double",
        1.0,
        unit="N m/√s",
        low=1e-6,
        high=1e3,
        runtime=True,
        meaning="how fast the outside moment about the contact may wander: more makes the trim quicker and noisier",
    )
    heading_noise: float = parameter(
        "double", 4e-4, unit="rad", low=1e-7, high=1.0, runtime=True, meaning="noise of the measured heading"
    )
    yaw_torque_noise: float = parameter(
        "double",
        0.02,
        unit="N m/√Hz",
        low=1e-6,
        high=100.0,
        runtime=True,
        meaning="what the torque about z may be off by",
    )
    yaw_moment_walk: float = parameter(
        "double",
        0.1,
        unit="N m/√s",
        low=1e-6,
        high=1e3,
        runtime=True,
        meaning="how fast the outside moment about z may wander",
    )


@attrs.frozen(kw_only=True)
class MarginParameters:
    """What the sampled loop must be able to bear; a design that can't is refused."""

    gain_up: float = parameter(
        "double", 2.0, unit="-", low=1.0, high=100.0, meaning="factor by which the loop gain may rise, at least"
    )
    gain_down: float = parameter(
        "double", 0.6, unit="-", low=0.0, high=1.0, meaning="factor to which the loop gain may sink, at most"
    )
    phase: float = parameter(
        "double", 30.0, unit="deg", low=0.0, high=90.0, meaning="phase margin of each axis, at least"
    )
    delay: float = parameter(
        "double", 0.008, unit="s", low=0.0, high=1.0, meaning="delay that the loop bears beyond loop.delay, at least"
    )
    disk: float = parameter(
        "double",
        0.5,
        unit="-",
        low=0.0,
        high=2.0,
        meaning="disk margin with gain and phase of both axes changing at once, at least",
    )


@attrs.frozen(kw_only=True)
class BalanceParameters:
    """balance.yaml as a whole."""

    loop: LoopParameters = section(LoopParameters)
    weights: WeightParameters = section(WeightParameters)
    estimator: EstimatorParameters = section(EstimatorParameters)
    limits: GuardParameters = section(GuardParameters)
    margins: MarginParameters = section(MarginParameters)
    hand_load: HandLoadParameters = section(HandLoadParameters)
    trim: bool = parameter(
        "bool", True, unit="-", runtime=True, meaning="whether the lean is trimmed by the estimated outside moment"
    )
    compensation: str = parameter(
        "string",
        "planned",
        unit="-",
        choices=COMPENSATIONS,
        runtime=True,
        meaning="what arm motion is met with: the planned lean, the lean that balances the measured arms, or nothing",
    )
    attitude: str = parameter(
        "string",
        "imu",
        unit="-",
        choices=("imu", "own"),
        meaning="whose lean is used: the orientation in imu/data, or our own estimate from raw rate and acceleration",
    )
    attitude_time: float = parameter(
        "double",
        2.0,
        unit="s",
        low=0.05,
        high=100.0,
        meaning="time over which the own estimate trusts the gyro before the accelerometer",
    )
    imu_timeout: float = parameter(
        "double",
        0.01,
        unit="s",
        low=0.001,
        high=1.0,
        meaning="age past which IMU data are too old to be used, and the loop coasts on its model",
    )
    drive_timeout: float = parameter(
        "double",
        0.02,
        unit="s",
        low=0.001,
        high=1.0,
        meaning="age past which drive data are too old to be used, and the loop coasts on its model",
    )
    arms_timeout: float = parameter(
        "double",
        0.2,
        unit="s",
        low=0.001,
        high=10.0,
        meaning="age past which arm data are stale, and no new plan is accepted",
    )
    ramp_time: float = parameter(
        "double",
        0.3,
        unit="s",
        low=0.0,
        high=10.0,
        meaning="time over which torque comes in at engage and gains change over",
    )
