"""What balance finds in the hands goes out on ``hand_load_estimate``, and planners plan with what balance believes."""

from __future__ import annotations

from typing import Any

import pytest

from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.nodes.hand_loads import HandLoads
from ballbal_ros.nodes.messages import load_of, seconds
from ballbal_ros.simulation.rehearsal import Rehearsal
from ballbal_ros.simulation.timeline import Timeline
from ballbal_ros.simulation.truth import parse_truth
from helpers.rehearsing import files, story


class Kept:
    """In the place of a node and its publisher: keeps what is published."""

    def __init__(self) -> None:
        self.messages: list[Any] = []

    def create_publisher(self, *_: Any) -> Kept:
        return self

    def publish(self, message: Any) -> None:
        self.messages.append(message)


def test_what_is_found_is_told_and_believed_from_its_stamp_on():
    """Standing with 10 % more in the hands than said: estimates go out; those with a stamp are the loop's own loads
    from then on, within 3 %, and the planner's; ``balance_state`` gets their standard errors.
    """
    truth = parse_truth(["left_hand.load=2.2", "right_hand.load=2.2"], files().description)
    told = story("still")
    run = Rehearsal(files(), told, "still", Timeline.of(told, files().compensation, None, True), truth=truth)
    run.watch.see = lambda now: ()  # the node's own watch does it here
    kept = Kept()
    loads = HandLoads(kept)
    loads.begin(run.loop, -1)
    for tick in range(int(7.0 * files().balance.loop.rate)):
        run.step()
        if tick % 10 == 0:
            loads.see(round(1e9 * run.robot.time), run.loop)
    believed = [message for message in kept.messages if seconds(message.header.stamp) > 0.0]
    assert {message.header.frame_id for message in believed} == {"left_hand", "right_hand"}
    assert len(kept.messages) > len(believed)
    schedule = ArmSchedule(files().description, files().compensation)
    for message in believed:
        stamp, load = load_of(message, files().description)
        schedule.find_load(stamp, load, stamp)
    assert schedule.load_changes == 0
    held = {load.hand: load for load in schedule._loads.held_at(10.0)}
    for hand, load in run.loop.body.loads.items():
        assert load.mass == pytest.approx(2.2, rel=0.03)
        assert held[hand].mass == pytest.approx(load.mass, abs=1e-9)
    assert 0.0 < float(loads.notes["left_hand load error"]) < 0.15
