"""An edited parameter file is taken in whole or refused in one line, and what was in force before can be had again."""

from __future__ import annotations

import json
import random
import shutil
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import attrs
import pytest

from ballbal_ros.declaration import declarations, flatten, load, read_parameter_file
from ballbal_ros.errors import BallbalError
from ballbal_ros.parameter_change import Change
from ballbal_ros.parameter_files import FILES, ParameterSet, read_values
from ballbal_ros.parameter_history import ParameterHistory, state_folder
from ballbal_ros.parameter_keeper import Keeper, Taken
from ballbal_ros.parameter_text import edited, yaml_text
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


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return begun(tmp_path)


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


def test_an_edit_is_in_force_and_is_told_as_old_and_new(desk: Desk):
    """What is edited goes to the node that has it, and the line says old → new with the unit."""
    desk.write("balance.yaml", "lean: 0.012", "lean: 0.02")
    desk.write("compensation.yaml", "lead_in: 1.6", "lead_in: 1.2")
    assert desk.taken("balance.yaml") == ["balance.yaml: weights.lean 0.012 → 0.02 rad"]
    assert desk.taken("compensation.yaml") == ["compensation.yaml: planner.lead_in 1.6 → 1.2 s"]
    assert desk.nodes.sent == [("balance.yaml", ["weights.lean"]), ("compensation.yaml", ["planner.lead_in"])]
    assert desk.taken("balance.yaml") == []


def test_a_layout_that_changes_no_value_sends_nothing(desk: Desk):
    """Comments, order and spelled-out defaults are no change."""
    desk.write("balance.yaml", "    weights:\n      lean: 0.012", "    weights: # tuned\n      lean: 1.2e-2")
    desk.write("balance.yaml", "    loop:\n", "    trim: true\n    loop:\n")
    assert desk.taken("balance.yaml") == []
    assert desk.nodes.sent == []


@pytest.mark.parametrize(
    ("file", "old", "new", "words"),
    [
        ("balance.yaml", "lean: 0.012", "lean: 12", ("weights.lean is the integer 12", "12.0")),
        ("balance.yaml", "lean: 0.012", "lean: -0.012", ("weights.lean is -0.012", "1e-05 … 10 rad")),
        ("balance.yaml", "lean: 0.012", "lean: .nan", ("weights.lean is nan", "finite")),
        (
            "balance.yaml",
            "lean: 0.012",
            "laen: 0.012",
            ("unknown parameter weights.laen", "did you mean weights.lean?"),
        ),
        ("balance.yaml", "lean: 0.012", "lean: [0.012", ("line",)),
        ("balance.yaml", "rate: 500.0", "rate: 400.0", ("loop.rate 500.0 → 400.0 Hz", "can't change", "put the old")),
        ("robot.yaml", "mass: 4.0", "mass: 5.0", ("ball.mass 4.0 → 5.0 kg", "can't change while the nodes run")),
        ("robot.yaml", "[front_left, back, front_right]", "[front_left, back]", ("front_right",)),
        ("simulation.yaml", "loop_rate: 500.0", "loop_rate: 250.0", ("loop_rate 500.0 → 250.0 Hz",)),
        ("compensation.yaml", "compensation: planned", "compensation: plannd", ("is 'plannd'", "quasi_static")),
    ],
)
def test_a_bad_edit_is_refused_and_everything_stays(desk: Desk, file: str, old: str, new: str, words: tuple[str, ...]):
    """One line names file, value and what would do; nodes, files and what is in force stay as they were."""
    desk.write(file, old, new)
    line = desk.refused(file)
    for word in words:
        assert word in line
    assert desk.nodes.sent == []


def test_one_bad_value_holds_back_the_good_ones(desk: Desk):
    """A file is taken in whole or not at all; mended, all of it is."""
    desk.write("balance.yaml", "lean: 0.012", "lean: 0.02")
    desk.write("balance.yaml", "delay: 0.002", "delay: 0.003")
    assert "loop.delay" in desk.refused("balance.yaml")
    desk.write("balance.yaml", "delay: 0.003", "delay: 0.002")
    assert desk.taken("balance.yaml") == ["balance.yaml: weights.lean 0.012 → 0.02 rad"]


