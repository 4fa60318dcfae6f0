"""The balance node is asked first: arms go once it has taken the lean plan up, and not otherwise."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.motion.arm_motion import ArmState, Proposal, Wanted
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.motion.spline import ArmPath, path_through_waypoints
from ballbal_ros.nodes.balance_dialogue import FOUND_LOAD, STOP, BalanceDialogue
from ballbal_ros.nodes.messages import stamp_text, to_time
from helpers.robots import compensation, shelver

STILL = np.zeros(shelver().joint_count)


@attrs.define
class Ear:
    """Stands for both publishers and the reports, and keeps what was said, in order."""

    said: list[str] = attrs.field(factory=list)

    def publish(self, message: Any) -> None:
        what = "lean_plan" if "lean_roll" in message.joint_names else "arm_command"
        self.said.append(what if message.points else f"no {what} of {stamp_text(message.header.stamp)}")

    def keep(self, proposal: Proposal) -> None:
        self.said.append("kept")

    def refuse(self, what: str, stamp: str, reason: str) -> None:
        self.said.append(f"{what} of {stamp} refused: {reason}")

    def accept_proposal(self, what: str, stamp: str, proposal: Proposal, load_changes: int) -> None:
        self.said.append(f"{what} of {stamp} accepted")


@attrs.define
class Talk:
    """A dialogue that has heard a balance node which balances and has answered two plans, and what it led to."""

    ear: Ear
    schedule: ArmSchedule
    dialogue: BalanceDialogue
    proposal: Proposal

    @property
    def stamp(self) -> str:
        return stamp_text(to_time(self.proposal.lean_start))

    def answer(self, count: str, **values: str) -> None:
        pairs = {key.replace("_", " "): value for key, value in values.items()}
        self.dialogue.hear("balancing", {"plans answered": count, **pairs})


def talk(kind: str = "planned", timeout: float = 60.0) -> Talk:
    def nod(state: ArmState) -> ArmPath:
        points = np.stack((state.position, state.position))
        points[1, shelver().joint_index("left_shoulder_pitch", "test")] -= 0.2
        return path_through_waypoints([0.0, 0.8], points, [STILL, STILL], [STILL, STILL])

    schedule = ArmSchedule(shelver(), attrs.evolve(compensation(), compensation=kind, answer_timeout=timeout))
    ear, names = Ear(), shelver().joint_names
    made = Talk(
        ear,
        schedule,
        BalanceDialogue(schedule, names, ear, ear, ear, ear.keep),  # type: ignore[arg-type]
        schedule.plan(Wanted(0.0, 0.8, nod), 1.0, STILL),
    )
    made.answer("2")
    return made


def test_the_arms_go_once_the_lean_plan_is_taken_up() -> None:
    """First the lean plan alone; a state with another count or another plan is no answer; then the arms and the
    report.
    """
    had = talk()
    had.dialogue.ask(had.proposal, "arm_plan", "0")
    had.answer("2", plan=had.stamp)
    had.answer("3", plan="1.000000000")
    assert had.ear.said == ["lean_plan"] and had.dialogue.waits and had.schedule.idle
    had.answer("4", plan=had.stamp)
    assert had.ear.said == ["lean_plan", "arm_command", "kept", "arm_plan of 0 accepted"]
    assert not had.dialogue.waits and not had.schedule.idle


def test_a_refusal_is_handed_on_and_nothing_moves() -> None:
    """Also where the plan that it was to replace, of the same stamp, is in force still."""
    had = talk()
    had.dialogue.ask(had.proposal, "arm_plan", "0")
    had.answer("3", plan=had.stamp, refused_plan=had.stamp, refusal="lean_plan: too late")
    assert had.ear.said == ["lean_plan", "arm_plan of 0 refused: lean_plan: too late"]
    assert not had.dialogue.waits and had.schedule.idle


def test_no_answer_is_a_refusal() -> None:
    """After the time that an answer has, and not before."""
    for timeout, waits in ((60.0, True), (-1.0, False)):
        had = talk(timeout=timeout)
        had.dialogue.ask(had.proposal, "arm_plan", "0")
        had.dialogue.check_time()
        assert had.dialogue.waits is waits
        assert ("no acknowledgement" in had.ear.said[-1]) is not waits and "arm_command" not in had.ear.said
        # Should it be taken up after all, it must not lean for arms that stay.
        assert (f"no lean_plan of {had.stamp}" in had.ear.said) is not waits


def test_a_plan_made_anew_is_not_taken_back() -> None:
    """It has the stamp of the one that it was to replace, whose arms go: either may be followed."""
    had = talk(timeout=-1.0)
    had.dialogue.ask(had.proposal, FOUND_LOAD, "0")
    had.dialogue.check_time()
    assert not had.dialogue.waits and not any(said.startswith("no lean_plan") for said in had.ear.said)


@pytest.mark.parametrize(("kind", "state", "what"), [("none", "balancing", "arm_plan"), ("planned", "tripped", STOP)])
def test_nobody_is_asked_where_nobody_follows(kind: str, state: str, what: str) -> None:
    """Without a lean plan, or for a stop while balance is off, the arms' command goes out at once."""
    had = talk(kind)
    had.dialogue.hear(state, {})
    had.dialogue.ask(had.proposal, what, "0")
    assert had.ear.said == ["arm_command", "kept", f"{what} of 0 accepted"] and not had.dialogue.waits
