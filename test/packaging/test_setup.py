"""What set-up does on a machine that is not as it should be, and that it installs once only."""

import os
import shutil
import subprocess
import sys
import sysconfig
from pathlib import Path

import pytest

# An interpreter that plays a machine's Python: it answers what set-up asks, makes a folder where an environment is
# asked for, and writes down each call of pip instead of installing.
STAND_IN = """#!/bin/sh
here=$(cd "$(dirname "$0")" && pwd)
case "$*" in
    *_base_executable*) echo "3 {minor} {folder}/python3"; echo "3.{minor}.0 (stand-in)" ;;
    *"import ensurepip"*) exit {no_ensurepip} ;;
    *"import sys; print(sys.version)"*) echo "3.{minor}.0 (stand-in)" ;;
    *"-m venv"*) mkdir -p "$4/bin" && cp "{folder}/python3" "$4/bin/python" && echo venv >> {folder}/calls ;;
    *"-m pip --version"*) echo "pip 24" ;;
    *"-m pip install"*)
        echo "pip $* user=$PIP_USER target=${{PIP_TARGET-none}}" >> {folder}/calls
        echo "{pip_says}"; exit {pip_fails} ;;
    *"import ballbal_ros.simulation.compiled"*) echo "{compiler_says}"; exit {compiler_fails} ;;
    *) echo "not expected: $*" >&2; exit 99 ;;
esac
"""


@pytest.fixture
def tree(root: Path, tmp_path: Path) -> Path:
    """A copy of all that set-up reads."""
    copy = tmp_path / "tree"
    for folder in ("tools", "constraints"):
        shutil.copytree(root / folder, copy / folder)
    for name in ("Makefile", "setup.py", "setup.cfg", "pyproject.toml"):
        shutil.copy(root / name, copy / name)
    return copy


AS_IT_SHOULD_BE = {
    "minor": 12,
    "no_ensurepip": 0,
    "pip_says": "",
    "pip_fails": 0,
    "compiler_says": "",
    "compiler_fails": 0,
}


def stand_in(folder: Path, **differs: str | int) -> Path:
    """``differs``: from :data:`AS_IT_SHOULD_BE`."""
    folder.mkdir(exist_ok=True)
    python = folder / "python3"
    python.write_text(STAND_IN.format(folder=folder, **{**AS_IT_SHOULD_BE, **differs}))
    python.chmod(0o755)
    return python


