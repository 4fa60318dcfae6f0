"""The trust boundary of docs/security.md, held by reading the code: safe YAML, nothing unpickled, nothing run as code,
no file opened because a message came.
"""

from __future__ import annotations

import ast
from collections import defaultdict
from collections.abc import Iterator
from pathlib import Path

import pytest
import yaml

from ballbal_ros.errors import ParameterError
from ballbal_ros.yaml_files import _Loader, parse_yaml

PACKAGE = Path(__file__).resolve().parents[1] / "ballbal_ros"
FILES = sorted(PACKAGE.rglob("*.py"))
TREES = {path: ast.parse(path.read_text(encoding="utf-8")) for path in FILES}
SAFE_LOADERS = {"_Loader", "yaml.SafeLoader", "SafeLoader"}
SAFE_CALLS = {"safe_load", "safe_dump", "compose", "load"}
UNPICKLES = {"pickle", "_pickle", "cPickle", "dill", "cloudpickle", "marshal", "shelve", "joblib"}
RUNS_TEXT = {"eval", "exec", "compile", "__import__"}
OPENS = {"open", "read_text", "read_bytes", "write_text", "write_bytes", "unlink", "mkdir", "rename", "replace_file"}
OPENS |= {"read_yaml", "read_parameter_file", "read_values", "read_story", "Popen"}
# Methods of ours of such a name, which are followed like any other.
OURS = {"self.weighing.open"}
# Names that every library has too: a call of `x.get()` is no call of ours.
EVERYWHERE = {"get", "append", "update", "copy", "values", "items", "pop", "clear", "add", "keys", "extend", "close"}


def called(node: ast.AST) -> Iterator[ast.Call]:
    return (inner for inner in ast.walk(node) if isinstance(inner, ast.Call))


def name_of(function: ast.expr) -> str:
    """The last name of what is called."""
    return function.attr if isinstance(function, ast.Attribute) else getattr(function, "id", "")


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_yaml_is_read_by_a_safe_loader_only(path: Path) -> None:
    """Wherever a YAML document is read, its loader makes plain data only, and is named."""
    for call in called(TREES[path]):
        if not ast.unparse(call.func).startswith("yaml."):
            continue
        name = name_of(call.func)
        if name in ("load", "compose", "load_all", "parse"):
            given = {word.arg: ast.unparse(word.value) for word in call.keywords}
            assert given.get("Loader") in SAFE_LOADERS, ast.unparse(call)
        assert name in SAFE_CALLS or name[0].isupper(), ast.unparse(call)


def test_the_loader_makes_plain_data_only() -> None:
    """It is the safe one's kin, and refuses whatever would make an object or call something."""
    assert issubclass(_Loader, yaml.SafeLoader)
    for text in ("!!python/object/apply:os.system ['true']", "!!python/name:os.system", "a: !!python/tuple [1]"):
        with pytest.raises(ParameterError):
            parse_yaml(text, "test")


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_nothing_is_unpickled_or_run_as_code(path: Path) -> None:
    """No pickle or its kin, no numpy.load, no eval, no shell."""
    for node in ast.walk(TREES[path]):
        if isinstance(node, (ast.Import, ast.ImportFrom)):
            names = [node.module or ""] if isinstance(node, ast.ImportFrom) else [alias.name for alias in node.names]
            assert not {name.split(".")[0] for name in names} & UNPICKLES, ast.unparse(node)
    for call in called(TREES[path]):
        whole = ast.unparse(call.func)
        assert whole not in RUNS_TEXT | {"np.load", "numpy.load", "os.system", "os.popen"}, ast.unparse(call)
        assert not any(word.arg == "shell" for word in call.keywords), ast.unparse(call)


def test_whoever_joins_the_bus_stays_on_this_machine() -> None:
    """Each place that starts ROS has it talk on this machine only first, unless the environment says otherwise."""
    joining = 0
    for path, tree in TREES.items():
        for function in (node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)):
            names = [ast.unparse(call.func) for call in called(function)]
            if "rclpy.init" in names:
                joining += 1
                before = names[: names.index("rclpy.init")]
                assert any(name.endswith("stay_on_this_machine") for name in before), f"{path}: {function.name}"
    assert joining >= 3


def functions() -> dict[str, list[tuple[Path, ast.FunctionDef]]]:
    """All functions and methods that a node may call, by name: nodes import no commands (test_house.py)."""
    found: dict[str, list[tuple[Path, ast.FunctionDef]]] = defaultdict(list)
    for path, tree in TREES.items():
        if path.relative_to(PACKAGE).parts[0] in ("commands", "report"):
            continue
        for node in ast.walk(tree):
            if isinstance(node, ast.FunctionDef):
                found[node.name].append((path, node))
    return found


def callbacks() -> set[tuple[Path, str]]:
    """Where and what the functions are that messages come to."""
    found = set()
    for path, tree in TREES.items():
        if path.parent.name != "nodes":
            continue
        for call in called(tree):
            if name_of(call.func) in ("subscribe", "subscribe_with_age", "create_subscription"):
                found |= {(path, name_of(word)) for word in call.args if isinstance(word, (ast.Attribute, ast.Name))}
    return found


def closure(path: Path) -> set[Path]:
    """All files of the package that a file imports, directly or by way of others."""
    found, waiting = set(), [path]
    while waiting:
        here = waiting.pop()
        if here in found:
            continue
        found.add(here)
        for node in ast.walk(TREES[here]):
            if isinstance(node, ast.ImportFrom) and (node.module or "").startswith(f"{PACKAGE.name}."):
                parts = str(node.module).split(".")[1:]
                names = [[*parts, alias.name] for alias in node.names]
                files = [PACKAGE.joinpath(*way).with_suffix(".py") for way in (parts, *names)]
                waiting += [file for file in files if file in TREES]
    return found


# topics.py and pace.py hand callbacks on; what comes to config_watch by topic only goes into a queue.
ENTRIES = sorted({path for path, _ in callbacks() if path.stem not in ("topics", "pace", "config_watch")})


def test_every_node_that_hears_topics_is_looked_at() -> None:
    """None of those that the robot's messages come to is left out."""
    nodes = {"balance", "balance_requests", "arm_compensation", "whole_body_kinematics", "simulated_robot"}
    assert nodes <= {path.stem for path in ENTRIES}


@pytest.mark.parametrize("entry", ENTRIES, ids=lambda p: p.stem)
def test_no_message_opens_a_file(entry: Path) -> None:
    """Nothing that a message's callback may call, through however many functions of ours, opens or starts anything.

    Calls are followed by name alone (a private name within its file) into all that the node's file imports, so that
    rather too much is looked at than too little.
    """
    known, within, seen = functions(), closure(entry), set()
    waiting = [(path, name, name) for path, name in sorted(callbacks()) if path == entry and name not in EVERYWHERE]
    assert waiting
    # A callback may be another object's method.
    private = {name for _, name, _ in waiting}
    while waiting:
        caller, name, way = waiting.pop()
        for path, function in known[name]:
            elsewhere = path not in within or (name.startswith("_") and path != caller and name not in private)
            if elsewhere or (path, function.lineno) in seen:
                continue
            seen.add((path, function.lineno))
            for call in called(function):
                inner = name_of(call.func)
                where = f"{path.relative_to(PACKAGE)}: {way} > {ast.unparse(call)[:80]}"
                assert inner not in OPENS or ast.unparse(call.func) in OURS, where
                if inner in known and inner not in EVERYWHERE:
                    waiting.append((path, inner, f"{way} > {inner}"))
    assert seen
