"""A robot's folder of parameter files with nodes that run by it, in this process: what the tests of tuning work at."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import attrs
import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.parameter_change import Change
from ballbal_ros.parameter_files import FILES, read_values
from ballbal_ros.parameter_history import ParameterHistory
from ballbal_ros.parameter_keeper import Keeper
from helpers.robots import CONFIG


@attrs.define
class RunningNodes:
    """Nodes that run by what the files said when they started, and refuse what `refuses` does."""

    values: dict[str, dict[str, Any]]
    refuses: Callable[[str, Change], bool] = lambda file, change: False
    sent: list[tuple[str, list[str]]] = attrs.field(factory=list)

    def get(self, file: str, names: Sequence[str]) -> Mapping[str, Any] | None:
        there = self.values.get(file)
        return None if there is None else {name: there[name] for name in names if name in there}

    def set(self, file: str, changes: Sequence[Change]) -> None:
        for change in changes:
            assert change.declared.runtime
            if self.refuses(file, change):
                raise BallbalError(file, f"with {change} the margins are gone", "put it back")
        self.values[file].update({change.name: change.new for change in changes})
        self.sent.append((file, [change.name for change in changes]))


@attrs.define
class Desk:
    """A robot's folder, the nodes that run by it, and what keeps them."""

    folder: Path
    nodes: RunningNodes
    keeper: Keeper

    def write(self, file: str, old: str, new: str) -> None:
        path = self.folder / file
        text = path.read_text(encoding="utf-8")
        assert text.count(old) == 1, old
        path.write_text(text.replace(old, new), encoding="utf-8")

    def taken(self, file: str, **how: Any) -> list[str]:
        return self.keeper.take_in(file, 2.0, **how).lines()

    def refused(self, file: str) -> str:
        """The line that a file is refused with; nothing has changed anywhere."""
        path = self.folder / file
        before = (path.read_bytes(), json.dumps(self.nodes.values), self.keeper.in_force, self.keeper.files)
        with pytest.raises(BallbalError) as caught:
            self.keeper.take_in(file, 3.0)
        assert before == (path.read_bytes(), json.dumps(self.nodes.values), self.keeper.in_force, self.keeper.files)
        line = str(caught.value)
        assert "\n" not in line and line.startswith(str(path)), line
        return line


def begun(tmp_path: Path, **nodes: Any) -> Desk:
    folder = tmp_path / "shelver"
    shutil.copytree(CONFIG / "shelver", folder)
    running = RunningNodes({file: read_values(folder / file) for file in FILES}, **nodes)
    keeper = Keeper(folder, running, ParameterHistory(tmp_path / "state", 50))
    assert keeper.begin(1.0) == []
    return Desk(folder, running, keeper)


def again(desk: Desk) -> Keeper:
    """The keeper started anew, over the same nodes and the same history."""
    return Keeper(desk.folder, desk.nodes, ParameterHistory(desk.keeper.history.folder, 50))
