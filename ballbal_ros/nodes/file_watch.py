"""Which of a folder's files have changed, once their writer is done: told by the system, and looked at besides."""

from __future__ import annotations

import contextlib
import queue
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import attrs
from watchdog.events import FileSystemEvent, FileSystemEventHandler
from watchdog.observers import Observer

# What only says that somebody has read is no change: our own reading would wake us for ever.
_WRITTEN = {"created", "modified", "moved", "deleted", "closed"}
# A writer who never closes is believed to be gone, or its close to be lost, after this long, s.
_LONGEST_WRITE = 10.0
# Ten saves in a second never lie still; so long after the first of them, s, what is there is read all the same.
_LONGEST_WAIT = 0.25


@attrs.define
class _Pending:
    first: float
    last: float
    open: bool


class Settling:
    """When a changed file may be read. Pure: times, s, are handed in.

    It lies still ``settle_time`` after the last change, or has been changing for a quarter of a second; but while a
    writer has changed it and not closed it yet, it is half-written.
    """

    def __init__(self, settle_time: float) -> None:
        self._settle = settle_time
        self._pending: dict[str, _Pending] = {}

    def changed(self, name: str, kind: str, now: float) -> None:
        """Take note of a change; after ``modified`` a writer has it open until ``closed``, ``moved`` or ``deleted``."""
        pending = self._pending.setdefault(name, _Pending(now, now, False))
        pending.last, pending.open = now, kind == "modified"

    def is_pending(self, name: str) -> bool:
        """Whether a change of it is known and has not come due."""
        return name in self._pending

    def due(self, now: float) -> list[str]:
        """The files that may be read now; each is told once."""
        ready = [name for name, pending in self._pending.items() if self._is_ready(pending, now)]
        for name in ready:
            del self._pending[name]
        return ready

    def _is_ready(self, pending: _Pending, now: float) -> bool:
        if pending.open:
            return now - pending.last >= _LONGEST_WRITE
        return now - pending.last >= self._settle or now - pending.first >= _LONGEST_WAIT


class FileWatch(FileSystemEventHandler):
    """Watches files of one folder by name, and those behind them where they are links (as in a colcon workspace)."""

    def __init__(self, folder: Path, names: Iterable[str], settle_time: float) -> None:
        self._paths = {name: folder / name for name in names}
        self._settling = Settling(settle_time)
        self._told: queue.SimpleQueue[tuple[str, str]] = queue.SimpleQueue()
        self._looked = {name: _look(path) for name, path in self._paths.items()}
        self._told_of = dict(self._looked)
        self._by_path: dict[str, str] = {}
        self.warning = ""
        self._observer = Observer()
        self._watched: set[Path] = set()
        self._watch()
        self._observer.start()

    def _watch(self) -> None:
        """Watch the folders in which the files truly lie; a link may come to point elsewhere."""
        for name, path in self._paths.items():
            with contextlib.suppress(OSError, RuntimeError):
                for place in (path.absolute(), path.resolve()):
                    self._by_path[str(place)] = name
                    if place.parent not in self._watched:
                        self._watched.add(place.parent)
                        self._observe(place.parent)

    def _observe(self, folder: Path) -> None:
        try:
            self._observer.schedule(self, str(folder))
        except OSError as error:
            self.warning = (
                f"{folder}: the system does not tell of changes: {error.strerror}; the files are looked at instead"
            )

    def on_any_event(self, event: FileSystemEvent) -> None:
        """Called in the observer's thread."""
        if event.event_type in _WRITTEN:
            for path in (event.src_path, getattr(event, "dest_path", "")):
                name = self._by_path.get(path if isinstance(path, str) else bytes(path).decode())
                if name is not None:
                    self._told.put((name, event.event_type))

    def look(self, now: float) -> None:
        """Look at the files, should the system not have told of a change (a folder of another machine).

        What is found is believed the second time: the system's word, which knows of open files, may only be late.
        """
        for name, path in self._paths.items():
            seen, self._looked[name] = self._looked[name], _look(path)
            still = seen == self._looked[name] != self._told_of[name]
            if still and not self._settling.is_pending(name):
                self._settling.changed(name, "closed", now)
        self._watch()

    def due(self, now: float) -> list[str]:
        """Names of the files that have changed and may be read now; ``now`` of a steady clock, s."""
        with contextlib.suppress(queue.Empty):
            while True:
                name, kind = self._told.get_nowait()
                self._settling.changed(name, kind, now)
        due = self._settling.due(now)
        for name in due:
            self._told_of[name] = _look(self._paths[name])
        return due

    def leave(self) -> None:
        """Watch no more."""
        self._observer.stop()
        self._observer.join(timeout=2.0)


def _look(path: Path) -> tuple[Any, ...] | None:
    try:
        found = path.stat()
    except OSError:
        return None
    return found.st_mtime_ns, found.st_size, found.st_ino
