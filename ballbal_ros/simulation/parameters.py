"""The parameters of simulation.yaml: what the simulated robot and its floor are like."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter, section


@attrs.frozen(kw_only=True)
class SimulatedFloorParameters:
    """The floor as it truly is."""

    friction: float = parameter(
        "double", 0.7, unit="-", low=0.01, high=3.0, meaning="true friction of the ball on the floor"
    )
    torsion: float = parameter(
        "double", 0.004, unit="m", low=0.0, high=0.5, meaning="greatest spin moment of the floor, per newton of load"
    )
    rolling_resistance: float = parameter(
        "double", 0.002, unit="-", low=0.0, high=0.1, meaning="resistance to rolling, as a share of the load"
    )


@attrs.frozen(kw_only=True)
class SimulatedDriveParameters:
    """The drive as it truly is."""

    delay: float = parameter(
        "double", 0.002, unit="s", low=0.0, high=0.1, meaning="from a command to its torque; whole physics steps"
    )
    torque_scale: float = parameter(
        "double", 1.0, unit="-", low=0.1, high=2.0, meaning="true torque over commanded torque"
    )
    presliding: float = parameter(
        "double", 0.002, unit="rad", low=1e-4, high=0.1, meaning="turn of an actuator that builds up its dry friction"
    )


@attrs.frozen(kw_only=True)
class SimulatedImuParameters:
    """The IMU's errors. Densities as in a published calibration of a mid-range MEMS IMU (EuRoC data set, ADIS16448)."""

    gyro_noise: float = parameter(
        "double", 1.7e-4, unit="rad/s/√Hz", low=0.0, high=0.1, meaning="white noise of the rate"
    )
    gyro_walk: float = parameter(
        "double", 1.9e-5, unit="rad/s²/√Hz", low=0.0, high=0.1, meaning="random walk of the rate's bias"
    )
    gyro_bias: float = parameter(
        "double", 3e-4, unit="rad/s", low=0.0, high=0.1, meaning="standard deviation of the rate's bias at the start"
    )
    accelerometer_noise: float = parameter(
        "double", 2e-3, unit="m/s²/√Hz", low=0.0, high=1.0, meaning="white noise of the acceleration"
    )
    attitude: str = parameter(
        "string",
        "filter",
        unit="-",
        choices=("filter", "ideal"),
        meaning="orientation of imu/data: of a filter that takes the acceleration for the vertical, or the true one",
    )
    attitude_time: float = parameter(
        "double", 5.0, unit="s", low=0.1, high=100.0, meaning="time constant of that filter's pull to the vertical"
    )
    attitude_noise: float = parameter(
        "double", 1e-4, unit="rad", low=0.0, high=0.1, meaning="white noise of the orientation, each sample and axis"
    )


@attrs.frozen(kw_only=True)
class SimulationParameters:
    """simulation.yaml as a whole."""

    physics_step: float = parameter("double", 0.001, unit="s", low=1e-4, high=0.005, meaning="step of the physics")
    loop_rate: float = parameter(
        "double", 500.0, unit="Hz", low=50.0, high=2000.0, meaning="rate of the balance loop; whole physics steps"
    )
    sensor_delay: float = parameter(
        "double", 0.0, unit="s", low=0.0, high=0.1, meaning="age of what the sensors say; whole physics steps"
    )
    arm_encoder_step: float = parameter(
        "double", 4.8e-5, unit="rad", low=0.0, high=0.1, meaning="one count of the arm joints' encoders (m for a slide)"
    )
    built: str = parameter(
        "string",
        "as_described",
        unit="-",
        choices=("as_described", "as_drawn"),
        meaning="masses and IMU mounting: as described, or as the URDF draws them, without robot.yaml's mass_model",
    )
    arm_servo: str = parameter(
        "string",
        "as_described",
        unit="-",
        choices=("as_described", "ideal", "position_velocity", "position"),
        meaning="what the arm servos truly follow; as_described: as robot.yaml says",
    )
    arm_servo_bandwidth: float = parameter(
        "double", 0.0, unit="rad/s", low=0.0, high=1000.0, meaning="true bandwidth of the servos; 0: as robot.yaml says"
    )
    floor: SimulatedFloorParameters = section(SimulatedFloorParameters)
    drive: SimulatedDriveParameters = section(SimulatedDriveParameters)
    imu: SimulatedImuParameters = section(SimulatedImuParameters)
