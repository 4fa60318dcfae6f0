"""What the stack promises to others: topics, types, qualities, answers, stops. One stack, in lock-step, for all."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("rclpy")

from geometry_msgs.msg import TwistStamped
from rcl_interfaces.srv import DescribeParameters, SetParameters
from rclpy.parameter import Parameter
from rclpy.qos import DurabilityPolicy, ReliabilityPolicy
from std_msgs.msg import Bool
from std_srvs.srv import SetBool, Trigger
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.nodes.diagnostics import ERROR, OK, values_of
from ballbal_ros.nodes.messages import load_message, seconds, to_time
from ballbal_ros.nodes.topics import TOPICS
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from helpers.contract import LISTENED, PUBLISHED, SUBSCRIBED
from helpers.robots import shelver
from helpers.ros_stack import ballbal, listening, running_stack
from helpers.stack_robot import SHOULDERS, Robot, plan


@pytest.fixture(scope="module")
def robot() -> Iterator[Robot]:
    """A stack that balances, let go by its stand. A domain of its own, as this lasts for the whole file."""
    domain = 1 + os.getpid() % 101
    slow = [("whole_body_kinematics", {"rate": 20.0})]
    with running_stack(domain, {"seed": 1, "answer_timeout": 60.0}, slow) as processes, listening(domain) as listener:
        listener.watched = processes
        made = Robot(listener)
        made.bring_up()
        made.go_on(0.5)
        yield made


def test_topics_have_the_types_and_qualities_of_the_contract(robot: Robot) -> None:
    """Every node publishes and subscribes what it should: type, reliability, durability."""
    node = robot.listener.node
    for endpoints, info in (
        (PUBLISHED, node.get_publishers_info_by_topic),
        (SUBSCRIBED, node.get_subscriptions_info_by_topic),
    ):
        for name, topics in endpoints.items():
            for topic in topics:
                found = [end for end in info(topic) if end.node_name == name]
                assert found, f"{name} does not have {topic}"
                message, kind = TOPICS[topic]
                assert found[0].topic_type == f"{message.__module__.partition('.')[0]}/msg/{message.__name__}"
                quality = found[0].qos_profile
                assert (quality.durability == DurabilityPolicy.TRANSIENT_LOCAL) == kind.kept, topic
                assert quality.reliability == ReliabilityPolicy.RELIABLE or endpoints is SUBSCRIBED, topic


def test_each_command_answers_a_tick_by_its_stamp(robot: Robot) -> None:
    """drive_command carries the stamp of the drive states it answers, one finite effort for each actuator, by name."""
    commands = robot.listener.record("drive_command")
    robot.listener.wait(lambda: len(commands) > 50, what="fifty commands")
    stamps = [seconds(m.header.stamp) for m in commands]
    assert np.allclose(np.array(stamps) * 500.0, np.round(np.array(stamps) * 500.0), atol=1e-6)
    assert all(b > a for a, b in zip(stamps, stamps[1:], strict=False))
    for command in commands:
        assert list(command.name) == list(shelver().drive.names)
        assert all(map(math.isfinite, command.effort))


def test_diagnostics_come_from_every_node(robot: Robot) -> None:
    """Each node tells its state about once a second."""
    kept = robot.listener.record("/diagnostics")
    robot.listener.turn(3.0)
    counts = {name: sum(status.name == f"/{name}" for array in kept for status in array.status) for name in PUBLISHED}
    assert all(2 <= count <= 6 for count in counts.values()), counts


def test_mass_centre_follows_the_loads(robot: Robot) -> None:
    """center_of_mass and body_inertia are those of the arms and loads at the joint states' stamp."""
    robot.senders["hand_load"].publish(load_message(Load("left_hand", 1.0, [0.0, 0.0, -0.05]), 0.0))
    robot.senders["hand_load"].publish(load_message(Load("right_hand", 1.0, [0.0, 0.0, -0.05]), 0.0))
    body = WholeBody(shelver(), [Load(h, 1.0, [0.0, 0.0, -0.05]) for h in ("left_hand", "right_hand")])
    robot.listener.wait(lambda: robot.newest("body_inertia") is not None, what="body_inertia")
    robot.listener.wait(lambda: abs(robot.newest("body_inertia").inertia.m - body.mass) < 1e-9, what="the loads' mass")
    at = robot.newest("center_of_mass")
    assert at.header.frame_id == "base_link"
    expected = body.center_of_mass(np.zeros(shelver().joint_count))
    assert (at.point.x, at.point.y, at.point.z) == pytest.approx(expected, abs=2e-3)
    for hand in ("left_hand", "right_hand"):
        robot.senders["hand_load"].publish(load_message(Load(hand, 0.0), 0.0))
    robot.listener.wait(
        lambda: abs(robot.newest("body_inertia").inertia.m - body.mass + 2.0) < 1e-9, what="empty hands"
    )


