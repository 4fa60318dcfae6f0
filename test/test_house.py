"""The house's own rules: who may import whom, what is documented, that what the README shows can be run."""

from __future__ import annotations

import ast
import re
import shlex
import subprocess
import sys
from pathlib import Path

import attrs
import pytest

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import declarations
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.parameters import SimulationParameters

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "ballbal_ros"
# Who stands on whom; balance knows motion's plans, motion knows nothing of balance.
STANDS_ON = {
    "robot": set(),
    "motion": {"robot"},
    "balance": {"robot", "motion"},
    "bring_up": {"robot"},
    "weighing": {"robot", "motion", "balance"},
    "simulation": {"robot", "motion", "balance", "weighing"},
    "report": {"robot", "motion", "balance", "weighing", "simulation"},
    "nodes": {"robot", "motion", "balance", "weighing", "simulation", "report"},
    "commands": {"robot", "motion", "balance", "bring_up", "weighing", "simulation", "report", "nodes"},
}
MAY_KNOW_ROS = {"nodes", "commands"}
ROS = (
    "rclpy",
    "rcl_interfaces",
    "sensor_msgs",
    "geometry_msgs",
    "std_msgs",
    "nav_msgs",
    "trajectory_msgs",
    "diagnostic_msgs",
)
FILES = sorted(PACKAGE.rglob("*.py"))


def imports(path: Path) -> list[str]:
    """Dotted names of all modules that a file imports, wherever in it."""
    names = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path} imports relatively"
            names.append(node.module or "")
    return names


def room(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0] if len(parts) > 1 else ""


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_no_import_goes_up(path: Path):
    """A room imports only what it stands on, and only the roof knows ROS."""
    here = room(path)
    for name in imports(path):
        parts = name.split(".")
        if parts[0] == "ballbal_ros" and len(parts) > 1 and parts[1] in STANDS_ON and here:
            assert parts[1] == here or parts[1] in STANDS_ON[here], f"{here} imports {name}"
        if parts[0] in ROS:
            assert here in MAY_KNOW_ROS or path.name == "stack.py", f"{path.name} imports {name}"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_everything_public_is_documented(path: Path):
    """Every module, public class and public function has a docstring; no function is longer than 60 lines."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert ast.get_docstring(tree), f"{path} has no docstring"
    for owner in [tree, *(node for node in tree.body if isinstance(node, ast.ClassDef))]:
        for node in owner.body:
            if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)) and not node.name.startswith(
                "_"
            ):
                setter = any(isinstance(d, ast.Attribute) and d.attr == "setter" for d in node.decorator_list)
                assert setter or ast.get_docstring(node), f"{path}: {node.name} has no docstring"
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef):
            assert (node.end_lineno or 0) - node.lineno <= 60, f"{path}: {node.name} is too long"


@pytest.mark.parametrize("cls", [RobotParameters, BalanceParameters, CompensationParameters, SimulationParameters])
def test_every_parameter_has_unit_meaning_and_range(cls: type):
    """What has a size has a range, and a default lies in it."""
    for declared in declarations(cls):
        assert declared.unit and declared.meaning, declared.name
        if declared.kind in ("double", "integer"):
            assert declared.low is not None and declared.high is not None, f"{declared.name} has no range"
            if declared.default is not attrs.NOTHING:
                assert declared.low <= declared.default <= declared.high, declared.name


def test_no_name_of_this_machine_is_committed():
    """No committed text holds a path of the machine it was written on, nor anybody's home or a temporary file."""
    homes = {str(ROOT), str(Path.home()), *([sys.prefix] if sys.prefix != sys.base_prefix else [])} - {"/"}
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode:
        pytest.skip("no git here")
    for name in listed.stdout.split():
        path = ROOT / name
        if path.suffix in (".png", ".mcap") or path == Path(__file__) or not path.is_file():
            continue
        text = path.read_text(encoding="utf-8", errors="replace")
        assert not re.search(r"/(tmp|root|home|Users)/\w", text) and not any(home in text for home in homes), name


def commands_shown() -> list[str]:
    """The `ballbal` commands that the README shows, one a line in its code blocks."""
    blocks = re.findall(r"```(?:sh|bash)\n(.*?)```", (ROOT / "README.md").read_text(encoding="utf-8"), re.S)
    return [line.strip() for block in blocks for line in block.splitlines() if line.strip().startswith("ballbal ")]


def test_the_readme_shows_every_command():
    """No verb is left out of the README."""
    shown = {line.split()[1] for line in commands_shown()}
    verbs = set(
        re.findall(r'app\.command\("([a-z-]+)"\)', (PACKAGE / "commands" / "main.py").read_text(encoding="utf-8"))
    )
    assert verbs <= shown


@pytest.mark.parametrize("line", [line for line in commands_shown() if line.split()[1] not in ("headless", "weigh-in")])
def test_what_the_readme_shows_runs(line: str, tmp_path: Path):
    """Every command of the README runs as it stands there (headless, which needs the bus, and weigh-in, which
    takes long, have tests of their own).
    """
    words = shlex.split(line)[1:]
    words = [str(tmp_path / word) if word.endswith((".png", ".json")) else word for word in words]
    run = subprocess.run(
        [sys.executable, "-m", "ballbal_ros.commands.main", *words],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert run.returncode in (0, 1), run.stderr  # 1: done, but outside a limit, as a hard push is
