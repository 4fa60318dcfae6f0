"""Serialised messages read and written by hand, held against rclpy's own serialisation."""

from __future__ import annotations

import numpy as np
import pytest

pytest.importorskip("rclpy")

from nav_msgs.msg import Odometry
from rclpy.serialization import deserialize_message, serialize_message
from rosgraph_msgs.msg import Clock
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.nodes.wire_readers import ImuReader, JointStateReader
from ballbal_ros.nodes.wire_writers import ClockWriter, ImuWriter, JointStateWriter, OdometryWriter

STAMP = 12_345_678_901


@pytest.mark.parametrize("frame", ["", "a", "abc", "abcd", "base_link"])
@pytest.mark.parametrize("names", [[], ["a"], ["ab", "c"], ["left", "right", "x"]])
@pytest.mark.parametrize("velocities", [False, True])
def test_joint_states_read_as_rclpy_reads_them(frame: str, names: list[str], velocities: bool) -> None:
    """Whatever the lengths of frame, names and lists, and so the padding: both the first and the later messages are
    read right.
    """
    reader = JointStateReader()
    for round_ in range(3):
        message = JointState(name=names)
        message.header.frame_id = frame
        message.header.stamp.sec, message.header.stamp.nanosec = 7 + round_, 8
        message.position = [0.5 + k + round_ for k in range(len(names))]
        message.velocity = [9.0] * len(names) if velocities else []
        message.effort = [] if velocities else [-1.5 * round_] * len(names)
        values = reader.read(serialize_message(message))
        assert values.stamp == (7 + round_) * 10**9 + 8
        assert values.names == tuple(names)
        assert values.position.tolist() == list(message.position)
        assert values.effort.tolist() == list(message.effort)


def test_publishers_with_other_names_do_not_mix() -> None:
    """Joint states of two publishers that take turns are each read with their own names."""
    reader = JointStateReader()
    for _ in range(2):
        for names in (["a", "b"], ["b", "a"], ["c"]):
            assert reader.read(serialize_message(JointState(name=names, position=[1.0] * len(names)))).names == tuple(
                names
            )


@pytest.mark.parametrize("reported", [True, False])
def test_imu_reads_as_rclpy_reads_it(reported: bool) -> None:
    """Orientation, rate and acceleration come out; an orientation marked by -1 in its covariance is None
    (sensor_msgs/Imu).
    """
    reader = ImuReader()
    for k in range(3):
        message = Imu()
        message.header.frame_id, message.header.stamp.sec = "imu_link", k
        message.orientation.w, message.orientation.x = 0.8, 0.6
        message.orientation_covariance[0] = 0.0 if reported else -1.0
        message.angular_velocity.y, message.linear_acceleration.z = 0.1 * k, 9.8
        values = reader.read(serialize_message(message))
        assert values.stamp == k * 10**9 and values.frame == "imu_link"
        assert values.quat_xyzw == ((0.6, 0.0, 0.0, 0.8) if reported else None)
        assert values.rate == (0.0, 0.1 * k, 0.0) and values.acceleration == (0.0, 0.0, 9.8)


def test_written_messages_are_what_rclpy_reads() -> None:
    """Each writer's bytes deserialise to the values put in, and only to those."""
    joints = JointStateWriter(["a", "bb"], position=True, velocity=True)
    joints.position[:], joints.velocity[:] = (1.0, 2.0), (3.0, 4.0)
    message = deserialize_message(joints.serialised(STAMP), JointState)
    assert (message.header.stamp.sec, message.header.stamp.nanosec) == (12, 345_678_901)
    assert list(message.position) == [1.0, 2.0] and list(message.velocity) == [3.0, 4.0] and not message.effort
    command = JointStateWriter(["x"], effort=True)
    command.effort[:] = -7.0
    assert list(deserialize_message(command.serialised(0), JointState).effort) == [-7.0]
    odometry = OdometryWriter("odom", "base_link")
    odometry.pose[:], odometry.twist[:] = np.arange(7.0), np.arange(10.0, 16.0)
    read = deserialize_message(odometry.serialised(STAMP), Odometry)
    assert (read.header.frame_id, read.child_frame_id) == ("odom", "base_link")
    assert (read.pose.pose.position.z, read.pose.pose.orientation.x, read.pose.pose.orientation.w) == (2.0, 3.0, 6.0)
    assert (read.twist.twist.linear.x, read.twist.twist.angular.z) == (10.0, 15.0)
    assert not read.pose.covariance.any() and not read.twist.covariance.any()
    imu = ImuWriter("imu_link", oriented=True)
    imu.values[0:4], imu.values[13:16], imu.values[25:28] = (0, 0, 0, 1), (1, 2, 3), (4, 5, 6)
    measured = deserialize_message(imu.serialised(1), Imu)
    assert (measured.orientation.w, measured.angular_velocity.z, measured.linear_acceleration.x) == (1.0, 3.0, 4.0)
    assert deserialize_message(ClockWriter().serialised(STAMP), Clock).clock.nanosec == 345_678_901