@pytest.mark.parametrize(
    ("message", "words"),
    [
        (plan(SHOULDERS, (1.0, [math.nan, 0.0])), "left_shoulder_pitch is nan"),
        (plan(["left_shoulder_pich"], (1.0, [0.1])), "did you mean left_shoulder_pitch"),
        (plan(SHOULDERS, (1.0, [-9.0, 0.0])), "its limits are"),
        (plan(SHOULDERS, (0.02, [-1.0, -1.0])), "rad/s"),
        (plan(SHOULDERS, (1.0, [-0.1, -0.1]), (0.5, [-0.2, -0.2])), "times must increase"),
        (plan(SHOULDERS, (0.0, [-0.8, -0.8]), (0.5, [-0.2, -0.2])), "begins with"),
    ],
    ids=["nan", "unknown joint", "beyond limits", "too fast", "times", "elsewhere"],
)
def test_a_plan_that_cannot_be_is_refused_and_nothing_moves(robot: Robot, message: JointTrajectory, words: str) -> None:
    """The report says in one line why; no lean plan, no arm command goes out."""
    before = {topic: robot.newest(topic) for topic in ("lean_plan", "arm_command")}
    report = robot.ask(message)
    assert report.level == ERROR and report.name == "arm_plan"
    assert words in report.message and "\n" not in report.message
    robot.go_on(0.1)
    assert {topic: robot.newest(topic) for topic in before} == before


def test_a_lean_plan_that_does_not_fit_is_not_acknowledged(robot: Robot) -> None:
    """What anybody sends as a lean plan is checked by balance too: the refusal is told in balance_state."""
    point = JointTrajectoryPoint(
        positions=[math.nan] * 5, velocities=[0.0] * 5, accelerations=[0.0] * 5, effort=[0.0] * 5
    )
    names = ["lean_roll", "lean_pitch", "heading", "ball_x", "ball_y"]
    robot.senders["lean_plan"].publish(JointTrajectory(joint_names=names, points=[point] * 3))
    told = robot.listener.wait(lambda: values_of(robot.newest("balance_state")).get("refusal"), what="a refusal")
    assert "lean_plan" in told and robot.state == "balancing"


def test_a_plan_starts_with_the_lean_and_cancelling_stops_the_arms(robot: Robot) -> None:
    """Part of the joints suffice; arm_command starts a lead-in after lean_plan; an empty plan brings arms to rest, the
    ball stays.
    """
    start = robot.ball()
    report = robot.ask(plan(SHOULDERS, (1.2, [-1.2, -1.2])))
    assert report.level == OK, report.message
    values = values_of(report)
    lean, arms = (float(values[key]) for key in ("lean_plan", "arm_command"))
    assert seconds(robot.newest("lean_plan").header.stamp) == pytest.approx(lean)
    assert seconds(robot.newest("arm_command").header.stamp) == pytest.approx(arms)
    assert arms - lean == pytest.approx(float(values["lead-in s"]), abs=1e-6) and arms - lean > 1.0
    robot.listener.wait(lambda: robot.time > arms + 0.1, 30.0, "the arms' start")
    assert values_of(robot.newest("balance_state"))["plan"] == values["lean_plan"]
    report = robot.ask(JointTrajectory())
    assert report.level == OK, report.message
    end = float(values_of(report)["arm_command"]) + float(values_of(report)["duration s"])
    robot.listener.wait(lambda: robot.time > end + 0.05, 30.0, "the arms' rest")
    rest = robot.angle(SHOULDERS[0])
    assert -1.15 < rest < -0.1
    robot.go_on(1.0)
    assert abs(robot.angle(SHOULDERS[0]) - rest) < 1e-3
    assert np.hypot(*(robot.ball() - start)) < 0.03 and robot.state == "balancing"


