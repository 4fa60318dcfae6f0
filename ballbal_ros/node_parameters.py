"""The parameters that each node has besides those of its parameter files; without rclpy, for the page lists them."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter

_WAYS_OF_IMU = ("imu/data", "imu/data_raw")


@attrs.frozen(kw_only=True)
class DescriptionParameters:
    """Where a node finds the robot's URDF."""

    robot_description_wait: float = parameter(
        "double",
        1.0,
        unit="s",
        low=0.0,
        high=60.0,
        meaning="how long to look for a publisher of robot_description before robot.yaml's URDF is read; 0: not at all",
    )


@attrs.frozen(kw_only=True)
class BalanceNodeParameters(DescriptionParameters):
    """What the balance node needs besides robot.yaml and balance.yaml."""

    lock_step: bool = parameter(
        "bool", False, unit="-", meaning="answer a tick only once IMU, drive and arm data carry its stamp (simulation)"
    )
    imu_topic: str = parameter(
        "string", "imu/data", unit="-", choices=_WAYS_OF_IMU, meaning="where the IMU's data come from"
    )
    command_lifespan: float = parameter(
        "double",
        0.02,
        unit="s",
        low=0.001,
        high=1.0,
        meaning="age past which an undelivered drive command is dropped (not in lock-step)",
    )
    realtime_priority: int = parameter(
        "integer",
        0,
        unit="-",
        low=0,
        high=99,
        meaning="SCHED_FIFO priority to ask for, where the system grants it; diagnostics tell; 0: ordinary scheduling",
    )
    odom_rate: float = parameter("double", 50.0, unit="Hz", low=1.0, high=1000.0, meaning="how often odom is published")


@attrs.frozen(kw_only=True)
class ArmCompensationNodeParameters(DescriptionParameters):
    """What the arm compensation node needs besides robot.yaml and compensation.yaml."""

    memory: str = parameter(
        "string",
        "",
        unit="-",
        meaning="file that keeps what is under way, for the node that is started anew; empty: "
        "motion_<ROS domain><namespace>.json in ballbal_ros/<robot> of XDG_STATE_HOME (~/.local/state)",
    )
    learned: str = parameter(
        "string",
        "",
        unit="-",
        meaning="file of what runs of a plan have taught, or folder of such (*.learned.yaml); empty: none is used",
    )


@attrs.frozen(kw_only=True)
class KinematicsNodeParameters(DescriptionParameters):
    """What the whole-body kinematics node needs besides robot.yaml."""

    rate: float = parameter(
        "double",
        0.0,
        unit="Hz",
        low=0.0,
        high=10000.0,
        meaning="greatest rate of center_of_mass and body_inertia; 0: each joint state",
    )
    marker_rate: float = parameter(
        "double", 10.0, unit="Hz", low=0.1, high=1000.0, meaning="greatest rate of com_marker"
    )


@attrs.frozen(kw_only=True)
class ConfigWatchParameters:
    """What the node that watches the parameter files needs."""

    folder: str = parameter(
        "string", "", unit="-", meaning="the robot's folder; empty: where the robot.yaml of the command line is"
    )
    history: str = parameter(
        "string",
        "",
        unit="-",
        meaning="folder that keeps the accepted sets; empty: ballbal_ros/<robot> in XDG_STATE_HOME (~/.local/state)",
    )
    keep: int = parameter("integer", 200, unit="-", low=2, high=100000, meaning="how many accepted sets are kept")
    settle_time: float = parameter(
        "double",
        0.05,
        unit="s",
        low=0.0,
        high=5.0,
        meaning="how long a file must lie still before it is read: an editor may write it in several goes",
    )
    patience: float = parameter(
        "double",
        0.5,
        unit="s",
        low=0.0,
        high=10.0,
        meaning="how long a file that is missing, empty or broken may be a half-written one before it is refused",
    )
    look_every: float = parameter(
        "double",
        0.5,
        unit="s",
        low=0.1,
        high=60.0,
        meaning="how often the files are looked at besides, should the system not tell of a change",
    )
    answer_timeout: float = parameter(
        "double", 5.0, unit="s", low=0.1, high=60.0, meaning="how long a node may take to answer"
    )


@attrs.frozen(kw_only=True)
class SimulatedRobotNodeParameters:
    """What the simulated robot needs besides robot.yaml and simulation.yaml."""

    clock: str = parameter(
        "string",
        "lock_step",
        unit="-",
        choices=("lock_step", "real_time"),
        meaning="wait for each answer, or go by the wall clock",
    )
    duration: float = parameter(
        "double", 0.0, unit="s", low=0.0, high=1e6, meaning="simulated time after which it ends; 0: when it is told to"
    )
    seed: int = parameter("integer", 0, unit="-", low=0, high=2**62, meaning="seed of all that is random")
    answer_timeout: float = parameter(
        "double",
        30.0,
        unit="s",
        low=0.1,
        high=3600.0,
        meaning="wall time to wait for an answer before it ends with an error",
    )
    drive_watchdog: float = parameter(
        "double",
        0.05,
        unit="s",
        low=0.001,
        high=10.0,
        meaning="age of the newest drive command past which the drive lets go (real time)",
    )
    catch_up: float = parameter(
        "double",
        0.006,
        unit="s",
        low=0.0,
        high=1e6,
        meaning="how far simulated time may lag the wall clock and still make up for it (real time); what this process "
        "was kept waiting for longer is left out, and told",
    )
    realtime_priority: int = parameter(
        "integer",
        0,
        unit="-",
        low=0,
        high=99,
        meaning="SCHED_FIFO priority to ask for, where the system grants it; diagnostics tell; 0: ordinary scheduling",
    )
    hung: float = parameter(
        "double",
        0.0,
        unit="m",
        low=0.0,
        high=1.0,
        meaning="how far the ball hangs clear of the floor, as for checkup --gantry; 0: it stands on the floor",
    )
    wait_for_plan: bool = parameter(
        "bool",
        False,
        unit="-",
        meaning="hold time, once the robot balances on its stand, until an arm plan has been accepted or refused",
    )
    imu_topic: str = parameter(
        "string",
        "imu/data",
        unit="-",
        choices=_WAYS_OF_IMU,
        meaning="what the IMU offers: with or without an orientation",
    )
    plan: str = parameter(
        "string",
        "",
        unit="-",
        meaning="plan file whose start posture and loads it begins with; its arm motion is left to arm_compensation",
    )
    plan_start: float = parameter(
        "double",
        -1.0,
        unit="s",
        low=-1.0,
        high=1e6,
        meaning="when the plan file's loads and pushes begin; negative: they do not happen",
    )
    count_from: float = parameter(
        "double", 0.0, unit="s", low=0.0, high=1e6, meaning="when the peaks that it tells at the end begin to count"
    )
    truth: list[str] = parameter(
        "string_array", [], unit="-", meaning="KEY=VALUE, where the simulated robot differs from the model"
    )
