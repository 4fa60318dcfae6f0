"""What is written into a parameter file reads back as it was."""

from __future__ import annotations

import random
import shutil
from pathlib import Path
from typing import Any

import pytest

from ballbal_ros.declaration import declarations, flatten, load, read_parameter_file
from ballbal_ros.parameter_files import FILES, read_values
from ballbal_ros.parameter_text import edited, yaml_text
from helpers.robots import CONFIG


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
