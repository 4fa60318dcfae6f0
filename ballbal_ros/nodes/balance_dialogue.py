"""What ``arm_compensation`` asks the balance node: will it follow this lean plan? Only then the arms go.

Times are of the steady clock, s, but in proposals, which have stamps.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import attrs

from ballbal_ros.balance.guard import BALANCING, ENGAGING, STOPPING
from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.nodes.lean_trajectory import lean_plan_message, withdrawal_message
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.plan_report import PlanReports
from ballbal_ros.nodes.trajectories import path_message

FOUND_LOAD, STOP, PULL = "hand_load_estimate", "emergency_stop", "hand_wrench_plan"
_FOLLOWING = (ENGAGING, BALANCING, STOPPING)


@attrs.frozen(eq=False)
class _Asked:
    """A proposal that waits for its acknowledgement; ``what`` asked for it with the stamp ``stamp``.

    ``lean_plan``: the stamp that the balance node knows it by; ``answered``: how many plans it had answered before.
    """

    proposal: Proposal
    what: str
    stamp: str
    deadline: float
    lean_plan: str
    answered: str

    def answer(self, values: Mapping[str, str]) -> str | None:
        """What ``balance_state`` says of it: empty once it is taken up, the reason where it is refused; None while
        there is no answer.
        """
        if values.get("plans answered", "") == self.answered:
            return None
        # A plan that is to replace another has its stamp: when it is refused, the other's is there still.
        if values.get("refused plan") == self.lean_plan:
            return values.get("refusal") or "refused by the balance node"
        return "" if values.get("plan") == self.lean_plan else None


class BalanceDialogue:
    """Asks for one plan at a time, and answers with a report whoever wanted it.

    ``state`` of the balance node, empty before it was heard of; ``answered``: how many plans it has answered, as told.
    ``to_balance`` and ``to_arms`` publish ``lean_plan`` and ``arm_command`` of the joints ``names``; what is let go is
    handed to ``keep``.
    """

    def __init__(
        self,
        schedule: ArmSchedule,
        names: Sequence[str],
        to_balance: Any,
        to_arms: Any,
        reports: PlanReports,
        keep: Callable[[Proposal], None],
    ) -> None:
        self._schedule, self._names, self._reports, self._keep = schedule, names, reports, keep
        self._to_balance, self._to_arms = to_balance, to_arms
        self._asked: _Asked | None = None
        self.state, self.answered = "", ""

    @property
    def waits(self) -> bool:
        """Whether an answer is still to come: nothing else can be asked."""
        return self._asked is not None

    def ask(self, proposal: Proposal, what: str, stamp: str) -> None:
        """Have a proposal taken up that ``what`` asked for with the stamp ``stamp``. Without a lean plan nobody has to
        be asked, and a balance node that follows none does not keep the arms from a stop.
        """
        deadline, lean_start = time.monotonic() + self._timeout, to_time(proposal.lean_start)
        asked = _Asked(proposal, what, stamp, deadline, stamp_text(lean_start), self.answered)
        if proposal.plan is None or (what == STOP and self.state not in _FOLLOWING):
            self._let_go(asked)
        else:
            self._asked = asked
            self._to_balance.publish(lean_plan_message(proposal.plan, lean_start))

    @property
    def _timeout(self) -> float:
        return self._schedule.parameters.answer_timeout

    def hear(self, state: str, values: Mapping[str, str]) -> None:
        """What the balance node says of itself and of plans."""
        self.state, self.answered = state, values.get("plans answered", "")
        answer = None if self._asked is None else self._asked.answer(values)
        if answer:
            self._give_up(answer)
        elif self._asked is not None and answer is not None:
            self._let_go(self._asked)

    def check_time(self) -> None:
        """Give up on an answer that is overdue."""
        if self._asked is not None and time.monotonic() > self._asked.deadline:
            what = f"lean_plan: no acknowledgement in balance_state within {self._timeout:g} s"
            self.take_back(f"{what}; nothing moves because of it: is balance active?")

    def take_back(self, reason: str) -> None:
        """Give up what is asked for, if anything is, and have the balance node forget it, should it take it up after
        all: it must not lean for arms that stay. A plan made anew for a motion that goes ahead it may take up.
        """
        asked = self._asked
        if asked is None:
            return
        if asked.what != FOUND_LOAD:
            self._to_balance.publish(withdrawal_message(to_time(asked.proposal.lean_start)))
        self._give_up(reason)

    def _give_up(self, reason: str) -> None:
        """Forget what is asked for, if anything is, and report why; nothing moves because of it."""
        asked, self._asked = self._asked, None
        if asked is not None:
            self._reports.refuse(asked.what, asked.stamp, reason)

    def _let_go(self, asked: _Asked) -> None:
        proposal = asked.proposal
        self._asked = None
        self._schedule.accept(proposal)
        if asked.what not in (PULL, FOUND_LOAD):
            self._to_arms.publish(path_message(proposal.path, self._names, to_time(proposal.arms_start)))
        # Only once it is under way: what did not go must not be taken for what did.
        self._keep(proposal)
        self._reports.accept_proposal(asked.what, asked.stamp, proposal, self._schedule.load_changes)
