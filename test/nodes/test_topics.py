"""Who is heard with which quality of service: as the middleware itself has it."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy, qos_profile_sensor_data

from ballbal_ros.nodes.topics import TOPICS, _profile, why_unheard


def test_drivers_that_send_best_effort_are_heard() -> None:
    """Sensor topics take ROS's own profile for sensor data."""
    for topic in ("imu/data", "imu/data_raw", "joint_states", "drive_states", "drive_command"):
        assert why_unheard(topic, qos_profile_sensor_data) == ""


def test_a_stop_that_nobody_keeps_or_that_may_be_lost_is_told() -> None:
    """An emergency stop must be reliable and kept for late joiners: ROS's default, which is volatile, is not heard."""
    usual = QoSProfile(depth=10)
    kept = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
    assert "olatile publisher" in why_unheard("emergency_stop", usual)
    kept.reliability = ReliabilityPolicy.BEST_EFFORT
    assert "est effort publisher" in why_unheard("emergency_stop", kept)
    kept.reliability = ReliabilityPolicy.RELIABLE
    assert why_unheard("emergency_stop", kept) == ""


def test_our_own_nodes_hear_each_other() -> None:
    """On every topic, with what our publishers offer."""
    for topic, (_, kind) in TOPICS.items():
        assert why_unheard(topic, _profile(kind.depth, kept=kind.kept)) == ""
