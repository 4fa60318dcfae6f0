"""The gains hold the demo robot as they should: stable, within margins, ball on its station, whatever pushes."""

from __future__ import annotations

import attrs
import numpy as np
import pytest
from scipy.linalg import solve_discrete_lyapunov

from ballbal_ros.balance.discrete import sampled_noise
from ballbal_ros.balance.gains import Gains, checked_design, design, margins, poles, requirements
from ballbal_ros.balance.noise import estimator_gain, station_noise
from ballbal_ros.balance.regulator import Regulator
from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import Posture, WholeBody
from helpers.balancing import Tick, accelerations, balance, reach_gains
from helpers.robots import posture, reach, shelver

BALL = slice(4, 6)


def postures() -> list[Posture]:
    """Both ends of `reach` with its loads, empty hands, and one arm out with a load."""
    body, empty = reach().body(), WholeBody(shelver())
    lopsided = WholeBody(shelver(), [Load("right_hand", 3.0, [0.0, 0.0, -0.05])])
    aside = {"right_shoulder_pitch": -1.0, "right_shoulder_roll": -0.8}
    zero = np.zeros(shelver().joint_count)
    return [
        body.posture(reach().first),
        body.posture(reach().last),
        empty.posture(zero),
        lopsided.posture(posture(aside)),
    ]


@pytest.fixture(scope="module")
def gains() -> Gains:
    """The demo robot's gains at the start of `reach`."""
    return reach_gains()


def travel(regulator: Regulator, couple: Array) -> Array:
    """Ball [N, 2] over time, m, on the linear plant under outside couples [N, 2], N m."""
    tick, plant = Tick(regulator), regulator.plant
    a, b = plant.augmented()
    state, ball = np.zeros(len(a)), np.zeros((len(couple), 2))
    for k, moment in enumerate(couple):
        state = a @ state + b @ tick(plant.output @ state[:8])
        state[:8] += plant.disturbance @ moment
        ball[k] = state[BALL]
    return ball


@pytest.mark.parametrize("index", range(4), ids=["hanging", "reaching", "empty", "lopsided"])
def test_every_margin_is_kept(index: int) -> None:
    """At postures far apart, with loads and without, each margin is what `margins.*` asks for."""
    _, found = checked_design(postures()[index], shelver(), balance())
    assert all(requirement.ok for requirement in requirements(found, balance()))


def test_poles_are_those_of_feedback_and_filter(gains: Gains) -> None:
    """Separation: the closed loop's poles are the regulator's and the filter's, its moments' included."""
    for regulator in (gains.station, gains.heading):
        n, _, k = regulator.sizes
        a, b = regulator.plant.augmented()
        predict = np.eye(n + k)
        predict[:n, :n], predict[:n, n:] = regulator.plant.transition, regulator.plant.disturbance
        output = np.hstack((regulator.plant.output, np.zeros((len(regulator.plant.output), k))))
        apart = np.concatenate(
            (
                np.linalg.eigvals(a - b @ regulator.feedback),
                np.linalg.eigvals(predict @ (np.eye(n + k) - regulator.filter_gain @ output)),
            )
        )
        together = np.linalg.eigvals(regulator.closed_loop())
        # past torques are known to the controller too: as many poles at the origin, which a double root blurs
        together = together[np.abs(together) > 1e-3]
        apart = apart[np.abs(apart) > 1e-3]
        assert np.abs(apart).max() < 1.0
        for pole in together:
            assert np.abs(apart - pole).min() < 1e-5
        for pole in apart:
            assert np.abs(together - pole).min() < 1e-5


def test_regulator_is_lyapunov_stable(gains: Gains) -> None:
    """There is a quadratic measure of the error that shrinks at every tick: AᵀPA - P = -I has a positive definite P."""
    for regulator in (gains.station, gains.heading):
        closed = regulator.closed_loop()
        measure = solve_discrete_lyapunov(closed.T, np.eye(len(closed)))
        assert np.linalg.eigvalsh((measure + measure.T) / 2.0).min() > 0.0


def test_controller_is_the_tick(gains: Gains) -> None:
    """The state space that margins are measured on answers measurements as the equations of the tick do."""
    random = np.random.default_rng(5)
    for regulator in (gains.station, gains.heading):
        tick, controller = Tick(regulator), regulator.controller()
        inner = np.zeros(len(controller.a))
        for _ in range(50):
            measured = random.normal(size=len(regulator.plant.output))
            expected = controller.c @ inner + controller.d @ measured
            np.testing.assert_allclose(tick(measured), expected, rtol=1e-8, atol=1e-6)
            inner = controller.a @ inner + controller.b @ measured


