"""An edited parameter file is taken in whole or refused in one line, and what was in force before can be had again."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from ballbal_ros.declaration import read_parameter_file
from ballbal_ros.errors import BallbalError
from ballbal_ros.parameter_files import FILES, read_values
from ballbal_ros.parameter_history import ParameterHistory
from ballbal_ros.parameter_keeper import Keeper, Taken
from helpers.desk import Desk, RunningNodes, again, begun
from helpers.robots import CONFIG


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return begun(tmp_path)


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
