"""The page of parameters is what the declarations say, and they say enough of every parameter."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import attrs
import pytest

from ballbal_ros.declaration import declarations
from ballbal_ros.parameter_files import FILES, OWN, READERS
from ballbal_ros.report.parameter_page import page

CLASSES = {**FILES, **OWN}


def test_the_page_is_current(root: Path):
    """docs/parameters.md is what the declarations give now; `python -m ballbal_ros.report.parameter_page` writes it."""
    assert (root / "docs" / "parameters.md").read_text(encoding="utf-8") == page()


@pytest.mark.parametrize("name", CLASSES)
def test_every_parameter_says_what_it_is(name: str):
    """Each has a unit, a meaning and, where it is a number, a range that its default lies in."""
    names = [declared.name for declared in declarations(CLASSES[name])]
    assert names and len(names) == len(set(names))
    for declared in declarations(CLASSES[name]):
        assert declared.unit, declared.name
        assert declared.meaning and declared.meaning[0] != " " and not declared.meaning.endswith("."), declared.name
        if declared.kind in ("double", "integer"):
            assert declared.low is not None and declared.high is not None, f"{declared.name} has no range"
            if declared.default is not attrs.NOTHING:
                assert declared.low <= declared.default <= declared.high, declared.name


@pytest.mark.parametrize("name", CLASSES)
def test_every_parameter_stands_on_the_page_with_its_unit_range_and_meaning(name: str):
    """One row each, below its file or node, with unit, range and meaning."""
    section = page().split(f"\n## {name}\n")[1].split("\n## ")[0]
    for declared in declarations(CLASSES[name]):
        (row,) = [line for line in section.splitlines() if line.startswith(f"| `{declared.name}` |")]
        for word in (declared.unit, declared.range_text.replace("|", "\\|"), declared.meaning.replace("|", "\\|")):
            assert word == "-" or word in row


def test_what_may_change_at_run_time_has_one_reader():
    """A file with a value that may change at run time is read by one node: it is taken in whole or not at all."""
    for file, cls in FILES.items():
        if any(declared.runtime for declared in declarations(cls)):
            assert len(READERS[file]) == 1, file


def test_no_node_gets_one_name_from_two_declarations_that_may_change():
    """ROS gives a node one value by one name: a name that a node has twice never changes at run time."""
    for node in OWN:
        files = [file for file, readers in READERS.items() if node in readers]
        seen: dict[str, str] = {}
        for source, cls in [*((file, FILES[file]) for file in files), (node, OWN[node])]:
            for declared in declarations(cls):
                assert not (declared.name in seen and declared.runtime), (node, declared.name, source)
                seen[declared.name] = source


def test_the_page_is_written_without_ros(root: Path):
    """The page needs neither rclpy nor MuJoCo."""
    code = (
        "import sys, ballbal_ros.report.parameter_page as p; p.page();"
        "print(*(m in sys.modules for m in ('rclpy', 'mujoco')))"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["False", "False"]
