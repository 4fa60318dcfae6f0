"""The robot's nodes: ``ros2 launch ballbal_ros robot.launch.py robot:=/path/to/config/shelver``.

Balance is a lifecycle node and stays unconfigured: a person configures and activates it with the robot upright on its
stand.

This program drives a heavy machine that falls when it loses power, and is no safety function. Do the machine's own risk
assessment, follow local codes, have what needs a licence done by those who hold one; keep people out of its fall.
"""

from pathlib import Path

from ament_index_python.packages import get_package_share_directory
from launch.actions import DeclareLaunchArgument, OpaqueFunction
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode, Node

from ballbal_ros.stack import PACKAGE, RobotFolder, checked_enclave, checked_namespace, hurried, robot_stack
from launch import LaunchDescription


def _nodes(context):
    namespace = checked_namespace(LaunchConfiguration("namespace").perform(context))
    folder = RobotFolder.checked(Path(LaunchConfiguration("robot").perform(context)), simulated=False)
    enclave = checked_enclave(LaunchConfiguration("enclave").perform(context))
    watch = LaunchConfiguration("watch").perform(context).lower() == "true"
    nodes = robot_stack(folder, namespace, watch=watch, enclave=enclave)
    return [
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
        )
        for node in hurried(nodes, int(LaunchConfiguration("priority").perform(context)))
    ]


def generate_launch_description():
    robot = str(Path(get_package_share_directory(PACKAGE)) / "config" / "shelver")
    return LaunchDescription(
        [
            DeclareLaunchArgument("robot", default_value=robot, description="folder of the robot's parameter files"),
            DeclareLaunchArgument("namespace", default_value="", description="namespace of all nodes"),
            DeclareLaunchArgument("enclave", default_value="", description="base of the enclaves: docs/security.md"),
            DeclareLaunchArgument("watch", default_value="true", description="take edits of the parameter files in"),
            DeclareLaunchArgument("priority", default_value="20", description="SCHED_FIFO to ask for; 0: none"),
            OpaqueFunction(function=_nodes),
        ]
    )