def set_up(tree: Path, *words: str, python: str | Path, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [tree / "tools/setup_venv.sh", *words],
        env={**os.environ, "PYTHON": str(python), **environment},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def calls(folder: Path) -> list[str]:
    record = folder / "calls"
    return record.read_text().splitlines() if record.exists() else []


def assert_refused(result: subprocess.CompletedProcess[str], *words: str) -> None:
    assert result.returncode == 2, result.stdout + result.stderr
    lines = result.stderr.splitlines()
    assert len(lines) == 1, result.stderr
    for word in ("set-up: ", *words):
        assert word in lines[0], lines[0]


@pytest.mark.parametrize(("minor", "words"), [(9, ["kilted"]), (15, ["kilted"]), (13, ["jazzy"])])
def test_wrong_python_is_refused(tree: Path, tmp_path: Path, minor: int, words: list[str]) -> None:
    """A Python that a set of versions has no wheels for is refused in one line, which names one that would do."""
    result = set_up(tree, *words, python=stand_in(tmp_path / "bin", minor=minor))
    assert_refused(result, f"is Python 3.{minor}", f"the {words[0]} set needs 3.10 to 3.", "make PYTHON=")
    assert calls(tmp_path / "bin") == []


def test_python_two_is_refused(tree: Path, tmp_path: Path) -> None:
    """Python 2 is refused in one line, whatever its minor version."""
    python = tmp_path / "python3"
    python.write_text("#!/bin/sh\necho '2 11 /usr/bin/python2'\n")
    python.chmod(0o755)
    assert_refused(set_up(tree, python=python), "is Python 2.11")


def test_missing_python_is_refused(tree: Path, tmp_path: Path) -> None:
    """Where there is no Python, one line says what to install."""
    assert_refused(set_up(tree, python=tmp_path / "nothing"), "does not run", "apt install python3 python3-venv")


def test_missing_ensurepip_is_refused(tree: Path, tmp_path: Path) -> None:
    """On a Debian or Ubuntu without python3-venv, one line names that package."""
    result = set_up(tree, python=stand_in(tmp_path / "bin", no_ensurepip=1))
    assert_refused(result, "apt install python3-venv", "python3.12-venv")


def test_a_compiler_that_fails_is_told(tree: Path, tmp_path: Path) -> None:
    """Where the simulation can't be compiled, one line says so, and what it said; the next call tries again."""
    python = stand_in(tmp_path / "bin", compiler_says="no room left", compiler_fails=1)
    assert_refused(set_up(tree, python=python), "can't be compiled", "no room left")
    assert_refused(set_up(tree, python=python), "can't be compiled")


def test_other_machine_is_refused(tree: Path, tmp_path: Path) -> None:
    """On another processor, one line says that the wheels are for x86-64."""
    python = stand_in(tmp_path / "bin")
    uname = tmp_path / "bin" / "uname"
    uname.write_text("#!/bin/sh\necho Linux aarch64\n")
    uname.chmod(0o755)
    result = set_up(tree, python=python, PATH=f"{uname.parent}:{os.environ['PATH']}")
    assert_refused(result, "Linux aarch64", "x86_64", "colcon")


@pytest.mark.parametrize(("words", "named"), [(["humble"], "SET=humble"), (["kilted", "all"], "'all'")])
def test_unknown_set_is_refused(tree: Path, tmp_path: Path, words: list[str], named: str) -> None:
    """An unknown set of versions is refused in one line that names the known ones."""
    assert_refused(set_up(tree, *words, python=stand_in(tmp_path / "bin")), named, "is not known; use")


def test_no_network_is_said_in_one_line(tree: Path) -> None:
    """With a real pip and an index that does not answer, one line says so, and nothing counts as installed."""
    offline = {"PIP_INDEX_URL": "http://127.0.0.1:9", "PIP_CONFIG_FILE": os.devnull, "PIP_RETRIES": "0"}
    for name in ("PIP_FIND_LINKS", "PIP_EXTRA_INDEX_URL"):
        offline[name] = ""
    result = set_up(tree, python=sys.executable, **offline)
    assert_refused(result, "the package index can't be reached", "PIP_INDEX_URL")
    assert not list((tree / ".venv").glob("set-up-*"))


def test_failed_install_is_tried_again(tree: Path, tmp_path: Path) -> None:
    """When pip fails, one line gives its reason, and the next call installs."""
    folder = tmp_path / "bin"
    python = stand_in(folder, pip_says="ERROR: No space left on device", pip_fails=1)
    assert_refused(set_up(tree, python=python), "pip failed: ERROR: No space left on device", ".venv.log")
    shutil.rmtree(tree / ".venv")
    assert set_up(tree, python=stand_in(folder)).returncode == 0
    assert sum(call.startswith("pip") for call in calls(folder)) == 2


def test_failed_test_install_leaves_the_demo_ready(tree: Path, tmp_path: Path) -> None:
    """When bringing the test packages fails, what the demo needs is there still, and is not installed again."""
    folder = tmp_path / "bin"
    set_up(tree, "kilted", "run", python=stand_in(folder))
    python = stand_in(folder, pip_fails=1, pip_says="ERROR: ConnectionError")
    shutil.copy(python, tree / ".venv/bin/python")
    assert_refused(set_up(tree, "kilted", "test", python=python), "the package index can't be reached")
    before = calls(folder)
    assert set_up(tree, "kilted", "run", python=python).returncode == 0
    assert calls(folder) == before


def test_second_call_installs_nothing(tree: Path, tmp_path: Path) -> None:
    """What is there is not installed again; what `test` brought serves `run` too."""
    folder = tmp_path / "bin"
    python = stand_in(folder)
    assert set_up(tree, "kilted", "run", python=python).returncode == 0
    assert len(calls(folder)) == 2
    assert "-c constraints/kilted.txt -e .[headless] " in calls(folder)[1]
    again = set_up(tree, "kilted", "run", python=python)
    assert (again.returncode, again.stdout, again.stderr) == (0, "", "")
    assert len(calls(folder)) == 2

    assert set_up(tree, "kilted", "test", python=python).returncode == 0
    assert "-e .[headless,test] " in calls(folder)[2]
    for level in ("test", "run"):
        assert set_up(tree, "kilted", level, python=python).returncode == 0
    assert len(calls(folder)) == 3


def test_sets_live_apart(tree: Path, tmp_path: Path) -> None:
    """The jazzy set has a folder, a list of versions and an extra of its own."""
    folder = tmp_path / "bin"
    assert set_up(tree, "jazzy", "test", python=stand_in(folder)).returncode == 0
    assert "-c constraints/jazzy.txt -e .[headless-jazzy,test] " in calls(folder)[1]
    assert (tree / ".venv-jazzy/bin/python").exists()
    assert not (tree / ".venv").exists()


@pytest.mark.parametrize("changed", ["setup.py", "setup.cfg", "pyproject.toml", "constraints/kilted.txt"])
def test_changed_files_install_again(tree: Path, tmp_path: Path, changed: str) -> None:
    """When a file that says what to install has changed, the next call installs, into the same environment."""
    folder = tmp_path / "bin"
    python = stand_in(folder)
    set_up(tree, python=python)
    with open(tree / changed, "a") as file:
        file.write("# changed\n")
    assert set_up(tree, python=python).returncode == 0
    assert [call.split()[0] for call in calls(folder)] == ["venv", "pip", "pip"]


def test_other_python_makes_it_anew(tree: Path, tmp_path: Path) -> None:
    """When the interpreter's version has changed, the environment is made anew."""
    folder = tmp_path / "bin"
    set_up(tree, python=stand_in(folder, minor=12))
    assert set_up(tree, python=stand_in(folder, minor=13)).returncode == 0
    assert [call.split()[0] for call in calls(folder)] == ["venv", "pip", "venv", "pip"]


def test_moved_tree_installs_again(tree: Path, tmp_path: Path) -> None:
    """An environment that was moved with its tree is not taken for ready: its scripts point to the old place."""
    folder = tmp_path / "bin"
    python = stand_in(folder)
    set_up(tree, python=python)
    moved = tree.rename(tmp_path / "elsewhere")
    assert set_up(moved, python=python).returncode == 0
    assert sum(call.startswith("pip") for call in calls(folder)) == 2


def test_users_pip_settings_stay_outside(tree: Path, tmp_path: Path) -> None:
    """Settings that send pip elsewhere (PIP_USER, PIP_TARGET) do not reach the environment."""
    folder = tmp_path / "bin"
    set_up(tree, python=stand_in(folder), PIP_USER="1", PIP_TARGET="/nowhere")
    assert calls(folder)[1].endswith("user=0 target=none")


def test_executables_are_in_the_environment() -> None:
    """Pip puts `ballbal` and every node beside the interpreter, whatever setup.cfg tells colcon."""
    scripts = Path(sysconfig.get_path("scripts"))
    for name in ("ballbal", "whole_body_kinematics", "arm_compensation", "balance", "simulated_robot"):
        assert os.access(scripts / name, os.X_OK), f"{name} is not in {scripts}: run the tests by `make test`"
