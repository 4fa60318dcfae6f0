"""The simulated drive: delay, limits, dry friction, and encoders that count what the ball turns."""

import numpy as np
import pytest

from ballbal_ros.errors import BallbalError, ParameterError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.drive import SimulatedDrive
from helpers.robots import shelver
from helpers.simulated import simulation, without_stiction

STEP = simulation().physics_step


def drive(description: RobotDescription | None = None, **changes: float) -> SimulatedDrive:
    return SimulatedDrive(description or shelver(), simulation(changes), np.eye(3))


def slide(simulated: SimulatedDrive, rates: Array, time: float) -> None:
    """Turn the ball so that the actuators turn at these rates [3], for a while."""
    ball = shelver().drive.spin_map @ rates
    for _ in range(round(time / STEP)):
        simulated.turn(*ball.tolist())


def test_power_is_the_same_on_both_sides() -> None:
    """Effort times actuator rate equals torque on the ball times the ball's rate relative to the body."""
    generator, simulated = np.random.default_rng(1), drive(without_stiction(), **{"drive.delay": 0.0})
    for _ in range(5):
        effort, ball = generator.normal(size=3), generator.normal(size=3)
        before = np.array(simulated.angle)
        simulated.turn(*ball.tolist())
        rates = (np.array(simulated.angle) - before) / STEP
        simulated.command(effort)
        assert np.dot(simulated.torque(0), ball) == pytest.approx(float(effort @ rates))


@pytest.mark.parametrize("delay_steps", range(6))
def test_command_takes_effect_after_the_delay(delay_steps: int) -> None:
    """A command given at tick t turns the ball from t + delay on, also within a tick, and not one step before."""
    simulated, found = drive(without_stiction(), **{"drive.delay": delay_steps * STEP}), []
    for tick in range(6):
        simulated.command(np.full(3, 1.0 if tick >= 1 else 0.0))
        found += [simulated.torque(step)[2] != 0.0 for step in range(2)]
    assert found.index(True) == 2 + delay_steps
    assert all(found[2 + delay_steps :])


def test_delay_that_is_no_whole_step_is_refused() -> None:
    """A delay between two physics steps can't be kept, and is refused in one line."""
    with pytest.raises(ParameterError, match=r"drive.delay is 0.0025 s; it takes a multiple of physics_step, 0.001 s"):
        drive(**{"drive.delay": 0.0025})


def test_efforts_are_limited_and_never_nan() -> None:
    """Beyond the effort limit the limit acts, the torque scale after it; a command that is not finite is refused."""
    limit = shelver().drive.effort_limit
    simulated = drive(without_stiction(), **{"drive.delay": 0.0, "drive.torque_scale": 0.9})
    simulated.command(np.array([1e6, -1e6, 0.0]))
    expected = shelver().drive.rate_map.T @ (0.9 * np.array([limit[0], -limit[1], 0.0]))
    assert simulated.torque(0) == pytest.approx(expected)
    for wrong in ([np.nan, 0.0, 0.0], [np.inf, -np.inf, 0.0], [1.0, 2.0]):
        with pytest.raises(BallbalError, match="drive_effort: is .* it takes 3 finite efforts"):
            simulated.command(np.array(wrong))


def test_no_torque_beyond_the_rate_limit() -> None:
    """Faster than its rate limit an actuator can brake, but not speed up."""
    simulated = drive(without_stiction(), **{"drive.delay": 0.0})
    slide(simulated, 1.01 * shelver().drive.rate_limit, 2 * STEP)
    simulated.command(np.full(3, 5.0))
    assert simulated.torque(0) == pytest.approx(np.zeros(3))
    simulated.command(np.full(3, -5.0))
    assert simulated.torque(0) == pytest.approx(shelver().drive.rate_map.T @ np.full(3, -5.0))


@pytest.mark.parametrize("rate", [0.05, 1.0, 50.0])
def test_sliding_friction_is_the_stiction(rate: float) -> None:
    """At any steady rate, either way, each actuator loses its stiction (to 0.1 %)."""
    rates = rate * np.array([1.0, -1.0, 1.0])
    simulated = drive(**{"drive.delay": 0.0})
    slide(simulated, rates, max(0.1, 10 * 0.002 / rate))
    simulated.command(np.zeros(3))
    lost = -shelver().drive.rate_map.T @ (shelver().drive.stiction * np.sign(rates))
    assert simulated.torque(0) == pytest.approx(lost, rel=1e-3)


def test_friction_takes_energy_around_a_loop() -> None:
    """There and back by small turns costs work, never gives it; the bristles' spring alone would give it back."""
    simulated, work = drive(**{"drive.delay": 0.0}), 0.0
    simulated.command(np.zeros(3))
    for k in range(2000):
        ball = 0.02 * np.cos(2.0 * np.pi * k / 500) * np.array([1.0, 0.3, -0.5])
        work += float(np.dot(simulated.torque(0), ball)) * STEP
        simulated.turn(*ball.tolist())
    assert work < -1e-5


def test_bristles_too_stiff_for_the_step_are_refused() -> None:
    """A presliding turn so small that the step can't follow it is refused, and the line says what would do."""
    coarse = {"physics_step": 0.005, "loop_rate": 200.0, "drive.delay": 0.0}
    with pytest.raises(ParameterError, match=r"presliding is 0.001 rad, too stiff .* it takes at least") as caught:
        drive(**coarse, **{"drive.presliding": 1e-3})
    drive(**coarse, **{"drive.presliding": 1.1 * float(str(caught.value).rsplit("least ", 1)[1].split(" ")[0])})


def test_angles_count_in_the_description_order() -> None:
    """With axes of its own the drive gives the same torque and counts the same angles, turned into these axes."""
    turn = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    turned = SimulatedDrive(without_stiction(), simulation({"drive.delay": 0.0}), turn)
    ball, effort = np.array([0.4, -1.1, 0.3]), np.array([1.0, 2.0, -0.5])
    turned.turn(*(turn.T @ ball).tolist())
    assert turned.angle == pytest.approx(shelver().drive.rate_map @ ball * STEP)
    turned.command(effort)
    assert turn @ turned.torque(0) == pytest.approx(shelver().drive.rate_map.T @ effort)