def test_what_the_node_refuses_stays_as_it_was(tmp_path: Path):
    """The node's own check has the last word: its reason is the line, and the old value stays in force."""
    desk = begun(tmp_path, refuses=lambda file, change: change.name == "weights.lean" and change.new > 1.0)
    desk.write("balance.yaml", "lean: 0.012", "lean: 2.0")
    with pytest.raises(BallbalError, match=r"weights.lean 0.012 → 2.0 rad the margins are gone"):
        desk.keeper.take_in("balance.yaml", 2.0)
    assert desk.keeper.in_force.files["balance.yaml"]["weights.lean"] == 0.012


def test_what_was_given_in_place_of_the_file_stays_until_its_own_line_is_edited(tmp_path: Path):
    """A value given at a node's start, or set by hand, is not undone by an edit of something else."""
    desk = begun(tmp_path)
    desk.nodes.values["compensation.yaml"]["compensation"] = "none"
    keeper = again(desk)
    assert keeper.begin(5.0) == [Taken(file) for file in FILES]
    assert keeper.in_force.files["compensation.yaml"]["compensation"] == "none"
    desk.write("compensation.yaml", "lead_in: 1.6", "lead_in: 1.2")
    keeper.take_in("compensation.yaml", 6.0)
    assert desk.nodes.values["compensation.yaml"]["compensation"] == "none"
    assert keeper.take_in("compensation.yaml", 7.0, whole=True).lines() == [
        "compensation.yaml: compensation none → planned"
    ]


def test_what_was_edited_while_nobody_watched_is_taken_in_at_the_start(desk: Desk):
    """Started anew, it takes in what has been edited since; what a node already runs with is no change."""
    desk.write("balance.yaml", "lean: 0.012", "lean: 0.02")
    desk.write("robot.yaml", "mass: 4.0", "mass: 5.0")
    desk.nodes.values["robot.yaml"]["ball.mass"] = 5.0
    taken = again(desk).begin(9.0)
    assert [t.lines() for t in taken if isinstance(t, Taken)] == [
        [],
        ["balance.yaml: weights.lean 0.012 → 0.02 rad"],
        [],
        [],
    ]
    assert desk.nodes.sent == [("balance.yaml", ["weights.lean"])]


def test_without_the_node_an_edit_is_checked_and_left_for_its_start(desk: Desk):
    """With nobody there nothing is mixed: good values are accepted, bad ones refused."""
    del desk.nodes.values["balance.yaml"]
    desk.write("balance.yaml", "rate: 500.0", "rate: 400.0")
    (line,) = desk.taken("balance.yaml")
    assert "loop.rate 500.0 → 400.0 Hz" in line and "no balance runs" in line
    desk.write("balance.yaml", "rate: 400.0", "rate: 4.0")
    assert "loop.rate is 4 Hz" in desk.refused("balance.yaml")


def test_the_set_before_can_be_had_again(desk: Desk):
    """`previous` puts the set before in force and leaves the file; twice, it goes back and forth."""
    desk.write("balance.yaml", "lean: 0.012", "lean: 0.02")
    desk.taken("balance.yaml")
    text = (desk.folder / "balance.yaml").read_text()
    for wanted in (0.012, 0.02, 0.012):
        time, taken = desk.keeper.previous(8.0)
        assert [t.file for t in taken] == ["balance.yaml"] and time
        assert desk.nodes.values["balance.yaml"]["weights.lean"] == wanted
    assert (desk.folder / "balance.yaml").read_text() == text


def test_the_set_before_comes_in_all_nodes_or_in_none(desk: Desk):
    """Where one node refuses its part, the other gets its values back."""
    for file, name, value in (("balance.yaml", "weights.lean", 0.03), ("compensation.yaml", "planner.tail", 2.0)):
        desk.nodes.values[file][name] = value
        desk.keeper.in_force = desk.keeper.in_force.with_file(file, dict(desk.nodes.values[file]))
    desk.nodes.refuses = lambda file, change: file == "compensation.yaml"
    with pytest.raises(BallbalError, match="planner.tail 2.0 → 1.6 s"):
        desk.keeper.previous(8.0)
    assert desk.nodes.sent == [("balance.yaml", ["weights.lean"])] * 2
    assert desk.nodes.values["balance.yaml"]["weights.lean"] == 0.03
    assert desk.keeper.in_force.files["balance.yaml"]["weights.lean"] == 0.03


def test_with_no_other_set_there_is_nothing_to_go_back_to(desk: Desk):
    """The first set has none before it, and that is said in one line."""
    with pytest.raises(BallbalError, match="nothing to go back to"):
        desk.keeper.previous(2.0)


