"""The launch files, run against stand-ins for ``launch`` and ``launch_ros`` that record what they are given."""

from __future__ import annotations

import runpy
import sys
from pathlib import Path
from types import ModuleType, SimpleNamespace
from typing import Any

import pytest

from ballbal_ros.errors import BallbalError

ROOT = Path(__file__).resolve().parents[1]


class _Recorded:
    """Any action: its keywords, and what stood before them."""

    def __init__(self, *words: Any, **keywords: Any) -> None:
        self.words, self.keywords = words, keywords


def _fake(monkeypatch: pytest.MonkeyPatch, name: str, **members: Any) -> None:
    module = ModuleType(name)
    module.__dict__.update(members)
    monkeypatch.setitem(sys.modules, name, module)


@pytest.fixture
def launched(monkeypatch: pytest.MonkeyPatch) -> Any:
    """A function that runs a launch file with given arguments and returns its node actions by executable."""
    kinds = {
        kind: type(kind, (_Recorded,), {}) for kind in ("Node", "LifecycleNode", "Shutdown", "DeclareLaunchArgument")
    }

    class OpaqueFunction:
        def __init__(self, function: Any) -> None:
            self.function = function

    class LaunchConfiguration:
        def __init__(self, name: str) -> None:
            self.name = name

        def perform(self, context: Any) -> str:
            return str(context[self.name])

    share = SimpleNamespace(get_package_share_directory=lambda package: str(ROOT))
    _fake(monkeypatch, "ament_index_python")
    _fake(monkeypatch, "ament_index_python.packages", **vars(share))
    _fake(monkeypatch, "launch", LaunchDescription=list)
    actions = {name: kinds[name] for name in ("DeclareLaunchArgument", "Shutdown")}
    _fake(monkeypatch, "launch.actions", OpaqueFunction=OpaqueFunction, **actions)
    _fake(monkeypatch, "launch.substitutions", LaunchConfiguration=LaunchConfiguration)
    _fake(monkeypatch, "launch_ros")
    _fake(monkeypatch, "launch_ros.actions", Node=kinds["Node"], LifecycleNode=kinds["LifecycleNode"])

    def run(file: str, **given: str) -> dict[str, Any]:
        description = runpy.run_path(str(ROOT / "launch" / file))["generate_launch_description"]()
        declared = [action for action in description if isinstance(action, kinds["DeclareLaunchArgument"])]
        context = {a.words[0]: a.keywords["default_value"] for a in declared} | given
        assert set(given) <= {a.words[0] for a in declared}
        found = next(a for a in description if isinstance(a, OpaqueFunction)).function(context)
        return {action.keywords["executable"]: action for action in found}

    return run


def test_robot_launch_starts_the_robots_nodes_with_their_files(launched: Any) -> None:
    """On a robot three nodes start: balance as a lifecycle node, each with its parameter files and the URDF."""
    nodes = launched("robot.launch.py", namespace="a")
    assert set(nodes) - {"config_watch"} == {"whole_body_kinematics", "arm_compensation", "balance"}
    assert type(nodes["balance"]).__name__ == "LifecycleNode"
    for name, file in (("balance", "balance.yaml"), ("arm_compensation", "compensation.yaml")):
        files = [Path(p).name for p in nodes[name].keywords["parameters"] if isinstance(p, str)]
        assert files == ["robot.yaml", file]
        values = nodes[name].keywords["parameters"][-1]
        assert Path(values["urdf"]).is_file() and values["use_sim_time"] is False
        assert nodes[name].keywords["namespace"] == "/a"


def test_headless_launch_adds_the_simulated_robot_whose_end_is_everybodys(launched: Any) -> None:
    """Headless, the simulated robot starts too, with the clock asked for; in a namespace all have one clock of their
    own.
    """
    nodes = launched("headless.launch.py", namespace="b", clock="real_time", seed="3", truth="drawn=3 imu.tilt=0.01,0")
    assert set(nodes) > {"whole_body_kinematics", "arm_compensation", "balance", "simulated_robot"}
    simulated = nodes["simulated_robot"].keywords
    assert type(simulated["on_exit"]).__name__ == "Shutdown"
    assert simulated["parameters"][-1]["clock"] == "real_time" and simulated["parameters"][-1]["seed"] == 3
    assert simulated["parameters"][-1]["truth"] == ["drawn=3", "imu.tilt=0.01,0"]
    assert "plan" not in simulated["parameters"][-1]
    assert nodes["balance"].keywords["parameters"][-1]["lock_step"] is False
    for name in ("whole_body_kinematics", "arm_compensation", "balance", "simulated_robot"):
        assert nodes[name].keywords["remappings"] == [("/clock", "/b/clock")]


def test_the_loop_asks_for_the_priority_that_launch_is_given(launched: Any) -> None:
    """On a robot, and by the wall clock; in lock-step nothing is in a hurry."""
    for file, given, wanted in (
        ("robot.launch.py", {}, 20),
        ("robot.launch.py", {"priority": "80"}, 80),
        ("headless.launch.py", {"clock": "real_time"}, 20),
        ("headless.launch.py", {}, 0),
    ):
        nodes = launched(file, **given)
        assert nodes["balance"].keywords["parameters"][-1]["realtime_priority"] == wanted
        assert "realtime_priority" not in nodes["arm_compensation"].keywords["parameters"][-1]


@pytest.mark.parametrize("file", ["robot.launch.py", "headless.launch.py"])
def test_each_node_runs_in_an_enclave_of_its_own(launched: Any, file: str) -> None:
    """With a base given, every node is started in the enclave of its name below it; without one, in none."""
    for name, node in launched(file, enclave="shelver/").items():
        assert node.keywords["ros_arguments"] == ["--enclave", f"/shelver/{name}"]
    assert all(node.keywords["ros_arguments"] == [] for node in launched(file).values())
    with pytest.raises(BallbalError, match="enclave"):
        launched(file, enclave="a b")


def test_launch_with_a_wrong_folder_names_it(launched: Any, tmp_path: Path) -> None:
    """A folder without robot.yaml is refused before any node is named."""
    with pytest.raises(BallbalError, match="robot.yaml"):
        launched("robot.launch.py", robot=str(tmp_path))
