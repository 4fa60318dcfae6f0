"""What `colcon build` lays out, as a robot's workspace has it."""

import os
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from xml.etree import ElementTree

import pytest
from catkin_pkg.package import parse_package

import ballbal_ros

EXECUTABLES = {"ballbal", "whole_body_kinematics", "arm_compensation", "balance", "config_watch", "simulated_robot"}
FOLDERS = ("ballbal_ros", "config", "launch", "resource")
FILES = ("package.xml", "setup.py", "setup.cfg", "pyproject.toml", "LICENSE")
ROS_IMPORT = re.compile(r"^\s*(?:from|import) ([a-z0-9_]+(?:_msgs|_srvs|_interfaces)|rclpy|pinocchio)\b", re.MULTILINE)


@pytest.fixture(scope="module", params=["", "--symlink-install"])
def prefix(request: pytest.FixtureRequest, root: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """The package's install folder after `colcon build` of a workspace that holds a copy of the tree."""
    workspace = tmp_path_factory.mktemp("workspace")
    source = workspace / "src" / "ballbal_ros"
    source.mkdir(parents=True)
    for name in FOLDERS:
        shutil.copytree(root / name, source / name, ignore=shutil.ignore_patterns("__pycache__"))
    for name in FILES:
        shutil.copy(root / name, source / name)
    built = subprocess.run(
        [sys.executable, "-m", "colcon", "build", *filter(None, [request.param])],
        cwd=workspace,
        env={**os.environ, "COLCON_LOG_LEVEL": "30"},
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert built.returncode == 0, built.stdout + built.stderr
    assert "Finished <<< ballbal_ros" in built.stdout
    yield workspace / "install" / "ballbal_ros"
    shutil.rmtree(workspace)


def test_executables_lie_where_launch_looks(prefix: Path) -> None:
    """`ballbal` and every node are executable in lib/ballbal_ros, where launch looks for them (and not in bin/)."""
    folder = prefix / "lib" / "ballbal_ros"
    assert {path.name for path in folder.iterdir()} == EXECUTABLES
    assert all(os.access(path, os.X_OK) for path in folder.iterdir())
    assert not (prefix / "bin").exists()


def test_package_is_in_the_ament_index(prefix: Path) -> None:
    """The ament index knows the package, and its package.xml lies in its share folder."""
    assert (prefix / "share/ament_index/resource_index/packages/ballbal_ros").is_file()
    assert (prefix / "share/ballbal_ros/package.xml").is_file()


def test_launch_and_config_are_shared(prefix: Path, root: Path) -> None:
    """Every launch file, parameter file, URDF and plan of the tree is in share/ballbal_ros, with the same content."""
    share = prefix / "share" / "ballbal_ros"
    tree = [path for folder in ("launch", "config") for path in (root / folder).rglob("*.*") if path.suffix != ".pyc"]
    names = {path.relative_to(root).as_posix() for path in tree}
    assert {"launch/robot.launch.py", "launch/headless.launch.py"} <= names
    assert {"config/shelver/robot.yaml", "config/shelver/shelver.urdf", "config/plans/shelve.yaml"} <= names
    for name in names:
        assert (share / name).read_bytes() == (root / name).read_bytes(), name


def test_command_runs_from_the_workspace(prefix: Path) -> None:
    """The installed `ballbal` runs the workspace's own modules once the workspace is sourced."""
    sourced = f". {prefix.parent}/local_setup.sh && cd / && {prefix}/lib/ballbal_ros/ballbal --help"
    sourced += f" && {sys.executable} -c 'import ballbal_ros.nodes; print(ballbal_ros.__file__)'"
    ran = subprocess.run(["sh", "-c", sourced], capture_output=True, text=True, timeout=60, check=False)
    assert ran.returncode == 0, ran.stderr
    assert "rehearse" in ran.stdout
    assert Path(ran.stdout.splitlines()[-1]).is_relative_to(prefix.parent.parent)


def test_manifest_is_valid(root: Path) -> None:
    """package.xml is a valid manifest of format 3 (catkin_pkg checks it) and builds as ament_python."""
    package = parse_package(root / "package.xml")
    package.validate()
    assert package.package_format == 3
    assert package.get_build_type() == "ament_python"
    assert {"rclpy", "pinocchio", "launch_ros", "python3-numpy"} <= {depend.name for depend in package.exec_depends}


def test_version_is_one(root: Path) -> None:
    """package.xml, setup.py and the package itself tell the same version."""
    in_manifest = ElementTree.parse(root / "package.xml").getroot().findtext("version")
    in_setup = re.search(r'version="([^"]+)"', (root / "setup.py").read_text())
    assert in_setup is not None
    assert in_manifest == in_setup[1] == ballbal_ros.__version__


def test_manifest_names_what_is_imported(root: Path) -> None:
    """Each ROS package that the sources import is a dependency in package.xml."""
    imported: set[str] = set()
    for source in (root / "ballbal_ros").rglob("*.py"):
        imported |= set(ROS_IMPORT.findall(source.read_text()))
    assert {"rclpy", "pinocchio"} <= imported
    optional = {"control_msgs"}
    assert imported - optional <= {depend.name for depend in parse_package(root / "package.xml").exec_depends}
