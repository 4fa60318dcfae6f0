"""What becomes of an edited parameter file: taken in whole, or refused in one line with everything left as it was.

Two things are told apart: what the **files** said when they were last taken in, and what is **in force** in the nodes.
An edit is what differs between a file and what it said before; so what somebody set by hand, or gave a node at its
start in place of the file's value, stays until the file's own line is edited. The clock is handed in, and so are the
nodes.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import cache
from pathlib import Path
from typing import Any, Protocol

import attrs

from ballbal_ros.declaration import Declaration, build, declarations, flatten, parameters_of
from ballbal_ros.errors import BallbalError, ParameterError
from ballbal_ros.parameter_change import Change
from ballbal_ros.parameter_files import FILES, READERS, ParameterSet, check_may_change, edits, read_values
from ballbal_ros.parameter_history import ParameterHistory, write_whole
from ballbal_ros.parameter_text import edited
from ballbal_ros.yaml_files import parse_yaml


class Nodes(Protocol):
    """The running nodes, as the keeper wants them."""

    def get(self, file: str, names: Sequence[str]) -> Mapping[str, Any] | None:
        """Values in force of a file's parameters, those declared; None where no node that reads the file runs."""

    def set(self, file: str, changes: Sequence[Change]) -> None:
        """Set them, all or none. Raises :class:`BallbalError` with the node's reason where it refuses."""


@attrs.frozen
class Taken:
    """One file that was taken in: its ``changes`` (none where they are in force), and whether a node took them."""

    file: str
    changes: tuple[Change, ...] = ()
    running: bool = True

    def lines(self) -> list[str]:
        """What the log says, a line a value."""
        absent = "" if self.running else f" (no {' or '.join(READERS[self.file])} runs: for when it starts)"
        return [f"{self.file}: {change}{absent}" for change in self.changes]


