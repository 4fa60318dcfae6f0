"""``ballbal checkup``: what it says of broken files, of a machine, and of what nodes tell; without any bus."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import pytest

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.commands.checkup import checkup
from ballbal_ros.commands.checkup_files import check_files
from ballbal_ros.commands.checkup_machine import _fifo, _governors, _load, _memory, check_bus
from ballbal_ros.commands.checkup_stack import NEEDED, Heard, Told, check_stack
from ballbal_ros.commands.main import main
from ballbal_ros.declaration import load
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import LOOK, OK, WRONG, Finding, graded
from helpers.robots import CONFIG

SHELVER = CONFIG / "shelver"
WELL = {
    "loop rate Hz": "500",
    "late mean ms": "0.05",
    "late worst ms": "0.8",
    "age imu/data s": "0.002",
    "age drive_states s": "0.002",
    "age joint_states s": "0.002",
    "scheduling": "SCHED_FIFO 80, memory locked",
    "trim N m": "1.0",
    "torque reserve": "0.9",
    "phase margin deg": "60",
    "delay margin ms": "17",
    "disk margin": "1",
}


def changed(tmp_path: Path, file: str, old: str, new: str) -> Path:
    """A copy of the demo robot's folder with one text replaced in one file."""
    folder = tmp_path / "robot"
    if not folder.exists():
        shutil.copytree(SHELVER, folder)
    text = (folder / file).read_text()
    assert old in text
    (folder / file).write_text(text.replace(old, new, 1))
    return folder


def not_ok(found: list[Finding]) -> dict[str, Finding]:
    return {finding.what: finding for finding in found if finding.verdict != OK}


def heard(messages: dict[str, str] | None = None, level: int = 0, state: str = "balancing", **more: object) -> Heard:
    """A stack at work, on which the balance node's values are changed."""
    nodes = {name: [Told(0.0, 0, "running", {})] for name in NEEDED}
    nodes["balance"] = [Told(0.0, level, state, {**WELL, **(messages or {})})]
    return Heard(nodes, **{"present": list(NEEDED), "commanders": ["/balance"], "waited": 3.0, **more})


def judged(of: Heard) -> dict[str, Finding]:
    return not_ok(check_stack(of, load(BalanceParameters, SHELVER / "balance.yaml")))


def test_the_demo_robots_files_are_in_order() -> None:
    """Every file of shelver loads, they agree, margins and reach of lean are kept: nothing to say."""
    _, found = check_files(SHELVER)
    assert not not_ok(found)
    assert {"mass model", "reach of lean", "lead-in", "margins"} <= {finding.what for finding in found}


@pytest.mark.parametrize(
    ("file", "old", "new", "what", "verdict", "says"),
    [
        ("balance.yaml", "lean: 0.012", "leen: 0.012", "balance.yaml", WRONG, "unknown parameter weights.leen"),
        ("balance.yaml", "delay: 0.002", "delay: 0.006", "delay of the loop", LOOK, "simulated 2 ms, .* 6 ms"),
        ("balance.yaml", "rate: 500.0", "rate: 250.0", "rate of the loop", WRONG, "loop_rate 500 Hz.* 250 Hz"),
        ("balance.yaml", "delay: 0.002", "delay: 0.03", "margins", WRONG, "it takes at"),
        ("robot.yaml", "drive_torque: 40.0", "drive_torque: 90.0", "drive torque", LOOK, "effort_limit gives"),
        ("robot.yaml", "lean: 0.35", "lean: 0.03", "reach of lean", LOOK, "are out of reach"),
        ("compensation.yaml", "lead_in: 1.6", "lead_in: 0.6", "lead-in", LOOK, "0.6 s, .* = 1.27 s"),
        ("shelver.urdf", "<mass ", "<mess ", "robot.yaml, URDF", WRONG, "mass"),
    ],
)
def test_what_is_wrong_in_files_is_said_with_what_would_do(
    file: str, old: str, new: str, what: str, verdict: str, says: str, tmp_path: Path
) -> None:
    """Each mistake is one line of its own, and the checks that don't depend on it are made all the same."""
    _, found = check_files(changed(tmp_path, file, old, new))
    line = not_ok(found)[what]
    assert line.verdict == verdict and line.do
    assert re.search(says, line.found), line.found
    assert len(found) > 4


