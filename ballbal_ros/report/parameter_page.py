"""``docs/parameters.md``, written from the declarations: ``python -m ballbal_ros.report.parameter_page``."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import attrs

from ballbal_ros.declaration import Declaration, declarations
from ballbal_ros.parameter_change import value_text
from ballbal_ros.parameter_files import FILES, OWN, READERS

_ABOUT = """\
# Parameters

Written by `python -m ballbal_ros.report.parameter_page` from the declarations; a test holds it to them.

The four files of `config/<robot>` are ROS 2 parameter files (`/**:` with `ros__parameters:` below it). What a file does
not name has its default; one with no default must be given. An unknown name, a value of another type and one outside
its range are refused in one line; numbers with decimals need their point (`3.0`), as ROS takes no integer for them.
`<name>` stands for each member of a group.

*Run time* says whether a value may change while the nodes run: by saving the file, which `config_watch` then takes in
whole or not at all, or by `ros2 param set`. All others take effect when the nodes start.
"""
_HEAD = "| name | type | default | unit | range | run time | meaning |\n|---|---|---|---|---|---|---|"


def page() -> str:
    """The whole page as text."""
    parts = [_ABOUT]
    for file, cls in FILES.items():
        parts.append(f"## {file}\n\n{_about(cls)} Read by {_listed(READERS[file])}.\n\n{_table(cls)}\n")
    for node, cls in OWN.items():
        parts.append(f"## {node}\n\nThe node's own, given by `-p`, besides its files.\n\n{_table(cls)}\n")
    return "\n".join(parts)


def _about(cls: type) -> str:
    """What a file is about: its module says so after the colon."""
    text = (sys.modules[cls.__module__].__doc__ or "").splitlines()[0].partition(": ")[2]
    return text[:1].upper() + text[1:]


def _listed(names: tuple[str, ...]) -> str:
    return ", ".join(f"`{name}`" for name in names)


def _table(cls: type) -> str:
    return "\n".join((_HEAD, *_rows(cls)))


def _rows(cls: type) -> Iterator[str]:
    for declared in declarations(cls):
        cells = (
            f"`{declared.name}`",
            declared.kind.replace("_", " "),
            _default(declared),
            "" if declared.unit == "-" else declared.unit,
            _range(declared),
            "yes" if declared.runtime else "",
            declared.meaning,
        )
        yield "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _range(declared: Declaration) -> str:
    return declared.range_text or ("" if declared.length is None else f"{declared.length} numbers")


def _default(declared: Declaration) -> str:
    if declared.required:
        return "must be given"
    value: Any = declared.default
    if isinstance(value, attrs.Factory):  # type: ignore[arg-type]
        value = value.factory()
    return f"`{value_text(value)}`" if value != "" else "empty"


def main() -> None:
    """Write the page into the repository that this module lies in."""
    path = Path(__file__).resolve().parents[2] / "docs" / "parameters.md"
    path.parent.mkdir(exist_ok=True)
    path.write_text(page(), encoding="utf-8")


if __name__ == "__main__":
    main()
