"""Packaging of ballbal_ros, for pip and for colcon alike (`ament_python`).

On a robot ROS, Pinocchio and the rest come from rosdep (package.xml); the extras here are for machines without ROS.
"""

from pathlib import Path

from setuptools import find_packages, setup

PACKAGE = "ballbal_ros"
SHARE = f"share/{PACKAGE}"
NODES = ("whole_body_kinematics", "arm_compensation", "balance", "config_watch", "simulated_robot")
INTERFACES = (
    "builtin-interfaces",
    "diagnostic-msgs",
    "geometry-msgs",
    "lifecycle-msgs",
    "nav-msgs",
    "rcl-interfaces",
    "rosgraph-msgs",
    "sensor-msgs",
    "std-msgs",
    "std-srvs",
    "trajectory-msgs",
    "visualization-msgs",
)
SIMULATION = ["matplotlib>=3.8", "mujoco>=3.3,<5", "numba>=0.61", "rosbags>=0.10"]


def config_files() -> list[tuple[str, list[str]]]:
    """One entry per folder under config/, as data_files wants them; editors' leftovers stay out."""
    folders: dict[str, list[str]] = {}
    for path in sorted(Path("config").rglob("*")):
        if path.is_file() and path.suffix in {".yaml", ".urdf"}:
            folders.setdefault(f"{SHARE}/{path.parent.as_posix()}", []).append(path.as_posix())
    return list(folders.items())


setup(
    name=PACKAGE,
    version="0.1.0",
    description="Balance and arm compensation for a mobile manipulator that stands on one rolling ball",
    author="ballbal_ros developers",
    maintainer="ballbal_ros developers",
    maintainer_email="maintainers@ballbal-ros.example",
    license="Apache-2.0",
    python_requires=">=3.10",
    packages=find_packages(include=[PACKAGE, f"{PACKAGE}.*"]),
    package_data={PACKAGE: ["py.typed"]},
    data_files=[
        ("share/ament_index/resource_index/packages", [f"resource/{PACKAGE}"]),
        (SHARE, ["package.xml"]),
        (f"{SHARE}/launch", [path.as_posix() for path in sorted(Path("launch").glob("*.launch.py"))]),
        *config_files(),
    ],
    zip_safe=False,
    install_requires=[
        "attrs>=23.2",
        "cattrs>=23.2",
        "numpy>=1.26",
        "PyYAML>=6",
        "rich>=13",
        "scipy>=1.11",
        "typer>=0.9",
        "watchdog>=3",
    ],
    extras_require={
        # The newest ROS that is tested, as wheels.
        "headless": [
            "pin>=2.7,<5",
            "ros-rclpy>=9.1,<10",
            "ros-rmw-fastrtps-cpp>=9.3,<10",
            *(f"ros-{name}" for name in INTERFACES),
            *SIMULATION,
        ],
        # The ROS of Ubuntu 24.04, as wheels: they were built against NumPy 1.
        "headless-jazzy": [
            "numpy<2",
            "pin>=2.7,<3",
            "ros-jazzy-rclpy>=7.1,<8",
            "ros-jazzy-rmw-fastrtps-cpp>=8.4,<9",
            *(f"ros-jazzy-{name}" for name in INTERFACES),
            *SIMULATION,
        ],
        "test": [
            "colcon-common-extensions>=0.3",
            "control>=0.10",
            "example-robot-data>=4.3",
            "mypy>=1.10",
            "pytest>=8",
            "pytest-benchmark>=4",
            "pytest-rerunfailures>=14",
            "pytest-xdist>=3",
            "ruff>=0.6",
            "scipy-stubs>=1.14; python_version >= '3.11'",
            "types-PyYAML",
        ],
    },
    entry_points={
        "console_scripts": [
            f"ballbal = {PACKAGE}.commands.main:main",
            *(f"{node} = {PACKAGE}.nodes.{node}:main" for node in NODES),
        ],
    },
)
