"""The table of answers is whole: every row can be met, and its steps only ever go further."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

from ballbal_ros.balance import answer_table
from ballbal_ros.balance.answer_table import ANSWERS
from ballbal_ros.balance.answers import DEEDS, GO_ON, STOP, harder
from ballbal_ros.balance.watch import Watch
from ballbal_ros.simulation.fault_kinds import KINDS
from ballbal_ros.simulation.faults import CHANGES, ON_DRIVE

KEYS = list(ANSWERS)


@pytest.mark.parametrize("key", KEYS, ids=" ".join)
def test_an_answer_only_goes_further_with_time(key: tuple[str, str]):
    """Steps are in order of time, and none is milder than the one before."""
    steps = ANSWERS[key].steps
    assert steps and steps[0].after == 0.0
    for before, after in zip(steps, steps[1:], strict=False):
        assert before.after < after.after and harder(before.deed, after.deed) == after.deed != before.deed
    for step in steps:
        assert step.deed in DEEDS and ANSWERS[key].deed(step.after) == step.deed


def test_whatever_the_loop_calls_wrong_has_a_row():
    """Each name that balance/ hands to the watch stands in the table; without a row it would be a KeyError."""
    folder = Path(answer_table.__file__).parent
    known = {wrong for _, wrong in ANSWERS}
    said = set()
    for name in ("checks", "encoders", "clock", "senses", "judge"):
        tree = ast.parse((folder / f"{name}.py").read_text(encoding="utf-8"))
        texts = {n.value for n in ast.walk(tree) if isinstance(n, ast.Constant) and isinstance(n.value, str)}
        said |= texts & known
    by_loop = {wrong for (_, wrong), row in ANSWERS.items() if row.by == "BalanceLoop"} - {"torque not a number"}
    assert by_loop <= said | {"orientation"}


def test_every_input_of_the_robots_nodes_has_an_answer():
    """Whatever topic a node of the robot subscribes to stands in the table; the IMU's is named by a parameter."""
    nodes = Path(answer_table.__file__).parents[1] / "nodes"
    heard = set()
    for path in [*nodes.glob("balance*.py"), *nodes.glob("arm_*.py"), nodes / "whole_body_kinematics.py"]:
        for call in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(call, ast.Call) and ast.unparse(call.func).endswith(("subscribe", "subscribe_with_age")):
                heard |= {word.value for word in call.args if isinstance(word, ast.Constant)}
    assert {"joint_states", "lean_plan", "arm_plan", "odom"} <= heard
    assert heard <= {row.input for row in ANSWERS.values()}


def test_every_fault_can_be_made_and_has_a_row():
    """The campaign's kinds are those that the simulated robot can have, and each is answered by a row of the table."""
    assert {*KINDS} == {*CHANGES, *ON_DRIVE}
    assert all(kind.row in ANSWERS for kind in KINDS.values())


def test_the_watch_takes_the_hardest_answer_and_forgets_after_a_few_good_samples():
    """Alternating troubles of one input count as one; five good samples in a row end it."""
    watch, now = Watch(), 0.0
    for tick in range(60):
        now = 0.002 * tick
        watch.begin()
        watch.see(now, "imu", "frozen" if tick % 2 else "not finite")
        watch.see(now, "drive_states", "")
    assert watch.deed == STOP and watch.reason.startswith("imu")
    for _ in range(5):
        now += 0.002
        watch.begin()
        watch.see(now, "imu", "")
    assert watch.quiet and watch.deed == GO_ON
