"""The floor's moments on the ball: resistance to rolling, and torsion that holds up to its limit and rubs beyond it."""

import numpy as np
import pytest

from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.simulation.floor import FloorMoments
from helpers.robots import shelver
from helpers.simulated import robot, simulation

BALL, LOAD = shelver().parameters.ball, 600.0
STEP = simulation().physics_step


def floor(**changes: float) -> FloorMoments:
    named = {f"floor.{key}": value for key, value in changes.items()}
    return FloorMoments(simulation(named), BALL.radius, BALL.inertia, LOAD)


@pytest.mark.parametrize("velocity", [(0.5, 0.0), (0.0, -0.3), (0.2, 0.2), (-0.1, 0.4)])
def test_rolling_resistance_takes_its_share_of_the_load(velocity: tuple[float, float]) -> None:
    """The power that rolling loses is C N v, whatever the direction (Coulomb's law of rolling resistance)."""
    x, y, _ = floor(rolling_resistance=0.003).on_ball(LOAD, *velocity, 0.0)
    rate = np.array([-velocity[1], velocity[0]]) / BALL.radius
    assert float(np.dot((x, y), rate)) == pytest.approx(-0.003 * LOAD * np.hypot(*velocity), rel=1e-4)


def test_torsion_is_its_limit_while_the_ball_spins() -> None:
    """A ball that spins steadily, either way, meets the moment torsion times load, which follows the load."""
    for spin in (2.0, -2.0):
        feeling = floor(torsion=0.004)
        for _ in range(100):
            moment = feeling.on_ball(LOAD, 0.0, 0.0, spin)[2]
        assert moment == pytest.approx(-0.004 * LOAD * np.sign(spin), rel=1e-3)
        assert feeling.on_ball(0.5 * LOAD, 0.0, 0.0, spin)[2] == pytest.approx(0.5 * moment, rel=1e-2)


def test_torsion_holds_a_ball_below_its_limit() -> None:
    """Under 80 % of the limit the ball twists by some milliradians and then stands; above the limit it spins."""
    for share, holds in ((0.8, True), (1.2, False)):
        feeling, spin, angle = floor(torsion=0.004), 0.0, 0.0
        for _ in range(1000):
            spin += (share * 0.004 * LOAD + feeling.on_ball(LOAD, 0.0, 0.0, spin)[2]) / BALL.inertia * STEP
            angle += spin * STEP
        assert (abs(spin) < 1e-6 and angle < 0.01) == holds
        if not holds:
            assert spin == pytest.approx(0.2 * 0.004 * LOAD / BALL.inertia, rel=0.05)


@pytest.mark.parametrize("torque", [2.0, 4.0])
def test_robot_stays_on_the_floor_while_the_ball_spins(torque: float) -> None:
    """Turned within the floor's torsion or beyond it, the ball bears the load without bouncing."""
    simulated = robot()
    simulated.support = False
    effort, limit = shelver().drive.effort(np.array([0.0, 0.0, -torque])), 0.004 * simulated.world.mass * GRAVITY
    for _ in range(150):
        simulated.step(effort)
        assert simulated.floor_force[2] == pytest.approx(simulated.world.mass * GRAVITY, rel=2e-3)
    body = simulated.heading
    assert body < -0.03
    # The ball turns against the body only where the floor can't hold it.
    ball = (shelver().drive.spin_map @ simulated.measurement().drive_angle)[2] + body
    assert (ball > 0.1) == (torque > limit)


def test_floor_without_torsion_or_resistance_does_nothing() -> None:
    """With both at zero there is no moment at all."""
    feeling = floor(torsion=0.0, rolling_resistance=0.0)
    assert feeling.on_ball(LOAD, 0.4, -0.3, 5.0) == pytest.approx((0.0, 0.0, 0.0))
