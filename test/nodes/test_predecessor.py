"""Whether an arm_compensation that starts follows one that may have answered plans."""

from __future__ import annotations

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.nodes.predecessor import Predecessor


@pytest.mark.parametrize(
    ("states", "expected"),
    [(("inactive", "standby", "balancing"), False), (("balancing", "balancing"), True), (("stopping",), True)],
)
def test_without_compensation_it_is_the_first_state_heard_that_tells(states: tuple[str, ...], expected: bool) -> None:
    """A robot that came to balance only since then had nobody to answer plans before; one that balanced already may."""
    before = Predecessor(0.0)
    for at, state in enumerate(states):
        before.heard(float(at), state)
    assert before.was_there("0", planned=False) is expected


@pytest.mark.parametrize(("answered", "expected"), [("", False), ("0", False), ("1", True)])
def test_with_plans_the_balance_nodes_count_tells(answered: str, expected: bool) -> None:
    """The balance node has been asked about a plan before, or it has not."""
    before = Predecessor(0.0)
    before.heard(0.0, "balancing")
    assert before.was_there(answered, planned=True) is expected


def test_before_the_balance_node_is_heard_of_nothing_is_settled() -> None:
    """That nobody has told of a predecessor yet does not mean that there was none."""
    before = Predecessor(0.0)
    assert not before.was_there("", planned=True)
    before.heard(9.0, "balancing")
    assert before.was_there("3", planned=True) and before.was_there("0", planned=True)


@pytest.mark.parametrize(("now", "age", "expected"), [(100.2, 0.1, False), (100.2, 0.3, True), (190.0, 120.0, True)])
def test_what_is_older_than_the_node_was_sent_before_it(now: float, age: float, expected: bool) -> None:
    """However long after its start a message comes, its age tells, not when it comes."""
    assert Predecessor(100.0).may_have_heard(now, age) is expected
    assert Predecessor(100.0).may_have_heard(now, float("inf"))