def test_constant_moment_leaves_the_ball_on_its_station(gains: Gains) -> None:
    """With the trim a lasting moment moves the ball but for a while; without it the ball stays away."""
    bare = design(postures()[0], shelver(), attrs.evolve(balance(), trim=False)).station
    for regulator, low, high in ((gains.station, 0.0, 1e-6), (bare, 5e-3, 1.0)):
        plant, controller = regulator.plant, regulator.controller()
        closed = regulator.closed_loop()
        push = np.zeros(len(closed))
        push[:8] = plant.disturbance @ [0.0, 2.4]
        resting = np.linalg.solve(np.eye(len(closed)) - closed, push)
        assert low <= abs(resting[4]) <= high
        assert len(closed) == 8 + 2 * plant.history + len(controller.a)


def test_moment_is_trimmed_away(gains: Gains) -> None:
    """A step of 2.4 N m (0.4 kg in a hand 0.6 m ahead) moves the ball by 15 mm at most, by 0.5 mm after 3 s."""
    couple = np.zeros((2000, 2))
    couple[:, 1] = 2.4
    ball = np.hypot(*travel(gains.station, couple).T)
    assert ball.max() < 15e-3
    assert ball[1500:].max() < 0.5e-3


def test_shove_is_survived() -> None:
    """25 N s over 0.1 s, 1.2 m above the floor, within 40 N m: ball within 0.5 m, back to 10 mm after 4 s.

    The nonlinear robot, without noise, and without the trim, whose rate the loop limits for the sake of such shoves.
    """
    held = postures()[0]
    gains = design(held, shelver(), attrs.evolve(balance(), trim=False))
    tick, limit = Tick(gains.station, balance().limits.torque), balance().limits.torque
    radius, period, force = shelver().parameters.ball.radius, gains.station.plant.period, 250.0
    state, acting = np.zeros(8), np.zeros(2)
    state[:2] = held.equilibrium_lean
    away, largest = [], 0.0
    for k in range(2050):
        deviation = state[:6].copy()
        deviation[:2] -= held.equilibrium_lean
        asked = tick(deviation)
        pushed = force if k < 50 else 0.0
        # a force at height h above the ball is a couple f (h + r), with r f less for the drive to hold
        lean, ball = accelerations(
            held, shelver(), state, acting - [0.0, radius * pushed], np.array([0.0, pushed * 1.2])
        )
        state[2:4] += period * lean
        state[6:] += period * ball
        state[:2] += period * state[2:4]
        state[4:6] += period * state[6:]
        acting = asked
        away.append(float(np.hypot(*state[4:6])))
        largest = max(largest, float(np.abs(acting).max()))
    assert largest <= limit
    assert 0.1 < max(away) < 0.5
    assert away[-1] < 10e-3


def test_shove_moves_it_away() -> None:
    """A steady push of a few newtons moves the machine away from the push at last (common practice, no source)."""
    regulator = design(postures()[0], shelver(), attrs.evolve(balance(), trim=False)).station
    couple = np.zeros((2500, 2))
    couple[:, 1] = 5.0 * 1.2  # 5 N forward, 1.2 m above the floor
    assert travel(regulator, couple)[-1, 0] > 5e-3


def standing_still(regulator: Regulator, gains: Gains) -> float:
    """Standard deviation of the ball on x, m, under the noise of an IMU that integrates its gyro's."""
    given = gains.parameters.estimator
    plant, controller = regulator.plant, regulator.controller()
    a, b = plant.augmented()
    n, past = len(a), len(controller.a)
    period, radius = plant.period, gains.model.ball_radius
    see = np.zeros((6, n + 2))
    see[:, :8] = plant.output
    see[[0, 1], [n, n + 1]] = 1.0
    see[[4, 5], [n + 1, n]] = radius, -radius
    seen = np.zeros((6, 4))
    seen[2:4, :2] = given.rate_noise * np.eye(2)
    seen[:2, 2:] = given.lean_noise * np.eye(2)
    seen[4:, 2:] = radius * given.lean_noise * np.array([[0.0, 1.0], [-1.0, 0.0]])
    plant_a, plant_b, plant_noise = np.zeros((n + 2, n + 2)), np.zeros((n + 2, 2)), np.zeros((n + 2, 4))
    plant_a[:n, :n], plant_b[:n] = a, b
    plant_a[n:, n:] = (1.0 - period / 5.0) * np.eye(2)  # drawn to the vertical with a time constant of 5 s
    plant_noise[n:, :2] = period * given.rate_noise * np.eye(2)
    closed = np.block(
        [
            [plant_a + plant_b @ controller.d @ see, plant_b @ controller.c],
            [controller.b @ see, controller.a],
        ]
    )
    noise = np.vstack((plant_noise + plant_b @ controller.d @ seen, controller.b @ seen))
    covariance = solve_discrete_lyapunov(closed, noise @ noise.T)
    assert closed.shape == (n + 2 + past, n + 2 + past)
    return float(np.sqrt(covariance[4, 4]))


