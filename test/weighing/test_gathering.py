"""What is gathered from the senses' own messages shows how it truly moved, whatever gets lost on the way."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from ballbal_ros.commands.simulated_weighing import SimulatedWeighing
from ballbal_ros.errors import BallbalError
from ballbal_ros.weighing.gathering import LONGEST_GAP, Gathering
from ballbal_ros.weighing.record import Record
from helpers.rehearsing import files
from helpers.robots import reach


@pytest.mark.parametrize("lost", [0.0, 0.33])
def test_rows_show_how_it_truly_moved(lost: float):
    """With and without a third of all messages lost, each sense for itself: the ball is within 0.2 mm of the simulated
    one while it rolls a decimetre to and fro; lean and heading rate as the loop's own; a row for every period.
    """
    robot = SimulatedWeighing(files(), reach().first, 1)
    gathering, random = Gathering(files().description, Record(robot.loop.period)), np.random.default_rng(1)
    measure, first, true = robot.robot.measurement, len(robot.record), []

    def overheard() -> Any:
        seen, there = measure(), random.random(3) >= lost
        if there[0]:
            gathering.imu(seen.stamp, seen.imu_rate.tolist(), seen.imu_acceleration.tolist())
        if there[1]:
            gathering.drive(seen.stamp, seen.drive_angle)
        if there[2]:
            gathering.arms(seen.stamp, seen.arm_position)
        true.append((seen.stamp, *robot.robot.data.qpos[:2].tolist()))
        return seen

    robot.robot.measurement = overheard
    for speed in (0.0, 0.1, -0.1, 0.0):
        robot.roll(speed, 0.5 * speed)
        for _ in range(4):
            robot.wait(0.25)
            gathering.gather()
    record, when, place = gathering.record, np.array(true)[:, 0], np.array(true)[:, 1:]
    assert len(record) > 0.98 * (len(robot.record) - first) and gathering.share == pytest.approx(1.0 - lost, abs=0.05)
    assert np.diff(record.times) == pytest.approx(robot.loop.period)
    ball = record.recent(1e9)[1]
    expected = np.stack([np.interp(record.times, when, column) for column in place.T], axis=-1)
    assert np.ptp(expected[:, 0]) > 0.05
    assert (ball - ball[0]) == pytest.approx(expected - expected[0], abs=2e-4)
    ours, loops = (each.motion(files().description) for each in (record, robot.record))
    begins = first + round((record.times[0] - robot.record.times[first]) / robot.loop.period)
    middle = slice(500, 1500)
    for name, within in (("lean", 5e-4), ("heading_rate", 3e-3), ("arm_position", 1e-4)):
        wanted = getattr(loops, name)[begins:][middle]
        assert getattr(ours, name)[middle] == pytest.approx(wanted, abs=within), name


def test_a_gap_is_marked_and_kept_out_of_the_swing():
    """Half a second without the IMU is a gap of the rows around it, and samples of a swing near it are left out; where
    little is left, that is told.
    """
    gathering, arms = Gathering(files().description, Record(0.002)), np.zeros(files().description.joint_count)
    for k in range(5000):
        time = 10.0 + 0.002 * k
        if not 2000 < k <= 2250:
            gathering.imu(time, (0.0, 0.0, 0.0), (0.0, 0.0, 9.81))
        gathering.drive(time, np.zeros(3))
        gathering.arms(time, arms)
    gathering.gather()
    record = gathering.record
    ((first, last),) = record.gaps
    assert (first, last) == (pytest.approx(2000, abs=1), pytest.approx(2251, abs=1)) and len(record) == 4999
    record.swings.append((0, len(record)))
    motion = record.motion(files().description)
    assert len(record.moving(motion, 10.0)) == pytest.approx(75, abs=2)
    record.swings[:] = [(1000, 3000)]
    with pytest.raises(BallbalError, match="1 gaps in what was heard leave less than half"):
        record.moving(motion, 10.0)


def test_a_gap_too_long_or_a_clock_that_goes_back_is_told():
    """What can't be bridged is an error that names the topic; a message that comes twice is passed over."""
    one = Gathering(files().description, Record(0.002))
    one.drive(1.0, np.zeros(3))
    one.drive(1.0, np.ones(3))
    one.drive(1.0 + 0.9 * LONGEST_GAP, np.zeros(3))
    with pytest.raises(BallbalError, match="drive_states: was silent for 1.10 s"):
        one.drive(3.0, np.zeros(3))
    with pytest.raises(BallbalError, match="went back in time by 1.40 s"):
        one.drive(0.5, np.zeros(3))
