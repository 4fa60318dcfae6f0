"""Plans that wait for their turn."""

from __future__ import annotations

import pytest

from ballbal_ros.errors import PlanRefused
from ballbal_ros.nodes.plan_queue import PlanQueue


def filled(count: int, patience: float = 10.0) -> PlanQueue:
    queue = PlanQueue()
    for number in range(count):
        queue.add("arm_plan", number, float(number), patience, earlier=number == 0)
    return queue


def test_they_are_answered_in_the_order_in_which_they_came() -> None:
    """First come, first served, each with what is known of it; then there is none."""
    queue = filled(3)
    sent = [queue.next(5.0, known=True) for _ in range(4)]
    assert [(s.message, s.earlier) for s in sent if s is not None] == [(0, True), (1, False), (2, False)]
    assert sent[-1] is None and len(queue) == 0


def test_a_plan_waits_for_what_must_be_known_but_not_for_ever() -> None:
    """Until its patience is over it stays in its place; then it is handed out all the same, to be refused."""
    queue = filled(2)
    assert queue.next(9.9, known=False) is None and len(queue) == 2
    late = queue.next(10.0, known=False)
    assert late is not None and late.message == 0
    assert queue.next(10.9, known=False) is None
    soon = queue.next(10.9, known=True)
    assert soon is not None and soon.message == 1


def test_little_patience_is_enough_for_discovery() -> None:
    """However soon an answer should come, others get the time to be discovered."""
    assert filled(1, patience=0.1).next(2.0, known=False) is None


def test_too_many_are_refused_and_those_that_wait_stay() -> None:
    """The eleventh is refused in words."""
    queue = filled(10)
    with pytest.raises(PlanRefused, match="came while 10 others wait; wait for their plan_report"):
        queue.add("arm_plan", 10, 10.0, 10.0, earlier=False)
    assert len(queue) == 10