@pytest.mark.parametrize(("density", "most"), [(1.7e-4, 0.6e-3), (5e-5, 0.25e-3)])
def test_noise_floor(density: float, most: float) -> None:
    """Standing still the ball's standard deviation is the gyro's affair: 0.6 mm with a mid-range one (EuRoC data set's
    ADIS16448), 0.25 mm with the demo robot's.
    """
    noise = attrs.evolve(balance().estimator, rate_noise=density * np.sqrt(500.0))
    gains = design(reach().body().posture(reach().first), shelver(), attrs.evolve(balance(), estimator=noise))
    assert standing_still(gains.station, gains) < most


def test_estimator_is_the_best_for_its_noise(gains: Gains) -> None:
    """No estimator predicts better under its noise: one that overlooks the gyro's drift has more error in any mix.

    Error covariance by Lyapunov's equation from the joint covariance of process and measurement noise.
    """
    plant, noise = gains.station.plant, station_noise(gains.model, gains.parameters)
    a, _, e = plant.continuous
    wandering, density, predict = np.zeros((10, 10)), np.zeros((10, 10)), np.eye(10)
    wandering[:8, :8], wandering[:8, 8:] = a, e
    density[:8, :8], density[8:, 8:] = noise.process, noise.walk**2 * np.eye(2)
    predict[:8, :8], predict[:8, 8:] = plant.transition, plant.disturbance
    see = np.eye(6, 10)
    cross = noise.drift @ noise.measured
    process = sampled_noise(wandering, density, plant.period) + cross @ noise.drift.T

    def error(gain: Array) -> Array:
        mix = predict @ gain
        grown = process - cross @ mix.T - mix @ cross.T + mix @ noise.measured @ mix.T
        return solve_discrete_lyapunov(predict - mix @ see, grown)

    best = error(gains.station.filter_gain)
    others = [estimator_gain(plant, attrs.evolve(noise, drift=0.0 * noise.drift))]
    others += [estimator_gain(plant, attrs.evolve(noise, walk=factor * noise.walk)) for factor in (0.5, 2.0)]
    for other in others:
        excess = error(other) - best
        assert np.linalg.eigvalsh((excess + excess.T) / 2.0).min() > -1e-9 * np.trace(best)
        assert np.trace(excess) > 1e-3 * np.trace(best)


def test_mirrored_posture_has_mirrored_gains() -> None:
    """Seen in a mirror, what concerns roll, y and the torque about x changes its sign."""
    held, flip = postures()[3], np.diag([1.0, -1.0, 1.0])
    mirrored = Posture(held.mass, flip @ held.center, flip @ held.inertia @ flip)
    one, other = (design(p, shelver(), balance()).station for p in (held, mirrored))
    states = np.diag([-1.0, 1.0, -1.0, 1.0, 1.0, -1.0, 1.0, -1.0])
    torques = np.diag([-1.0, 1.0])
    measured = np.diag([-1.0, 1.0, -1.0, 1.0, 1.0, -1.0])
    np.testing.assert_allclose(other.feedback[:, :8], torques @ one.feedback[:, :8] @ states, rtol=1e-4, atol=1e-2)
    np.testing.assert_allclose(other.filter_gain[:8], states @ one.filter_gain[:8] @ measured, rtol=1e-4, atol=1e-4)


def test_poles_are_told_once(gains: Gains) -> None:
    """Poles are listed slowest first, pairs once, all of them damped."""
    listed = poles(gains.station)
    assert [pole.frequency for pole in listed] == sorted(pole.frequency for pole in listed)
    assert all(0.3 < pole.damping <= 1.0 + 1e-9 for pole in listed)
    assert len(listed) <= len(gains.station.closed_loop())


def test_too_little_margin_is_refused() -> None:
    """A design below what `margins.*` asks for is refused in one line: margin, value, limit."""
    asking = attrs.evolve(balance(), margins=attrs.evolve(balance().margins, delay=0.2))
    with pytest.raises(BallbalError, match=r"delay margin, x 0\.0\d+ s; it takes at least 0\.2 s") as refused:
        checked_design(postures()[0], shelver(), asking)
    assert "\n" not in str(refused.value)
    found = margins(design(postures()[0], shelver(), asking))
    assert not all(requirement.ok for requirement in requirements(found, asking))


def test_later_torque_costs_margin(gains: Gains) -> None:
    """Reckoning with 6 ms more delay the design still stands, with less gain and phase to spare."""
    slow = attrs.evolve(balance(), loop=attrs.evolve(balance().loop, delay=0.008))
    later = design(postures()[0], shelver(), slow)
    assert later.station.plant.history == 4
    assert later.station.spectral_radius() < 1.0
    for slower, axis in zip(margins(later)[0].axes, margins(gains)[0].axes, strict=True):
        assert slower.gain_up < axis.gain_up
        assert slower.phase < axis.phase
