"""What time waits for in lock-step, besides the drive command."""

from __future__ import annotations

from typing import Any

import pytest

pytest.importorskip("rclpy")

from types import SimpleNamespace

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue

from ballbal_ros.nodes.lock_step import LockStep, text_nanoseconds


def lock(answered_by: int = 1) -> LockStep:
    node: Any = SimpleNamespace(count_publishers=lambda topic: answered_by if topic == "plan_report" else 0)
    return LockStep(node, 2_000_000, wait_for_plan=False)


def report(requested: str) -> DiagnosticArray:
    values = [KeyValue(key="requested", value=requested)]
    return DiagnosticArray(status=[DiagnosticStatus(name="emergency_stop", values=values)])


def waits(step: LockStep) -> bool:
    return "emergency stop" in step.silent(0, support=False)


def test_time_waits_for_the_answer_to_an_emergency_stop() -> None:
    """From the press to its first report, whichever of the two comes first; what is told of it again counts once."""
    step = lock()
    assert not waits(step)
    step.emergency_stop_came(True)
    step.emergency_stop_came(True)
    assert waits(step)
    step.plan_report_came(report("1.5"))
    assert not waits(step)
    step.plan_report_came(report("1.5"))
    step.emergency_stop_came(False)
    step.emergency_stop_came(True)
    assert waits(step)
    step.plan_report_came(report("1.5"))
    assert not waits(step)
    step.emergency_stop_came(False)
    step.plan_report_came(report("7.25"))
    step.emergency_stop_came(True)
    assert not waits(step)


def test_without_anybody_who_answers_plans_time_goes_on() -> None:
    """A balance without arms is stopped, too."""
    step = lock(answered_by=0)
    step.emergency_stop_came(True)
    assert not waits(step)


@pytest.mark.parametrize(
    ("text", "stamp"),
    [
        ("7.000000001", 7_000_000_001),
        ("2147483647.999999999", 2_147_483_647_999_999_999),
        *((text, -1) for text in ("", "none", "7", "7.", ".5", "-1.000000000", "7.0e1", "²." + "0" * 9)),
        ("9" * 5000 + ".0", -1),
    ],
)
def test_a_stamp_in_words_is_read_or_is_none(text: str, stamp: int) -> None:
    """``sec.nanosec`` in ns; -1 for anything else, however long it is."""
    assert text_nanoseconds(text) == stamp
