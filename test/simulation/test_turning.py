"""Turning on the spot, as fast as it may be asked to."""

from __future__ import annotations

import math

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.simulation.rehearsal import Rehearsal
from ballbal_ros.simulation.timeline import Timeline
from helpers.rehearsing import files, story


def test_it_stands_while_it_turns_as_fast_as_it_may() -> None:
    """12 s at `limits.heading_rate` of robot.yaml: it balances, and the ball stays within 10 mm. (At 1.5 rad/s the
    demo robot falls within 40 s.)
    """
    what, fastest = story("still"), files().description.parameters.limits.heading_rate
    run = Rehearsal(files(), what, "still", Timeline.of(what, files().compensation))
    robot, loop, travel = run.robot, run.loop, 0.0
    while robot.time < 15.0:
        run.step()
        if robot.time > 3.0:
            assert loop.guard.state == BALANCING and not robot.fell
            loop.reference.set_velocity(0.0, 0.0, fastest)
            travel = max(travel, math.hypot(*robot.ball_position[:2].tolist()))
    assert abs(loop.attitude.rates[2] - fastest) < 0.02 and travel <= 0.01
