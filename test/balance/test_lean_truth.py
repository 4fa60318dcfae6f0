"""The lean that the loop goes by is the true one, whatever pulls at the robot that nobody told of."""

from __future__ import annotations

import numpy as np

from ballbal_ros.simulation.rehearsal import Rehearsal
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from helpers.rehearsing import files, story


def test_a_load_that_nobody_told_of_does_not_tilt_the_measured_lean():
    """With 0.4 kg too much in the hands the ball rolls until the trim has found it out; the accelerometer feels that,
    and the lean stays true to 0.4 mrad all the same (0.4 mrad are as much as 0.14 N m). So the trim finds the moment
    that the load makes, less what the robot has put down to its hands by then: within 0.15 N m.
    """
    truth = parse_truth(["left_hand.load_factor=1.1", "right_hand.load_factor=1.1"], files().description)
    run = Rehearsal(files(), story("still"), "still", Timeline.of(story("still"), files().compensation), truth=truth)
    robot, loop = run.robot, run.loop
    off = []
    for _ in range(int(4.5 * files().balance.loop.rate)):
        run.step()
        if robot.time > 1.5:
            off.append(np.subtract(loop.lean, robot.lean))
    assert np.abs(off).max() < 4e-4
    reach = loop.body.hand_position("left_hand", story("still").posture)[0]
    found = sum(load.mass for load in loop.body.loads.values()) - sum(load.mass for load in story("still").start_loads)
    assert abs(loop.outside_moment[1] - (0.4 - found) * 9.80665 * reach) < 0.15
