"""What a recording shows, against motions that are known."""

from __future__ import annotations

import numpy as np

from ballbal_ros.motion.spline import ArmPath
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.weighing.procedure import rests
from ballbal_ros.weighing.record import Record
from ballbal_ros.weighing.servo import identify_servo
from helpers.robots import shelver

PERIOD = 0.002
SLOW = 2.0 * np.pi / 2.4


def swaying(shown_error: float, bias: float) -> tuple[Record, Array]:
    """A body that pitches by 30 mrad over a ball that stays: the record, and its true pitch [N].

    The lean shown is off by ``shown_error``, the gyro by ``bias`` rad/s.
    """
    description, record = shelver(), Record(PERIOD)
    times = PERIOD * np.arange(5000)
    pitch = 0.03 * np.sin(SLOW * times)
    rate, acceleration = 0.03 * SLOW * np.cos(SLOW * times), -SLOW**2 * pitch
    x, y, z = description.parameters.imu.position
    back = description.rotation_imu_in_base.T
    for k, now in enumerate(times.tolist()):
        sin, cos, w, turn = np.sin(pitch[k]), np.cos(pitch[k]), rate[k], acceleration[k]
        force = np.array([-GRAVITY * sin + turn * z - w * w * x, 0.0, GRAVITY * cos - turn * x - w * w * z])
        imu = np.concatenate((back @ np.array([0.0, w + bias, 0.0]), back @ force))
        record.add(now, (0.0, pitch[k] + shown_error), 0.0, (0.0, 0.0), imu, np.zeros(description.joint_count))
    return record, pitch


def test_the_lean_is_found_whatever_the_loop_shows_and_the_gyro_drifts():
    """A lean shown wrongly by 5 mrad and a gyro that is off by 0.3 mrad/s leave less than 0.1 mrad."""
    record, pitch = swaying(5e-3, 3e-4)
    motion = record.motion(shelver())
    inner = slice(1500, 3500)
    smooth = np.exp(-0.5 * (SLOW * 0.08) ** 2)  # what smoothing by 80 ms takes off a sine
    assert np.abs(motion.lean[inner, 1] - smooth * pitch[inner]).max() < 1e-4
    assert np.abs(motion.lean_acceleration[inner, 1] + SLOW**2 * smooth * pitch[inner]).max() < 2e-3


def test_rest_is_when_the_ball_stays():
    """A ball that creeps by 1 mm/s rests, one that rolls with 2 cm/s does not."""
    for speed, resting in ((0.001, True), (0.02, False)):
        record = Record(PERIOD)
        for k in range(400):
            record.add(k * PERIOD, (0.0, 0.0), 0.0, (speed * k * PERIOD, 0.0), np.zeros(6), np.zeros(12))
        assert rests(record, 0.004) is resting


def followed(kind: str, bandwidth: float) -> Record:
    """A record of one move whose servos all follow so: integrated in fine steps, not by the identification's way."""
    record, count = Record(PERIOD), shelver().joint_count
    ends = np.stack((np.zeros(count), np.linspace(0.2, 0.6, count)))
    path = ArmPath.through(np.array([0.0, 1.0]), ends, 0.0 * ends, 0.0 * ends)
    q, v, fine = np.zeros(count), np.zeros(count), PERIOD / 8
    ticks = round(1.5 / PERIOD)
    commanded, rates, _ = path.sample((np.arange(8 * ticks) + 0.5) * fine)
    for k in range(ticks):
        record.add(k * PERIOD, (0.0, 0.0), 0.0, (0.0, 0.0), np.zeros(6), q.copy())
        for step in range(8 * k, 8 * k + 8):
            wanted, rate = commanded[step], rates[step]
            pull = bandwidth**2 * (wanted - q) - 2.0 * bandwidth * (v - (rate if kind != "position" else 0.0))
            v = v + fine * pull
            q = q + fine * v
    record.moves.append((0.0, path))
    return record


def test_a_servo_is_told_by_what_it_makes_of_a_move():
    """Kind and bandwidth come out for servos on position, and on position and rate."""
    for kind, bandwidth in (("position", 20.0), ("position_velocity", 12.0)):
        servo = identify_servo(followed(kind, bandwidth), shelver())
        assert servo.kind == kind
        np.testing.assert_allclose(servo.bandwidth, bandwidth, rtol=0.02)
        assert np.all(servo.left < 0.1 * servo.ideal_left)
        arm = servo.into(shelver()).parameters.arm
        assert arm.servo == kind and len(arm.joints) == shelver().joint_count
