"""Which nodes make the stack, with which parameter files and parameters: read by ``launch/`` and by the headless
runner.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import attrs

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import load
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.parameters import SimulationParameters

PACKAGE = "ballbal_ros"
CLOCKS = ("lock_step", "real_time")
LOOP = ("simulated_robot", "balance")


@attrs.frozen
class NodeStart:
    """One node to start: its executable (and name), its parameter files, parameters beside them, and remapped names.

    ``respawn``: where its process ends, it is started anew; the others go on without it meanwhile. ``enclave``: where
    its keys are in an SROS 2 keystore, "" for nowhere.
    """

    executable: str
    files: tuple[Path, ...]
    parameters: Mapping[str, Any]
    remappings: tuple[tuple[str, str], ...] = ()
    lifecycle: bool = False
    respawn: bool = False
    enclave: str = ""

    @property
    def ros_arguments(self) -> list[str]:
        """What stands after ``--ros-args`` besides files, parameters and names."""
        return ["--enclave", self.enclave] if self.enclave else []

    def with_parameters(self, **parameters: Any) -> NodeStart:
        """The same node with further parameters; ``__`` in a name stands for a dot."""
        added = {name.replace("__", "."): value for name, value in parameters.items()}
        return attrs.evolve(self, parameters={**self.parameters, **added})

    def command(self, namespace: str = "") -> list[str]:
        """The command line that starts it with this Python."""
        words = [sys.executable, "-m", f"{PACKAGE}.nodes.{self.executable}", "--ros-args", *self.ros_arguments]
        for path in self.files:
            words += ["--params-file", str(path)]
        for name, value in self.parameters.items():
            # JSON is YAML, which ROS reads the value as.
            words += ["-p", f"{name}:={json.dumps(value)}"]
        for name, other in self.remappings:
            words += ["-r", f"{name}:={other}"]
        return [*words, "-r", f"__ns:={namespace}"] if namespace else words


@attrs.frozen
class RobotFolder:
    """The files of one robot, read and checked once, before anything starts."""

    path: Path
    urdf: Path

    @classmethod
    def checked(cls, path: Path, simulated: bool) -> RobotFolder:
        """Check a robot's folder; raises :class:`BallbalError` in one line that names file and key."""
        folder = Path(path).resolve()
        if not (folder / "robot.yaml").is_file():
            raise BallbalError(str(path), "holds no robot.yaml", "give the robot's folder, such as config/shelver")
        description = RobotDescription.load(folder)
        balance = load(BalanceParameters, folder / "balance.yaml")
        load(CompensationParameters, folder / "compensation.yaml")
        if simulated:
            simulation = load(SimulationParameters, folder / "simulation.yaml")
            if abs(simulation.loop_rate - balance.loop.rate) > 1e-6:
                raise BallbalError(
                    str(folder / "simulation.yaml"),
                    f"loop_rate is {simulation.loop_rate:g} Hz and loop.rate of balance.yaml {balance.loop.rate:g} Hz",
                    "give both the same",
                )
        return cls(folder, Path(description.urdf_path).resolve())

    def file(self, name: str) -> Path:
        """One of its files."""
        return self.path / name


def checked_namespace(namespace: str) -> str:
    """A namespace with its leading slash, or nothing; raises :class:`BallbalError` for what ROS takes for none."""
    return _checked_path(namespace, "--namespace")


def checked_enclave(enclave: str) -> str:
    """The base of the nodes' enclaves with its leading slash, or nothing; raises :class:`BallbalError` for what is
    none.
    """
    return _checked_path(enclave, "enclave")


def _checked_path(text: str, where: str) -> str:
    name = text.strip("/")
    parts = name.split("/") if name else []
    if any(not part.isidentifier() or not part.isascii() for part in parts):
        raise BallbalError(where, f"is {text!r}", "it takes letters, digits and _, parts divided by /")
    return f"/{name}" if name else ""


def robot_stack(
    folder: RobotFolder, namespace: str = "", sim_time: bool = False, watch: bool = False, enclave: str = ""
) -> list[NodeStart]:
    """The nodes that run on a robot: balance (lifecycle), arm compensation, whole-body kinematics; with ``watch`` also
    config_watch, which brings edited parameter files into them.

    ``enclave``: each node runs in the enclave of its name below it, where security is on (docs/security.md).
    """
    common = {"urdf": str(folder.urdf), "use_sim_time": sim_time}
    # Two robots of one domain have a clock each.
    remap = (("/clock", f"{namespace}/clock"),) if namespace and sim_time else ()
    robot = folder.file("robot.yaml")
    watcher = NodeStart("config_watch", (), {"folder": str(folder.path)}, respawn=True)
    nodes = [
        NodeStart("whole_body_kinematics", (robot,), common, remap, respawn=True),
        NodeStart("arm_compensation", (robot, folder.file("compensation.yaml")), common, remap, respawn=True),
        NodeStart("balance", (robot, folder.file("balance.yaml")), common, remap, lifecycle=True),
        *([watcher] if watch else []),
    ]
    return [_in_enclave(node, enclave) for node in nodes]


def hurried(nodes: Iterable[NodeStart], priority: int) -> list[NodeStart]:
    """The nodes; those of the loop ask for SCHED_FIFO with this priority (0: they don't), as by the wall clock a loop
    must not wait for other programs.
    """
    return [n.with_parameters(realtime_priority=priority) if n.executable in LOOP else n for n in nodes]


def _in_enclave(node: NodeStart, base: str) -> NodeStart:
    return attrs.evolve(node, enclave=f"{base}/{node.executable}") if base else node


def headless_stack(
    folder: RobotFolder,
    clock: str = "lock_step",
    namespace: str = "",
    simulated: Mapping[str, Any] | None = None,
    watch: bool = False,
    enclave: str = "",
) -> list[NodeStart]:
    """The robot's nodes and the simulated robot, which gets the parameters ``simulated`` besides; see
    :func:`robot_stack`.
    """
    if clock not in CLOCKS:
        raise BallbalError("--clock", f"is {clock!r}", f"it takes one of {', '.join(CLOCKS)}")
    nodes = []
    for node in robot_stack(folder, namespace, sim_time=True, watch=watch, enclave=enclave):
        if node.executable != "config_watch":
            node = node.with_parameters(robot_description_wait=0.0)
        if node.executable == "balance":
            node = node.with_parameters(lock_step=clock == "lock_step")
        nodes.append(node)
    remap = (("/clock", f"{namespace}/clock"),) if namespace else ()
    files = (folder.file("robot.yaml"), folder.file("simulation.yaml"))
    # It makes the time that the others use, and so does not listen to it.
    parameters = {"urdf": str(folder.urdf), "use_sim_time": False, "clock": clock, **(simulated or {})}
    return [*nodes, _in_enclave(NodeStart("simulated_robot", files, parameters, remap), enclave)]
