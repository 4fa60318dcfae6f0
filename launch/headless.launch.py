"""The stack with the simulated robot: ``ros2 launch ballbal_ros headless.launch.py clock:=real_time``.

The simulated robot stands on its stand until balance is configured and activated (``ros2 lifecycle set /balance
configure``, then ``activate``); when it ends, all ends.

Nothing real must listen in its domain: keep ``ROS_AUTOMATIC_DISCOVERY_RANGE=LOCALHOST``, and a domain of its own.
What holds
in the simulation is no proof for a real machine; that has its own risk assessment, local codes and licensed practice.
"""

from pathlib import Path

from ament_index_python.packages import get_package_share_directory
from launch.actions import DeclareLaunchArgument, OpaqueFunction, Shutdown
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode, Node

from ballbal_ros.stack import PACKAGE, RobotFolder, checked_enclave, checked_namespace, headless_stack, hurried
from launch import LaunchDescription


def _nodes(context):
    def given(name):
        return LaunchConfiguration(name).perform(context)

    namespace = checked_namespace(given("namespace"))
    folder = RobotFolder.checked(Path(given("robot")), simulated=True)
    simulated = {"seed": int(given("seed")), "duration": float(given("duration"))}
    # An empty list has no type that ROS could tell.
    simulated |= {"truth": given("truth").split()} if given("truth") else {}
    simulated |= {"plan": given("plan")} if given("plan") else {}
    # A person may take a while to activate the balance.
    simulated["answer_timeout"] = 3600.0
    enclave = checked_enclave(given("enclave"))
    watch = given("watch").lower() == "true"
    nodes = headless_stack(folder, given("clock"), namespace, simulated, watch=watch, enclave=enclave)
    actions = []
    for node in hurried(nodes, int(given("priority")) if given("clock") == "real_time" else 0):
        leaving = {"on_exit": Shutdown()} if node.executable == "simulated_robot" else {}
        actions.append(
            (LifecycleNode if node.lifecycle else Node)(
                package=PACKAGE,
                executable=node.executable,
                name=node.executable,
                namespace=namespace,
                parameters=[*map(str, node.files), dict(node.parameters)],
                remappings=list(node.remappings),
                output="screen",
                respawn=node.respawn,
                respawn_delay=0.5,
                ros_arguments=node.ros_arguments,
                **leaving,
            )
        )
    return actions


def generate_launch_description():
    robot = str(Path(get_package_share_directory(PACKAGE)) / "config" / "shelver")
    return LaunchDescription(
        [
            DeclareLaunchArgument("robot", default_value=robot, description="folder of the robot's parameter files"),
            DeclareLaunchArgument("namespace", default_value="", description="namespace of all nodes"),
            DeclareLaunchArgument("enclave", default_value="", description="base of the enclaves: docs/security.md"),
            DeclareLaunchArgument("watch", default_value="true", description="take edits of the parameter files in"),
            DeclareLaunchArgument("clock", default_value="lock_step", description="lock_step or real_time"),
            DeclareLaunchArgument("seed", default_value="0", description="seed of the simulated noise"),
            DeclareLaunchArgument("truth", default_value="", description="KEY=VALUE ...: where it is unlike the model"),
            DeclareLaunchArgument("plan", default_value="", description="plan file in whose start posture it begins"),
            DeclareLaunchArgument("duration", default_value="0.0", description="simulated time, s; 0: no end"),
            DeclareLaunchArgument("priority", default_value="20", description="SCHED_FIFO to ask for; 0: none"),
            OpaqueFunction(function=_nodes),
        ]
    )
