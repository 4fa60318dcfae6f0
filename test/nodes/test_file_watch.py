"""A changed file is told once its writer is done, however it was written."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from ballbal_ros.nodes.file_watch import FileWatch, Settling

NAMES = ("balance.yaml", "robot.yaml")


def test_a_file_is_due_once_it_lies_still():
    """Not while changes still come, and once only."""
    settling = Settling(0.05)
    settling.changed("a", "closed", 1.0)
    settling.changed("a", "moved", 1.04)
    assert settling.due(1.08) == []
    assert settling.due(1.095) == ["a"]
    assert settling.due(2.0) == []


def test_a_file_that_never_lies_still_is_read_all_the_same():
    """Saves every 40 ms do not hold it back for more than a quarter of a second."""
    settling = Settling(0.05)
    due = []
    for i in range(25):
        settling.changed("a", "closed", 1.0 + 0.04 * i)
        due += settling.due(1.0 + 0.04 * i)
    assert 2 <= len(due) <= 4


def test_a_file_that_somebody_still_writes_is_not_due():
    """Modified and not closed: half-written, up to ten seconds after the last change, as a close may be lost."""
    settling = Settling(0.05)
    settling.changed("a", "modified", 1.0)
    assert settling.due(5.0) == []
    settling.changed("a", "modified", 6.0)
    assert settling.due(12.0) == []
    assert settling.due(16.5) == ["a"]
    settling.changed("a", "modified", 20.0)
    settling.changed("a", "closed", 20.1)
    assert settling.due(20.2) == ["a"]


class Watched:
    """A folder with a watch on it."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        for name in NAMES:
            (folder / name).write_text("old", encoding="utf-8")
        self.watch = FileWatch(folder, NAMES, 0.03)
        self.told(0.2)

    def told(self, during: float = 1.0, looking: bool = False) -> list[str]:
        """What comes due within a while, until something has."""
        found: list[str] = []
        until = time.monotonic() + during
        while time.monotonic() < until and not found:
            if looking:
                self.watch.look(time.monotonic())
            found += self.watch.due(time.monotonic())
            time.sleep(0.01)
        return found


@pytest.fixture
def watched(tmp_path: Path) -> Iterator[Watched]:
    made = Watched(tmp_path)
    yield made
    made.watch.leave()


def test_every_way_of_writing_is_told(watched: Watched):
    """In place, by rename, by delete and restore."""
    path = watched.folder / "balance.yaml"
    path.write_text("new", encoding="utf-8")
    assert watched.told() == ["balance.yaml"]
    beside = watched.folder / ".balance.yaml.swp"
    beside.write_text("newer", encoding="utf-8")
    assert watched.told(0.2) == []
    os.replace(beside, path)
    assert watched.told() == ["balance.yaml"]
    path.unlink()
    assert watched.told() == ["balance.yaml"]
    path.write_text("back", encoding="utf-8")
    assert watched.told() == ["balance.yaml"]


def test_reading_wakes_nobody(watched: Watched):
    """Whoever only reads a file changes nothing: our own reading would wake us for ever."""
    (watched.folder / "balance.yaml").read_text(encoding="utf-8")
    assert watched.told(0.3) == []


def test_a_half_written_file_is_told_when_it_is_whole(watched: Watched):
    """While its writer has it open it is not told, and soon after it is closed."""
    with (watched.folder / "robot.yaml").open("w", encoding="utf-8") as file:
        file.write("half")
        file.flush()
        assert watched.told(0.4) == []
        file.write("whole")
    assert watched.told() == ["robot.yaml"]


def test_a_file_behind_a_link_is_watched_where_it_lies(tmp_path: Path):
    """A workspace built with links has the true files elsewhere: an edit there is told too."""
    true, links = tmp_path / "true", tmp_path / "links"
    true.mkdir()
    links.mkdir()
    for name in NAMES:
        (true / name).write_text("old", encoding="utf-8")
        (links / name).symlink_to(true / name)
    watch = FileWatch(links, NAMES, 0.03)
    try:
        (true / "robot.yaml").write_text("new", encoding="utf-8")
        found: list[str] = []
        until = time.monotonic() + 2.0
        while not found and time.monotonic() < until:
            found = watch.due(time.monotonic())
            time.sleep(0.01)
        assert found == ["robot.yaml"]
    finally:
        watch.leave()


def test_where_the_system_does_not_tell_the_files_are_looked_at(watched: Watched):
    """A change that no event tells of (a folder of another machine) is found by looking."""
    watched.watch._observer.unschedule_all()
    (watched.folder / "robot.yaml").write_text("longer than before", encoding="utf-8")
    assert watched.told(0.2) == []
    assert watched.told(looking=True) == ["robot.yaml"]
