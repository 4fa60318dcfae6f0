"""A bare echo in rclpy, the yardstick of the loop's latency: an Imu out, a joint state with its stamp back.

python echo.py answer SECONDS
python echo.py ask SECONDS RATE      prints the median time to the answer, ms
"""

from __future__ import annotations

import statistics
import sys
import time

import rclpy
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.memory import settle_memory
from ballbal_ros.nodes.process import executor


def answer(span: float) -> None:
    """Answer each Imu, in its callback, with the smallest joint state of the same stamp."""
    node = rclpy.create_node("echo_answer")
    sender, reply = node.create_publisher(JointState, "answer", 1), JointState()

    def came(message: Imu) -> None:
        reply.header.stamp = message.header.stamp
        sender.publish(reply)

    node.create_subscription(Imu, "question", came, 1)
    turn(node, time.monotonic() + span)


def ask(span: float, rate: float) -> None:
    """Ask at a rate, and print the median time to the answers."""
    node = rclpy.create_node("echo_ask")
    sender, question = node.create_publisher(Imu, "question", 1), Imu()
    sent, times = [0.0], []

    def tick() -> None:
        question.header.stamp.sec += 1
        sent[0] = time.monotonic()
        sender.publish(question)

    def came(message: JointState) -> None:
        if message.header.stamp == question.header.stamp:
            times.append(time.monotonic() - sent[0])

    node.create_subscription(JointState, "answer", came, 1)
    node.create_timer(1.0 / rate, tick)
    turn(node, time.monotonic() + span)
    print(1e3 * statistics.median(times[len(times) // 5 :]))


def turn(node: object, until: float) -> None:
    """Spin until a time of the steady clock."""
    settle_memory()
    spinner = executor()
    spinner.add_node(node)
    while time.monotonic() < until:
        spinner.spin_once(timeout_sec=0.1)


if __name__ == "__main__":
    rclpy.init()
    if sys.argv[1] == "answer":
        answer(float(sys.argv[2]))
    else:
        ask(float(sys.argv[2]), float(sys.argv[3]))
    rclpy.try_shutdown()