def test_saving_writes_what_is_in_force_and_keeps_the_comments(desk: Desk):
    """Values set by hand come into the files: named ones in place, others in their group; comments stay."""
    desk.nodes.values["balance.yaml"].update({"weights.lean": 0.02, "limits.trim_rate": 30.0, "trim": False})
    desk.nodes.values["balance.yaml"].update({"estimator.lean_noise": 1e-05})
    comments = [line for line in (desk.folder / "balance.yaml").read_text().splitlines() if "#" in line]
    (saved,) = desk.keeper.save(5.0)
    assert "balance.yaml: weights.lean 0.012 → 0.02 rad" in saved.lines()
    flat = read_parameter_file(desk.folder / "balance.yaml")
    assert (flat["weights.lean"], flat["limits.trim_rate"], flat["trim"]) == (0.02, 30.0, False)
    assert flat["estimator.lean_noise"] == 1e-05
    text = (desk.folder / "balance.yaml").read_text()
    assert [line for line in text.splitlines() if "#" in line] == comments
    assert desk.keeper.save(6.0) == [] and desk.taken("balance.yaml") == []


def test_a_broken_file_is_not_saved_over(desk: Desk):
    """Where a file can't be read as it is, saving says so and writes none."""
    (desk.folder / "compensation.yaml").write_text("/**: [", encoding="utf-8")
    desk.nodes.values["balance.yaml"]["weights.lean"] = 0.02
    with pytest.raises(BallbalError, match="compensation.yaml"):
        desk.keeper.save(5.0)
    assert read_values(desk.folder / "balance.yaml")["weights.lean"] == 0.012


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


def test_one_that_repeats_the_newest_is_not_kept_again(desk: Desk):
    """Restarts and saves without a change leave the history as it is."""
    count = len(list(desk.keeper.history.entries()))
    again(desk).begin(4.0)
    desk.taken("balance.yaml")
    assert len(list(desk.keeper.history.entries())) == count == 1


def test_history_that_cannot_be_written_is_a_warning(tmp_path: Path):
    """Tuning goes on where accepted sets can't be kept, and it is said."""
    folder = tmp_path / "shelver"
    shutil.copytree(CONFIG / "shelver", folder)
    (tmp_path / "state").write_text("a file in the way")
    nodes = RunningNodes({file: read_values(folder / file) for file in FILES})
    keeper = Keeper(folder, nodes, ParameterHistory(tmp_path / "state", 5))
    keeper.begin(1.0)
    assert "can't be kept" in keeper.warning


def test_sets_are_kept_where_the_standard_says():
    """XDG Base Directory Specification 0.8: $XDG_STATE_HOME where it is absolute, else ~/.local/state."""
    robot = Path("config/shelver")
    assert state_folder(robot, {"XDG_STATE_HOME": "/var/s", "HOME": "/h"}) == Path("/var/s/ballbal_ros/shelver")
    assert state_folder(robot, {"XDG_STATE_HOME": "s", "HOME": "/h"}) == Path("/h/.local/state/ballbal_ros/shelver")
    assert state_folder(robot, {"HOME": "/h"}) == Path("/h/.local/state/ballbal_ros/shelver")


@pytest.mark.parametrize(
    "value", [1e-05, 3.0, 1e300, -0.5, True, 7, "planned", "no", "a b", "1.5", "", [1.0, 2e-7], ["x"]]
)
def test_a_written_value_reads_as_itself(value: Any, tmp_path: Path):
    """Whatever is written into a file comes back with its type and to the last digit."""
    path = tmp_path / "a.yaml"
    path.write_text(f"/**:\n  ros__parameters:\n    a: {yaml_text(value)}\n", encoding="utf-8")
    there = read_parameter_file(path)["a"]
    assert there == value and type(there) is type(value)


@pytest.mark.parametrize("file", ["balance.yaml", "compensation.yaml"])
def test_any_values_written_into_a_file_read_back(file: str, tmp_path: Path):
    """Random values for random parameters, put into the demo robot's file one after the other, read back exactly."""
    rng = random.Random(4)
    path = tmp_path / file
    shutil.copy(CONFIG / "shelver" / file, path)
    declared = [d for d in declarations(FILES[file]) if d.kind == "double"]
    for _ in range(40):
        new = {d.name: rng.uniform(d.low or 0.0, d.high or 1.0) for d in rng.sample(declared, 3)}
        wanted = {**read_values(path), **new}
        path.write_text(edited(path.read_text(encoding="utf-8"), new, file), encoding="utf-8")
        assert read_values(path) == wanted == flatten(load(FILES[file], path))
