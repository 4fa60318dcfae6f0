"""Files that commands write: what can't be written is one line."""

from __future__ import annotations

from pathlib import Path

import pytest

from ballbal_ros.commands.files import write_json
from ballbal_ros.errors import BallbalError


def test_what_is_no_number_is_told_and_not_written(tmp_path: Path) -> None:
    """JSON (RFC 8259) knows no NaN: the file is named in one line, and nothing is left half written."""
    file = tmp_path / "found.json"
    with pytest.raises(BallbalError, match=r"found\.json: can't be written: .* not a number"):
        write_json(file, {"runs": [{"ball_travel_peak_mm": float("nan")}]})
    assert not file.exists()


def test_a_folder_is_no_file(tmp_path: Path) -> None:
    """The reason is the system's."""
    with pytest.raises(BallbalError, match="can't be written: Is a directory"):
        write_json(tmp_path, {})
