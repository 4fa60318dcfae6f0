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
    before = Predecessor()
    for at, state in enumerate(states):
        before.heard(float(at), state)
    assert before.was_there("0", planned=False) is expected


@pytest.mark.parametrize(("answered", "expected"), [("", False), ("0", False), ("1", True)])
def test_with_plans_the_balance_nodes_count_tells(answered: str, expected: bool) -> None:
    """The balance node has been asked about a plan before, or it has not."""
    before = Predecessor()
    before.heard(0.0, "balancing")
    assert before.was_there(answered, planned=True) is expected
