"""``ballbal headless``: the whole stack over the bus does what the rehearsal says, and the same every time."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

pytest.importorskip("rclpy")

from ballbal_ros.commands.rehearse import rehearse
from ballbal_ros.simulation.timeline import RUN_START
from helpers.robots import CONFIG
from helpers.ros_stack import NOD, ROOT, SHELVER, ballbal, listening


def finished(process: subprocess.Popen[str], timeout: float = 90.0) -> tuple[int, str, str]:
    """Exit status, standard output and standard error of a command that must end by itself."""
    try:
        out, err = process.communicate(timeout=timeout)
    finally:
        process.kill()
    return process.returncode, out, err


def test_reach_over_the_bus_is_what_the_rehearsal_says(ros_domain_id: int, tmp_path: Path) -> None:
    """`reach`, planned, in lock-step: within 2 mm, exit 0, and the same peak travel as in-process to a
    micrometre (the end is a tick later on the bus).
    """
    plan, file = CONFIG / "plans" / "reach.yaml", tmp_path / "found.json"
    words = ("headless", str(plan), "--robot", str(SHELVER), "--compensation", "planned", "--json", str(file))
    status, out, err = finished(ballbal(*words, domain=ros_domain_id))
    assert status == 0, err
    assert "planned" in out
    found = json.loads(file.read_text())
    assert (found["robot"], found["plan"], found["clock"], found["ok"]) == ("shelver", "reach", "lock-step", True)
    run = found["runs"][0]
    expected = rehearse(plan, SHELVER, ("planned",)).runs[0]
    assert run["ball_travel_peak_mm"] <= 2.0 and not run["fell"]
    assert run["ball_travel_peak_mm"] == pytest.approx(expected.ball_travel_peak_mm, abs=1e-3)
    assert run["ball_travel_end_mm"] == pytest.approx(expected.ball_travel_end_mm, abs=0.01)
    assert set(run) == {
        *("compensation", "seed", "fell", "ball_travel_peak_mm", "ball_travel_end_mm", "lean_peak_deg"),
        *("drive_torque_peak_nm", "friction_use_peak", "duration_s", "real_time_factor"),
    }


def recorded(domain: int, plan: Path, seed: int) -> dict[int, bytes]:
    """Run a plan and return its ground_truth messages as they came over the bus, by their stamp in ns."""
    with listening(domain) as listener:
        kept = listener.record("ground_truth", raw=True)
        process = ballbal("headless", str(plan), "--compensation", "planned", "--seed", str(seed), domain=domain)
        try:
            listener.wait(lambda: process.poll() is not None, 60.0, "the run's end")
            listener.turn(0.2)
            assert process.returncode == 0, process.stderr.read() if process.stderr else ""
        finally:
            process.kill()
    return {
        int.from_bytes(raw[4:8], "little") * 10**9 + int.from_bytes(raw[8:12], "little"): bytes(raw) for raw in kept
    }


def test_one_seed_gives_one_run_to_the_bit(ros_domain_id: int, tmp_path: Path) -> None:
    """Two lock-step runs with one seed, the second on a machine that is busy otherwise, have the same ground_truth, bit
    for bit.
    """
    plan = tmp_path / "nod.yaml"
    plan.write_text(NOD)
    first = recorded(ros_domain_id, plan, 5)
    busy = subprocess.Popen([sys.executable, "-c", "while True: pass"])
    try:
        second = recorded(ros_domain_id, plan, 5)
    finally:
        busy.kill()
    # A listener that is met late misses the beginning; what counts in a run, each must have heard whole.
    counted = {round(tick * 1e9 / 500.0) for tick in range(round(500.0 * RUN_START), max(first) // 2_000_000 + 1)}
    assert len(counted) > 800 and max(first) == max(second)
    assert counted <= first.keys() and counted <= second.keys()
    both = first.keys() & second.keys()
    assert [stamp for stamp in sorted(both) if first[stamp] != second[stamp]] == []


def test_two_robots_in_two_namespaces_do_not_meet(ros_domain_id: int, tmp_path: Path) -> None:
    """Two stacks at once in one domain, each in its namespace, give what each gives alone: the seed alone decides."""
    plan = tmp_path / "nod.yaml"
    plan.write_text(NOD)
    files = [tmp_path / f"{name}.json" for name in ("left", "right")]
    words = ("headless", str(plan), "--compensation", "planned")
    both = [
        ballbal(*words, "--namespace", file.stem, "--seed", str(seed), "--json", str(file), domain=ros_domain_id)
        for seed, file in enumerate(files)
    ]
    for process in both:
        status, _, err = finished(process)
        assert status == 0, err
    expected = rehearse(plan, SHELVER, ("planned",), (0, 1)).runs
    for file, alone in zip(files, expected, strict=True):
        run = json.loads(file.read_text())["runs"][0]
        assert run["ball_travel_peak_mm"] == pytest.approx(alone.ball_travel_peak_mm, abs=1e-3)


def test_help_names_the_kinds_and_clocks() -> None:
    """``ballbal headless --help`` says what there is to choose."""
    words = [sys.executable, "-m", "ballbal_ros.commands.main", "headless", "--help"]
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": "200"}
    out = subprocess.run(words, cwd=ROOT, capture_output=True, text=True, check=True, env=environment).stdout
    for word in ("quasi_static", "lock-step", "real-time", "--namespace", "--truth"):
        assert word in out


def test_what_is_not_planned_runs_too(ros_domain_id: int, tmp_path: Path) -> None:
    """A lean that follows the measured arms, over the bus: the arms move, the ball does much more than when planned,
    and it stays up.
    """
    plan, file = tmp_path / "nod.yaml", tmp_path / "found.json"
    plan.write_text(NOD)
    words = ("headless", str(plan), "--robot", str(SHELVER), "--compensation", "quasi_static", "--json", str(file))
    status, _, err = finished(ballbal(*words, domain=ros_domain_id))
    assert status == 0, err
    run = json.loads(file.read_text())["runs"][0]
    assert not run["fell"] and run["ball_travel_peak_mm"] > 3.0