def test_several_broken_files_are_all_told(tmp_path: Path) -> None:
    """The first broken file does not hide the second."""
    folder = changed(tmp_path, "balance.yaml", "rate: 500.0", "rate: fast")
    changed(tmp_path, "compensation.yaml", "tail: 1.6", "tail: -1.0")
    assert {"balance.yaml", "compensation.yaml"} <= set(not_ok(check_files(folder)[1]))


def test_a_folder_without_a_robot_is_bad_input(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """One line and exit status 2; also for a domain that is none."""
    for words in (["--robot", str(tmp_path)], ["--domain", "300"], ["--namespace", "a-b"]):
        monkeypatch.setattr("sys.argv", ["ballbal", "checkup", *words])
        with pytest.raises(SystemExit) as ended:
            main()
        assert ended.value.code == 2
        assert capsys.readouterr().err.count("\n") == 1


def test_it_works_without_a_stack_and_says_so(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Files and machine are checked alone; the screen says that no node was asked, and the JSON too."""
    file = tmp_path / "found.json"
    words = ["checkup", "--robot", str(SHELVER), "--wait", "0", "--json", str(file)]
    monkeypatch.setattr("sys.argv", ["ballbal", *words])
    with pytest.raises(SystemExit) as ended:
        main()
    found = json.loads(file.read_text())
    assert ended.value.code == (0 if found["ok"] else 1)
    assert found["stack"] is False and found["robot"] == "shelver"
    assert "The nodes were not asked" in capsys.readouterr().out
    assert {"files", "robot", "loop", "machine", "bus"} == {check["area"] for check in found["checks"]}


def test_a_stack_at_work_gives_no_cause() -> None:
    """Fresh inputs, in time, little trim, much reserve: all ok."""
    assert not judged(heard())


@pytest.mark.parametrize(
    ("values", "what", "verdict", "says"),
    [
        ({"age imu/data s": "0.9"}, "balance: imu/data", WRONG, "silent for 0.9 s"),
        ({"age drive_states s": "never"}, "balance: drive_states", WRONG, "never heard"),
        ({"late worst ms": "3.0"}, "lateness", LOOK, "3.0 ms at worst"),
        ({"late worst ms": "9.0"}, "lateness", WRONG, "margins.delay is 8 ms"),
        ({"loop rate Hz": "470"}, "rate", LOOK, "470 Hz"),
        ({"loop rate Hz": "250"}, "rate", WRONG, "loop.rate is 500 Hz"),
        ({"trim N m": "15.0"}, "trim", LOOK, "15.0 N m of 25"),
        ({"trim N m": "24.0"}, "trim", WRONG, "24.0 N m"),
        ({"torque reserve": "0.3"}, "torque reserve", LOOK, "30%"),
        ({"torque reserve": "nan"}, "torque reserve", WRONG, "nan"),
        ({"actuators lost": "back"}, "torque reserve", WRONG, "without back"),
        ({"scheduling": "ordinary, memory not locked: not asked for"}, "scheduling", LOOK, "ordinary"),
        ({"refused imu/data": "frame_id is 'x'; robot.yaml says 'y'"}, "balance: imu/data", LOOK, "refused: frame_id"),
        ({"wrong imu": "frozen for 0.050 s"}, "imu", WRONG, "frozen"),
        ({"seen drive_states: late": "12"}, "since it was configured", LOOK, "late \\(12 ticks\\)"),
    ],
)
def test_what_the_loop_tells_is_judged(values: dict[str, str], what: str, verdict: str, says: str) -> None:
    """Each thing that is amiss with the loop is one line, with what would do."""
    found = judged(heard(values))
    assert list(found) == [what]
    assert found[what].verdict == verdict and found[what].do
    assert re.search(says, found[what].found), found[what].found


def test_in_lock_step_lateness_says_nothing() -> None:
    """Stamps that don't go by the wall clock are not held against it."""
    assert not judged(heard({"clock": "lock_step", "loop rate Hz": "90", "late worst ms": "40"}))


def test_trim_that_grows_is_looked_at_before_it_is_large() -> None:
    """A moment that rises steadily is told while there is much left of the trim."""
    nodes = dict(heard().nodes)
    nodes["balance"] = [Told(float(at), 0, "balancing", {**WELL, "trim N m": str(1.0 + at)}) for at in range(4)]
    found = judged(Heard(nodes, list(NEEDED), ["/balance"]))
    assert found["trim"].verdict == LOOK and "grows by 1.0 N m/s" in found["trim"].found


def test_nodes_that_are_missing_silent_or_twice_there_are_told() -> None:
    """Who is not there, who hangs, who is there twice, and a second commander of the drive."""
    nodes = {"balance": heard().nodes["balance"]}
    present = ["balance", "balance", "arm_compensation"]
    found = judged(Heard(nodes, present, ["/balance", "/ballbal_gantry"], waited=3.0))
    assert "is not there" in found["whole_body_kinematics"].found
    assert "told nothing within 3 s" in found["arm_compensation"].found
    assert found["balance"].verdict == WRONG and "more than once" in found["balance"].found
    assert found["drive_command"].verdict == WRONG and "/ballbal_gantry" in found["drive_command"].found


def test_states_of_the_guard_say_what_to_do() -> None:
    """Tripped is wrong, stopping to be looked at; both with the way back. Inactive is no fault."""
    tripped = judged(heard({"reason": "lean and ball: beyond capture"}, level=2, state="tripped"))["balance"]
    assert tripped.verdict == WRONG and "beyond capture" in tripped.found and "reset" in tripped.do
    assert judged(heard(level=1, state="stopping"))["balance"].verdict == LOOK
    assert not judged(heard(state="inactive"))


def test_real_time_permission_and_processor_are_judged() -> None:
    """What is not granted is to be looked at, with what would grant it."""
    assert _fifo("").verdict == OK and _fifo("Operation not permitted").verdict == LOOK
    assert "rtprio" in _fifo("Operation not permitted").do
    assert _memory(8 << 20, False).verdict == LOOK and _memory(8 << 20, True).verdict == OK
    assert _memory(-1, False).verdict == OK
    assert _governors({"performance"}).verdict == OK and _governors({"powersave"}).verdict == LOOK
    assert _load(1e6).verdict == LOOK


@pytest.mark.parametrize(
    ("environment", "domain", "what", "verdict"),
    [
        ({"ROS_AUTOMATIC_DISCOVERY_RANGE": "SUBNET"}, 7, "reach", LOOK),
        ({"ROS_STATIC_PEERS": "192.0.2.7"}, 7, "reach", LOOK),
        ({}, 0, "domain", LOOK),
        ({}, 150, "domain", LOOK),
        ({"ROS_SECURITY_ENABLE": "true"}, 7, "security", WRONG),
    ],
)
def test_what_the_bus_is_set_to_is_judged(environment: dict[str, str], domain: int, what: str, verdict: str) -> None:
    """Whoever else may command the robot is told; this machine only, in a domain of its own, is in order."""
    assert not_ok(check_bus({"ROS_AUTOMATIC_DISCOVERY_RANGE": "LOCALHOST"}, 7)) == {}
    found = not_ok(check_bus(environment, domain))
    assert list(found) == [what] and found[what].verdict == verdict and found[what].do


def test_grades_go_either_way_and_never_pass_a_nan() -> None:
    """More may be better or worse; what is no number is wrong."""
    assert [graded(v, 0.4, 0.1) for v in (0.5, 0.2, 0.05, float("nan"))] == [OK, LOOK, WRONG, WRONG]
    assert [graded(v, 2.0, 6.0) for v in (1.0, 3.0, 7.0, float("nan"))] == [OK, LOOK, WRONG, WRONG]


def test_a_name_that_is_no_folder_is_named(tmp_path: Path) -> None:
    """The line says which folder."""
    with pytest.raises(BallbalError, match="nowhere"):
        checkup(tmp_path / "nowhere", 7, "", 0.0)