def test_a_velocity_rolls_the_ball_until_it_is_too_old(robot: Robot) -> None:
    """cmd_vel rolls the robot along; half a second after the last message it comes to rest. odom tells the same as the
    truth.
    """
    start, message = robot.ball(), TwistStamped()
    message.header.frame_id = "base_footprint"
    message.twist.linear.x = 0.2
    until = robot.time + 1.0
    while robot.time < until:
        robot.senders["cmd_vel"].publish(message)
        robot.listener.turn(0.02)
    robot.go_on(3.0)
    way = robot.ball() - start
    assert 0.1 < way[0] < 0.45 and abs(way[1]) < 0.03
    here = robot.ball()
    robot.go_on(0.5)
    assert np.hypot(*(robot.ball() - here)) < 0.03
    odom = robot.newest("odom").pose.pose.position
    assert (odom.x, odom.y) == pytest.approx(robot.ball(), abs=0.02)
    message.twist.linear.x = math.nan
    robot.senders["cmd_vel"].publish(message)
    robot.go_on(0.3)
    assert np.hypot(*(robot.ball() - here)) < 0.03


def test_parameters_tell_their_range_and_refuse_what_is_beyond(robot: Robot) -> None:
    """Descriptors carry meaning, unit and range; a value beyond is refused with the reason, one within is taken."""
    names = ["planner.lead_in", "ball.radius"]
    answer = robot.listener.call(
        DescribeParameters, "arm_compensation/describe_parameters", DescribeParameters.Request(names=names)
    )
    lead_in, radius = answer.descriptors
    assert "[s]" in lead_in.description and lead_in.floating_point_range[0].to_value == 5.0 and not lead_in.read_only
    assert radius.read_only
    for value, taken in ((9.0, False), (1.5, True), (1.6, True)):
        request = SetParameters.Request(parameters=[Parameter("planner.lead_in", value=value).to_parameter_msg()])
        result = robot.listener.call(SetParameters, "arm_compensation/set_parameters", request).results[0]
        assert result.successful is taken, result.reason


def test_every_node_tells_of_itself_once_a_second(robot: Robot) -> None:
    """Diagnostics at 1 Hz from each node: state, rate, lateness, age of inputs, scheduling; the loop's margins, trim,
    reserve.
    """
    came: dict[str, list[float]] = {}
    heard = robot.listener.record("/diagnostics")
    nodes = [f"/{name}" for name in PUBLISHED]

    def twice() -> bool:
        came.clear()
        for array in heard:
            came.setdefault(array.status[0].name, []).append(seconds(array.header.stamp))
        return all(len(came.get(name, ())) >= 3 for name in nodes)

    robot.listener.wait(twice, 10.0, "diagnostics of all")
    told = {array.status[0].name: array.status[0] for array in heard}
    for name in nodes:
        values = values_of(told[name])
        assert told[name].message and values["scheduling"]
        assert {"loop rate Hz", "late mean ms", "late worst ms"} <= set(values)
        ages = {key[4:-2]: value for key, value in values.items() if key.startswith("age ")}
        assert set(ages) == set(SUBSCRIBED[name[1:]]) | LISTENED.get(name[1:], set())
    loop = values_of(told["/balance"])
    assert told["/balance"].message == robot.state == "balancing"
    assert float(loop["loop rate Hz"]) > 10.0 and float(loop["age imu/data s"]) < 1.0
    assert 0.5 < float(loop["torque reserve"]) <= 1.0 and abs(float(loop["trim N m"])) < 15.0
    assert float(loop["phase margin deg"]) >= 30.0 and float(loop["delay margin ms"]) >= 8.0
    assert loop["age goal_pose s"] == "never"


