"""A solid sphere on an incline, with the very contact of the simulated ball.

Sources: any mechanics handbook for 5/7 g sin θ (a sphere's I = 2/5 m r²) and for the onset of slip at μ = 2/7 tan θ.
"""

import math

import mujoco
import numpy as np
import pytest

from ballbal_ros.robot.parameters import BallParameters
from ballbal_ros.simulation.parameters import SimulatedFloorParameters
from ballbal_ros.simulation.world import make_ball, set_options
from helpers.simulated import simulation

RADIUS, MASS = 0.115, 4.0
G = 9.8  # m/s², as in the handbook's figure of 3.5 m/s² at 30°


def sphere_on_incline(angle: float, friction: float) -> tuple[float, float]:
    """Acceleration down the incline (m/s²), and slip (m/s) of the sphere on it, after 0.5 s from rest; angle in rad."""
    floor = SimulatedFloorParameters(friction=friction, torsion=0.0, rolling_resistance=0.0)
    spec = mujoco.MjSpec()
    set_options(spec, simulation().physics_step)
    spec.option.gravity = [G * math.sin(angle), 0.0, -G * math.cos(angle)]
    body = spec.worldbody.add_body(name="ball", pos=[0.0, 0.0, RADIUS])
    body.add_freejoint()
    make_ball(spec, body, BallParameters(radius=RADIUS, mass=MASS, inertia=0.4 * MASS * RADIUS**2), floor)
    model = spec.compile()
    data = mujoco.MjData(model)
    for _ in range(100):
        mujoco.mj_step(model, data)
    start = float(data.qvel[0])
    mujoco.mj_step(model, data, nstep=400)
    turn = np.zeros(9)
    mujoco.mju_quat2Mat(turn, data.qpos[3:7])
    rate = turn.reshape(3, 3) @ data.qvel[3:6]
    return (float(data.qvel[0]) - start) / 0.4, float(data.qvel[0] - RADIUS * rate[1])


@pytest.mark.parametrize("degrees", [5.0, 15.0, 30.0, 45.0])
def test_sphere_rolls_down_at_five_sevenths(degrees: float) -> None:
    """Rolling without slip it gains 5/7 g sin θ: 3.5 m/s² at 30°."""
    acceleration, slip = sphere_on_incline(math.radians(degrees), 0.7)
    assert acceleration == pytest.approx(5.0 / 7.0 * G * math.sin(math.radians(degrees)), rel=1e-4)
    assert abs(slip) < 1e-4
    if degrees == 30.0:
        assert acceleration == pytest.approx(3.5, rel=1e-4)


@pytest.mark.parametrize("friction", [0.3, 0.5, 0.7])
def test_slip_starts_where_friction_is_two_sevenths_of_the_slope(friction: float) -> None:
    """It rolls 1/4 degree below tan θ = 7/2 μ, and slips 1/4 degree above; then it gains g (sin θ - μ cos θ)."""
    onset = math.atan(3.5 * friction)
    margin = math.radians(0.25)
    assert abs(sphere_on_incline(onset - margin, friction)[1]) < 1e-3
    steep = onset + margin
    acceleration, slip = sphere_on_incline(steep, friction)
    assert slip > 0.01
    assert acceleration == pytest.approx(G * (math.sin(steep) - friction * math.cos(steep)), rel=5e-3)
