"""Sets of parameters that were accepted are kept, each whole or not at all, where the standard says."""

from __future__ import annotations

from pathlib import Path

from ballbal_ros.parameter_files import ParameterSet, read_values
from ballbal_ros.parameter_history import ParameterHistory, state_folder
from helpers.robots import CONFIG


def test_sets_are_kept_with_time_and_checksum_and_the_oldest_go(tmp_path: Path):
    """Each set is a file with time, source and checksum; a spoilt one is left out, no more than asked are kept."""
    history = ParameterHistory(tmp_path / "state", 3)
    files = {"balance.yaml": read_values(CONFIG / "shelver" / "balance.yaml")}
    for i in range(6):
        files = {"balance.yaml": {**files["balance.yaml"], "weights.lean": 0.01 + 0.001 * i}}
        # The clock is set back each time: the order stays.
        history.add(ParameterSet(files), ParameterSet(files), f"edit {i}", 1000.0 - i)
    entries = list(history.entries())
    assert [e.source for e in entries] == ["edit 5", "edit 4", "edit 3"]
    assert entries[0].time.startswith("1970-01-01T00:16:35") and entries[0].in_force == ParameterSet(files)
    newest = max((tmp_path / "state").iterdir())
    newest.write_text(newest.read_text().replace("0.015", "0.016"))
    assert [e.source for e in history.entries()] == ["edit 4", "edit 3"]


def test_sets_are_kept_where_the_standard_says():
    """XDG Base Directory Specification 0.8: $XDG_STATE_HOME where it is absolute, else ~/.local/state."""
    robot = Path("config/shelver")
    assert state_folder(robot, {"XDG_STATE_HOME": "/var/s", "HOME": "/h"}) == Path("/var/s/ballbal_ros/shelver")
    assert state_folder(robot, {"XDG_STATE_HOME": "s", "HOME": "/h"}) == Path("/h/.local/state/ballbal_ros/shelver")
    assert state_folder(robot, {"HOME": "/h"}) == Path("/h/.local/state/ballbal_ros/shelver")
