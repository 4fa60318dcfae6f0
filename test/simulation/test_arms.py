"""The simulated arm servos do what such servos are said to do."""

import numpy as np
import pytest

from ballbal_ros.errors import ParameterError
from ballbal_ros.motion.spline import ArmPath, FollowedPath, path_through_waypoints
from ballbal_ros.robot.arrays import Array
from ballbal_ros.simulation.robot import SimulatedRobot
from helpers.robots import reach
from helpers.simulated import NO_EFFORT, robot

START = 0.1


def motion(simulated: SimulatedRobot, path: ArmPath, time: float) -> tuple[Array, Array]:
    """Times from the path's start [K], and true arm positions [K, n], of a run on the stand."""
    simulated.command_arms(path, START)
    times, positions = [], []
    while simulated.time < START + time:
        simulated.step(NO_EFFORT)
        times.append(simulated.time - START)
        positions.append(simulated.arm_position)
    return np.array(times), np.array(positions)


def test_ideal_servo_follows_reach_to_a_tenth_of_a_milliradian() -> None:
    """With position, rate and acceleration given, the reach with 2 kg in each hand is followed to 0.1 mrad."""
    path = reach().path()
    times, position = motion(robot({"arm_servo": "ideal"}), path, 1.2)
    wanted = path.sample(times)[0]
    assert np.abs(position - wanted).max() < 1e-4
    assert position[-1] == pytest.approx(reach().last, abs=1e-6)


@pytest.mark.parametrize("servo", ["position_velocity", "position"])
@pytest.mark.parametrize("bandwidth", [40.0, 80.0])
def test_servo_makes_the_motion_that_its_law_makes(servo: str, bandwidth: float) -> None:
    """The true motion is the solution of the servo's equation (as the planner has it), to 0.5 mrad in 1.4 rad."""
    path = reach().path()
    times, position = motion(robot({"arm_servo": servo, "arm_servo_bandwidth": bandwidth}), path, 1.2)
    followed = FollowedPath.of(path, servo, bandwidth).sample(times)[0]
    assert np.abs(followed - path.sample(times)[0]).max() > 1e-3
    assert np.abs(position - followed).max() < 5e-4


def test_servo_on_position_alone_lags_by_two_over_bandwidth() -> None:
    """On a ramp of constant rate v the joint is 2 v / w behind (closed form of q'' = -2w v + w² (q_ref - q))."""
    rate, bandwidth, time = 0.5, 60.0, 1.0
    first = reach().first
    turn = np.zeros_like(first)
    turn[0] = rate
    ramp = ArmPath.through(
        np.array([0.0, time]), np.stack((first, first - time * turn)), np.stack((-turn, -turn)), np.zeros((2, 12))
    )
    times, position = motion(robot({"arm_servo": "position", "arm_servo_bandwidth": bandwidth}), ramp, 0.9)
    behind = position[-1, 0] - ramp.sample(times[-1:])[0][0, 0]
    assert behind == pytest.approx(2.0 * rate / bandwidth, rel=0.01)


def test_new_command_replaces_the_old_from_its_start() -> None:
    """Until the new path starts the old one is followed; then the new one, whose end is held."""
    there = path_through_waypoints([0.0, 0.4], np.stack((reach().first, reach().last)))
    back = path_through_waypoints([0.0, 0.4], np.stack((reach().last, reach().first)))
    simulated = robot()
    simulated.command_arms(back, 5.0)
    simulated.command_arms(there, 0.0)
    simulated.command_arms(back, 0.5)
    for _ in range(245):
        simulated.step(NO_EFFORT)
    assert simulated.arm_position == pytest.approx(reach().last, abs=1e-4)
    for _ in range(400):
        simulated.step(NO_EFFORT)
    assert simulated.arm_position == pytest.approx(reach().first, abs=1e-6)


def test_too_high_a_bandwidth_is_refused() -> None:
    """A servo faster than its own rate of update is refused in one line."""
    with pytest.raises(ParameterError, match=r"arm_servo_bandwidth is 300 rad/s .* it takes at most 250 rad/s"):
        robot({"arm_servo_bandwidth": 300.0})
