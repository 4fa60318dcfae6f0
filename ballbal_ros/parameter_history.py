"""The accepted parameter sets of a robot, a JSON file each with time and checksum: the one before is at hand."""

from __future__ import annotations

import contextlib
import json
import os
import re
import tempfile
from collections.abc import Iterator, Mapping
from datetime import datetime, timezone
from pathlib import Path

import attrs

from ballbal_ros.parameter_files import FILES, ParameterSet

_NAME = re.compile(r"^(\d{6,})-[0-9TZ.]+-[0-9a-f]{12}\.json$")


@attrs.frozen
class Accepted:
    """One accepted set: what was ``in_force`` from ``time`` (UTC, ISO 8601) on, why; what the ``files`` said then."""

    number: int
    time: str
    source: str
    in_force: ParameterSet
    files: ParameterSet


def state_folder(robot: Path, environment: Mapping[str, str]) -> Path:
    """Where a robot's sets are kept unless told otherwise: below XDG_STATE_HOME (XDG Base Directory 0.8)."""
    home = environment.get("XDG_STATE_HOME", "")
    user = Path(environment.get("HOME", "~")).expanduser()
    base = Path(home) if os.path.isabs(home) else user / ".local" / "state"
    return base / "ballbal_ros" / robot.name


class ParameterHistory:
    """A folder of accepted sets; the newest ``keep`` stay. A file in it that is broken or not ours is left out."""

    def __init__(self, folder: Path, keep: int) -> None:
        self.folder, self._keep = folder, keep

    def _paths(self) -> list[tuple[int, Path]]:
        """Newest first. Numbers, for a clock may be set back."""
        if not self.folder.is_dir():
            return []
        found = [(match, path) for path in self.folder.iterdir() if (match := _NAME.match(path.name))]
        return sorted(((int(match[1]), path) for match, path in found), reverse=True)

    def entries(self) -> Iterator[Accepted]:
        """All sets whose checksum is right, newest first."""
        for number, path in self._paths():
            with contextlib.suppress(OSError, ValueError, KeyError, TypeError, AttributeError):
                document = json.loads(path.read_text(encoding="utf-8"))
                in_force, files = (_checked(document[key]) for key in ("in_force", "files"))
                if in_force.checksum == document["checksum"]:
                    yield Accepted(number, str(document["time"]), str(document["source"]), in_force, files)

    def last(self) -> Accepted | None:
        """The newest set."""
        return next(self.entries(), None)

    def before(self, present: ParameterSet) -> Accepted | None:
        """The newest set that differs from the present one."""
        return next((entry for entry in self.entries() if entry.in_force.checksum != present.checksum), None)

    def add(self, in_force: ParameterSet, files: ParameterSet, source: str, now: float) -> None:
        """Keep a set; ``now`` is the Unix time in s. One that repeats the newest is not kept again. Raises OSError."""
        last = self.last()
        if last is not None and (last.in_force, last.files) == (in_force, files):
            return
        time = datetime.fromtimestamp(now, timezone.utc)
        checksum = in_force.checksum
        document = {
            "time": time.isoformat(),
            "source": source,
            "checksum": checksum,
            "in_force": in_force.files,
            "files": files.files,
        }
        paths = self._paths()
        number = paths[0][0] + 1 if paths else 1
        stamp = time.strftime("%Y%m%dT%H%M%S.%fZ")
        text = json.dumps(document, indent=1, ensure_ascii=False)
        self.folder.mkdir(parents=True, exist_ok=True)
        write_whole(self.folder / f"{number:06d}-{stamp}-{checksum[:12]}.json", text)
        for _, path in paths[self._keep - 1 :]:
            path.unlink(missing_ok=True)


def _checked(files: Mapping[str, Mapping[str, object]]) -> ParameterSet:
    return ParameterSet({name: dict(values) for name, values in files.items() if name in FILES})


def write_whole(path: Path, text: str) -> None:
    """Write a file so that whoever reads it finds the old text or the new, never a part. Raises OSError."""
    mode = path.stat().st_mode & 0o777 if path.exists() else 0o644
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with open(handle, "w", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(name, mode)
        os.replace(name, path)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(name)
        raise