class Keeper:
    """Keeps the nodes of one robot by its files. Not thread-safe; methods raise :class:`BallbalError` in one line."""

    def __init__(self, folder: Path, nodes: Nodes, history: ParameterHistory) -> None:
        self.folder, self._nodes, self.history = folder, nodes, history
        self.warning = ""
        last = history.last()
        self.files = ParameterSet({}) if last is None else last.files
        self.in_force = ParameterSet({}) if last is None else last.in_force
        self._first = last is None

    def begin(self, now: float) -> list[Taken | BallbalError]:
        """Take in what was edited while nobody watched; the first time of all, believe that the nodes run by the files.

        ``now``, here and below, is the Unix time in s.
        """
        outcomes: list[Taken | BallbalError] = []
        for file in FILES:
            try:
                if self._first:
                    values = read_values(self.folder / file)
                    self.files, self.in_force = (s.with_file(file, values) for s in (self.files, self.in_force))
                else:
                    outcomes.append(self._take_in(file, whole=False))
            except BallbalError as error:
                outcomes.append(error)
        for file, declared in changeable().items():
            self._notice(file, self._nodes.get(file, list(declared)) or {})
        self._keep("start", now)
        return outcomes

    def take_in(self, file: str, now: float, whole: bool = False) -> Taken:
        """Take in a file; ``whole``: also where it says what it said before, but something else is in force."""
        taken = self._take_in(file, whole)
        self._keep(file, now)
        return taken

    def _take_in(self, file: str, whole: bool) -> Taken:
        path = self.folder / file
        new, before = read_values(path), self.files.files.get(file, {})
        asked = {change.name: change for change in edits(path, before, new)}
        if whole:
            for name, declared in changeable().get(file, {}).items():
                asked.setdefault(name, Change(declared, new[name], new[name]))
        running = self._nodes.get(file, list(asked)) if asked else {}
        changes = [attrs.evolve(c, old=(running or {}).get(c.name, c.old)) for c in asked.values()]
        changes = [change for change in changes if change.old != change.new]
        # With nobody there nothing can be mixed: whoever starts reads the file.
        if changes and running is not None:
            check_may_change(path, changes)
            self._nodes.set(file, changes)
        kept = {n: v for n, v in self.in_force.files.get(file, {}).items() if n in new and n not in asked}
        self.files, self.in_force = self.files.with_file(file, new), self.in_force.with_file(file, {**new, **kept})
        return Taken(file, tuple(changes), running is not None)

    def notice(self, file: str, values: Mapping[str, Any], now: float) -> Taken:
        """Take note of values that somebody else has set on a node; the files stay as they are."""
        taken = self._notice(file, values)
        if taken.changes:
            self._keep("set on the node", now)
        return taken

    def _notice(self, file: str, values: Mapping[str, Any]) -> Taken:
        declared, known = changeable().get(file, {}), self.in_force.files.get(file, {})
        changes = [
            Change(declared[name], known[name], value)
            for name, value in values.items()
            if name in declared and name in known and known[name] != value
        ]
        self._put_in_force(file, changes)
        return Taken(file, tuple(changes))

    def _put_in_force(self, file: str, changes: Iterable[Change]) -> None:
        values = {**self.in_force.files.get(file, {}), **{change.name: change.new for change in changes}}
        self.in_force = self.in_force.with_file(file, values)

    def previous(self, now: float) -> tuple[str, list[Taken]]:
        """Put the set before the present one in force again, in all nodes or none: when it was kept, and what changes.

        The files stay as they are; :meth:`save` writes them.
        """
        entry = self.history.before(self.in_force)
        if entry is None:
            raise BallbalError(str(self.history.folder), "keeps no other set", "there is nothing to go back to")
        wanted: list[Taken] = []
        for file, values in entry.in_force.files.items():
            path = self.folder / file
            new = flatten(build(FILES[file], values, f"{path}, as of {entry.time}"))
            changes = edits(path, self.in_force.files.get(file, {}), new)
            check_may_change(path, changes)
            if changes:
                wanted.append(Taken(file, tuple(changes)))
        self._set_all(wanted)
        for taken in wanted:
            self._put_in_force(taken.file, taken.changes)
        self._keep(f"previous, of {entry.time}", now)
        return entry.time, wanted

    def _set_all(self, wanted: Sequence[Taken]) -> None:
        done: list[Taken] = []
        try:
            for taken in wanted:
                self._nodes.set(taken.file, taken.changes)
                done.append(taken)
        except BallbalError:
            for taken in done:
                self._nodes.set(taken.file, [attrs.evolve(c, old=c.new, new=c.old) for c in taken.changes])
            raise

    def save(self, now: float) -> list[Taken]:
        """Write into the files what is in force in the nodes, comments kept: what changes in each file.

        A file is replaced as a whole; one that can't be read as it is now is refused, and then none is written.
        """
        texts: dict[Path, str] = {}
        saved: list[Taken] = []
        for file, declared in changeable().items():
            path = self.folder / file
            there = read_values(path)
            running = self._nodes.get(file, list(declared))
            if running is None:
                raise BallbalError(READERS[file][0], "does not answer", "start it: what it runs with is to be saved")
            changes = [Change(declared[n], there[n], v) for n, v in running.items() if n in declared and there[n] != v]
            if changes:
                texts[path] = _text_with(path, there, changes)
                saved.append(Taken(file, tuple(changes)))
        for path, text in texts.items():
            try:
                write_whole(path, text)
            except OSError as error:
                raise BallbalError(str(path), f"can't be written: {error.strerror}", "make it writable") from error
            values = read_values(path)
            self.files, self.in_force = (s.with_file(path.name, values) for s in (self.files, self.in_force))
        self._keep("saved", now)
        return saved

    def _keep(self, source: str, now: float) -> None:
        try:
            self.history.add(self.in_force, self.files, source, now)
            self.warning = ""
        except OSError as error:
            self.warning = f"{self.history.folder}: accepted sets can't be kept: {error.strerror}"


@cache
def changeable() -> dict[str, dict[str, Declaration]]:
    """What may change at run time: file → dotted name → declaration; files that have such alone."""
    found = {file: {d.name: d for d in declarations(cls) if d.runtime} for file, cls in FILES.items()}
    return {file: declared for file, declared in found.items() if declared}


def _text_with(path: Path, there: Mapping[str, Any], changes: Sequence[Change]) -> str:
    """The file's text with changed values, held against what it must read as."""
    new = {change.name: change.new for change in changes}
    text = edited(path.read_text(encoding="utf-8"), new, str(path))
    if flatten(build(FILES[path.name], parameters_of(parse_yaml(text, str(path)), str(path)), str(path))) != {
        **there,
        **new,
    }:
        raise ParameterError(str(path), "has a layout that can't be edited", "write the values there by hand")
    return text
