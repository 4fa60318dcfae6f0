"""What balance finds in the hands goes out on ``hand_load_estimate``, and planners plan with what balance believes."""

from __future__ import annotations

from typing import Any

import pytest

from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.nodes.hand_loads import HandLoads
from ballbal_ros.nodes.messages import load_of, seconds
from ballbal_ros.simulation.rehearsal import Rehearsal, plan_story
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


def test_a_plan_in_waiting_and_what_is_believed_are_of_one_mind():
    """A plan waits, and the hands are found to hold more than it was made with: they are believed to. Where it has not
    been made anew when it is about to begin, what it was made with is believed again, and planners are told.
    """
    truth = parse_truth(["left_hand.load=2.2", "right_hand.load=2.2"], files().description)
    told = story("reach")
    timeline = Timeline.of(told, files().compensation, None, True)
    run = Rehearsal(files(), told, "planned", timeline, truth=truth)
    run.watch.see = lambda now: ()  # the node's own watch does it here
    kept = Kept()
    loads = HandLoads(kept)
    loads.begin(run.loop, -1)
    period, tick = run.loop.period, 0

    def until(time: float) -> None:
        nonlocal tick
        while tick * period < time - 1e-9:
            run.step()
            if tick % 10 == 0:
                loads.see(round(1e9 * run.robot.time), run.loop)
            tick += 1

    until(1.5)
    run.loop.add_plan(timeline.lean, plan_story(files(), told, timeline))
    until(timeline.lean - 1.0)
    assert all(load.mass == pytest.approx(2.2, rel=0.03) for load in run.loop.body.loads.values())
    until(timeline.lean + 0.1)
    assert [load.mass for load in run.loop.body.loads.values()] == [2.0, 2.0]
    assert [message.inertia.m for message in kept.messages[-2:]] == [2.0, 2.0]
    assert seconds(kept.messages[-1].header.stamp) == pytest.approx(timeline.lean - 0.1, abs=0.03)