def test_a_checkup_hears_the_stack_and_sends_nothing(robot: Robot, tmp_path: Path) -> None:
    """`ballbal checkup` finds every node at work, tells of the loop's trim and reserves, and disturbs nothing."""
    file = tmp_path / "found.json"
    process = ballbal("checkup", "--wait", "10", "--json", str(file), domain=1 + os.getpid() % 101)
    robot.listener.wait(lambda: process.poll() is not None, 40.0, "the checkup's end")
    printed, said = process.communicate()
    assert process.returncode in (0, 1), said
    found = json.loads(file.read_text())
    assert found["stack"] and "The stack is up" in printed
    verdicts = {check["what"]: check["verdict"] for check in found["checks"]}
    # What other tests had refused is still told, and to be looked at.
    assert all(verdicts[name] in ("ok", "look") for name in PUBLISHED), printed
    assert {"margins in force", "trim", "torque reserve"} <= set(verdicts)
    assert "wrong" not in verdicts.values(), printed
    assert robot.state == "balancing"


def test_a_lean_plan_that_waits_is_taken_back_by_one_without_points(robot: Robot) -> None:
    """Nothing leans for arms that were told to stay; one that does not wait is refused in words."""
    told = robot.listener.record("/diagnostics")
    wanted = plan(SHOULDERS, (1.0, [-0.3, -0.3]))
    wanted.header.stamp = to_time(robot.time + 100.0)
    lean = values_of(robot.ask(wanted))["lean_plan"]
    assert values_of(robot.newest("balance_state"))["plan"] == lean
    nothing = JointTrajectory(header=robot.newest("lean_plan").header)
    for _ in range(2):
        robot.senders["lean_plan"].publish(nothing)
        robot.listener.wait(lambda: "plan" not in values_of(robot.newest("balance_state")), what="no plan")

    def refusals() -> list[str]:
        found = [values_of(s).get("refused lean_plan", "") for a in told for s in a.status if s.name == "/balance"]
        return [text for text in found if f"the plan of {lean}, and none of that stamp waits" in text]

    robot.listener.wait(refusals, what="a refusal in words")
    assert robot.ask(plan([])).level == OK and robot.state == "balancing"


def test_an_emergency_stop_is_controlled_and_latched(robot: Robot) -> None:
    """Stopping stays in balance and takes no plan; held by a stand the torque goes; only a reset ends it (IEC 60204-1,
    category 1).
    """
    report = robot.ask(plan(SHOULDERS, (1.0, [-0.3, -0.3])))
    assert report.level == OK, report.message
    arms = float(values_of(report)["arm_command"])
    robot.listener.wait(lambda: robot.time > arms + 0.2, 30.0, "the arms' start")
    count = len(robot.reports)
    robot.senders["emergency_stop"].publish(Bool(data=True))
    robot.listener.wait(lambda: robot.state == "stopping", what="stopping")
    robot.listener.wait(lambda: len(robot.reports) > count, what="the report of the stop")
    assert robot.reports[-1].status[0].name == "emergency_stop"
    assert robot.reports[-1].status[0].level == OK, robot.reports[-1].status[0].message
    robot.go_on(2.0)
    rest = robot.angle(SHOULDERS[0])
    assert robot.state == "stopping"
    assert robot.ask(plan(SHOULDERS, (1.0, [0.0, 0.0]))).level == ERROR
    robot.go_on(0.3)
    assert robot.angle(SHOULDERS[0]) == pytest.approx(rest, abs=1e-3)
    assert robot.listener.call(SetBool, "simulated_robot/stand", SetBool.Request(data=True)).success
    robot.listener.wait(lambda: robot.state == "released", what="released")
    robot.go_on(0.1)
    commands = robot.listener.record("drive_command")
    robot.listener.wait(lambda: len(commands) > 5, what="commands")
    assert list(commands[-1].effort) == [0.0, 0.0, 0.0]
    assert not robot.listener.call(Trigger, "balance/reset", Trigger.Request()).success
    robot.senders["emergency_stop"].publish(Bool(data=False))
    robot.go_on(0.3)
    assert robot.state == "released"
    assert robot.listener.call(Trigger, "balance/reset", Trigger.Request()).success
    robot.listener.wait(lambda: robot.state == "balancing", what="balancing again")
