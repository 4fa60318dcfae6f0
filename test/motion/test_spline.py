"""Arm paths are smooth, honour what is given, and servos make of them what their equations say."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.spline import ArmPath, FollowedPath, check_path, path_through_waypoints
from helpers.robots import reach, shelver

TIMES = [0.0, 0.7, 1.5, 2.1, 3.0]
POINTS = np.random.default_rng(10).normal(size=(5, 3))


def largest_jump(path: ArmPath, knots: list[float], order: int) -> float:
    """The largest step of position (0), rate (1) or acceleration (2) over any knot and both ends."""
    h = 1e-9
    before, after = (path.sample(np.array(knots) + side)[order] for side in (-h, h))
    return float(np.abs(after - before).max())


def test_a_path_goes_through_its_waypoints_and_is_twice_differentiable():
    """Through every waypoint at its time, without a jump in rate or acceleration, at rest at both ends and outside."""
    path = path_through_waypoints(TIMES, POINTS)
    position, rate, acceleration = path.sample(np.array(TIMES))
    np.testing.assert_allclose(position, POINTS, atol=1e-12)
    for order, tolerance in ((0, 1e-7), (1, 1e-6), (2, 1e-5)):
        assert largest_jump(path, TIMES, order) < tolerance
    np.testing.assert_allclose([rate[0], rate[-1], acceleration[0], acceleration[-1]], 0.0, atol=1e-9)
    outside = path.sample(np.array([-5.0, 9.0]))
    np.testing.assert_allclose(outside[0], POINTS[[0, -1]], atol=1e-12)
    np.testing.assert_array_equal(np.stack(outside[1:]), 0.0)


def test_rates_and_accelerations_are_derivatives():
    """Rates and accelerations are the derivatives of the positions, by finite differences."""
    path = path_through_waypoints(TIMES, POINTS)
    at, h = np.linspace(0.05, 2.95, 37), 1e-5
    before, now, after = (path.sample(at + shift) for shift in (-h, 0.0, h))
    np.testing.assert_allclose(now[1], (after[0] - before[0]) / (2 * h), atol=1e-5)
    np.testing.assert_allclose(now[2], (after[1] - before[1]) / (2 * h), atol=1e-4)


def test_one_move_is_the_minimum_jerk_motion():
    """Between two waypoints the path is 10 s³ - 15 s⁴ + 6 s⁵ (Flash and Hogan 1985, from memory)."""
    path, s = path_through_waypoints([0.0, 0.8], np.array([[1.0], [3.0]])), np.linspace(0.0, 1.0, 11)
    position, rate, _ = path.sample(0.8 * s)
    np.testing.assert_allclose(position[:, 0], 1.0 + 2.0 * (10 * s**3 - 15 * s**4 + 6 * s**5), atol=1e-12)
    assert rate.max() == pytest.approx(15.0 / 8.0 * 2.0 / 0.8)


def test_given_rates_and_accelerations_are_honoured():
    """What is given at a waypoint is met there exactly, and the path stays twice differentiable."""
    rates = [None, POINTS[1], None, POINTS[3] * 0.3, None]
    path = path_through_waypoints(TIMES, POINTS, rates)
    _, rate, _ = path.sample(np.array(TIMES))
    np.testing.assert_allclose(rate[[1, 3]], [POINTS[1], POINTS[3] * 0.3], atol=1e-10)
    assert largest_jump(path, TIMES, 2) < 1e-5
    accelerations = [None, None, POINTS[2] * 2.0, None, None]
    path = path_through_waypoints(TIMES, POINTS, rates, accelerations)
    _, rate, acceleration = path.sample(np.array(TIMES))
    np.testing.assert_allclose(rate[1], POINTS[1], atol=1e-10)
    np.testing.assert_allclose(acceleration[2], POINTS[2] * 2.0, atol=1e-8)


def test_given_rates_of_a_polynomial_give_that_polynomial_back():
    """With rates and accelerations of a quintic given at every waypoint, the path is that quintic."""
    knots = np.array([0.0, 0.5, 1.3, 2.0])
    poly = np.polynomial.Polynomial([0.2, 0.0, 0.0, 1.0, -0.9, 0.216])
    assert abs(poly.deriv()(2.0)) > 0.01  # so the last point is set at rest below, and the last piece is another
    values = [poly.deriv(k)(knots)[:, None] if k else poly(knots)[:, None] for k in range(3)]
    values[1][-1] = 0.0
    path = path_through_waypoints(knots, values[0], list(values[1]), list(values[2]))
    at = np.linspace(0.0, 1.3, 20)
    np.testing.assert_allclose(path.sample(at)[0][:, 0], poly(at), atol=1e-12)


@pytest.mark.parametrize("with_rates", [False, True])
def test_a_dwell_is_a_dwell(with_rates: bool):
    """Between two waypoints that are the same nothing moves, whether rates are given or not."""
    points = np.array([[0.0, 1.0], [0.5, 0.2], [0.5, 0.2], [1.0, -1.0], [0.0, 0.0]])
    rates = [np.zeros(2) if k in (1, 2) else (np.array([0.3, -0.2]) if k == 3 else None) for k in range(5)]
    path = path_through_waypoints(TIMES, points, rates if with_rates else None)
    position, rate, acceleration = path.sample(np.linspace(0.7, 1.5, 30))
    np.testing.assert_allclose(position, np.tile(points[1], (30, 1)), atol=1e-12)
    np.testing.assert_allclose(np.stack((rate, acceleration)), 0.0, atol=1e-9)
    assert largest_jump(path, TIMES, 2) < 1e-5


@pytest.mark.parametrize(
    ("times", "points", "rates", "words"),
    [
        ([0.0, 1.0, 1.0], POINTS[:3], None, ("point 2", "times must increase")),
        ([0.0, 2.0, 1.0], POINTS[:3], None, ("point 2 is 1 s", "times must increase")),
        ([0.0, 1.0], np.array([[0.0], [np.nan]]), None, ("not finite",)),
        ([0.0, np.inf], POINTS[:2], None, ("not finite",)),
        ([0.0, 1.0], POINTS[:2], [None, np.full(3, np.nan)], ("rate or acceleration is not finite",)),
        ([0.0, 1.0], POINTS[:2], [None, np.ones(3)], ("last point is still moving", "velocity 0")),
        ([0.0], POINTS[:1], None, ("has 1 points",)),
    ],
)
def test_an_impossible_path_is_refused(
    times: list[float], points: np.ndarray, rates: list | None, words: tuple[str, ...]
):
    """Times that don't increase, numbers that are none, and a path that never ends are refused in one line."""
    with pytest.raises(PlanError) as caught:
        path_through_waypoints(times, points, rates)
    assert "\n" not in str(caught.value)
    for word in words:
        assert word in str(caught.value)


def test_a_path_beyond_a_limit_is_refused_by_joint_and_time():
    """Leaving a joint's limits or going too fast is refused with the joint's name, where, when, and the limit."""
    check_path(reach().path(), shelver(), "reach")
    index = shelver().joint_index("right_elbow_pitch", "test")
    low = shelver().position_low[index]
    beyond = reach().last.copy()
    beyond[index] = low - 0.2
    path = path_through_waypoints([0.0, 2.0], np.stack((reach().first, beyond)))
    with pytest.raises(
        PlanError, match=rf"^story: right_elbow_pitch would be at .* rad after .* s; its limits are {low:g}"
    ):
        check_path(path, shelver(), "story")
    hasty = path_through_waypoints([0.0, 0.1], np.stack((reach().first, reach().last)))
    with pytest.raises(PlanError, match=r"_pitch would move at .* rad/s after .* s; its limit is"):
        check_path(hasty, shelver(), "story")


def test_an_ideal_servo_follows_the_path_itself():
    """An ideal servo makes of the path the path."""
    path = reach().path()
    assert FollowedPath.of(path, "ideal", 80.0) is path


def ramp(slope: float, duration: float) -> ArmPath:
    """One joint that soon moves at a steady rate until near the end."""
    times = np.array([0.0, 0.2, duration - 0.2, duration])
    position = slope * np.array([0.0, 0.1, duration - 0.3, duration - 0.2])
    rate = slope * np.array([0.0, 1.0, 1.0, 0.0])
    return ArmPath.through(times, position[:, None], rate[:, None], np.zeros((4, 1)))


@pytest.mark.parametrize("bandwidth", [20.0, 60.0])
def test_a_servo_on_position_alone_lags_by_two_over_its_bandwidth(bandwidth: float):
    """On a steady ramp a critically damped servo on position lags by 2/w, one on rate too does not (textbook)."""
    path, at = ramp(0.5, 3.0), np.array([1.8, 2.0, 2.2])
    lagging = FollowedPath.of(path, "position", bandwidth).sample(at)[0]
    np.testing.assert_allclose(lagging, path.sample(at - 2.0 / bandwidth)[0], atol=1e-6)
    following = FollowedPath.of(path, "position_velocity", bandwidth).sample(at)[0]
    np.testing.assert_allclose(following, path.sample(at)[0], atol=1e-6)


@pytest.mark.parametrize("servo", ["position", "position_velocity"])
def test_a_followed_path_obeys_its_servos_equation(servo: str):
    """What the servo makes of a path is what SciPy's integrator makes of its equation."""
    bandwidth, path = 45.0, reach().path()
    followed = FollowedPath.of(path, servo, bandwidth)
    joint = int(np.argmax(np.abs(reach().last - reach().first)))

    def motion(t: float, state: np.ndarray) -> list[float]:
        position, rate, _ = path.sample(np.array([t]))
        wanted_rate = rate[0, joint] if servo == "position_velocity" else 0.0
        pull = bandwidth**2 * (position[0, joint] - state[0]) + 2.0 * bandwidth * (wanted_rate - state[1])
        return [state[1], pull]

    at = np.linspace(0.0, followed.duration, 60)
    start = [reach().first[joint], 0.0]
    reference = solve_ivp(motion, (0.0, at[-1]), start, t_eval=at, rtol=1e-7, atol=1e-9, max_step=0.02)
    position, rate, acceleration = (value[:, joint] for value in followed.sample(at))
    # Between its samples, 1 ms apart, the motion is interpolated.
    np.testing.assert_allclose(position, reference.y[0], atol=5e-6)
    np.testing.assert_allclose(rate[:-1], reference.y[1, :-1], atol=2e-4)
    expected = [motion(t, state)[1] for t, state in zip(at, reference.y.T, strict=True)]
    np.testing.assert_allclose(acceleration[:-1], expected[:-1], atol=5e-3)
    assert abs(position[-1] - reach().last[joint]) < 2e-4


def test_paths_of_any_length_can_be_followed():
    """A servo follows paths of any duration and bandwidth: nothing depends on how they fall on the millisecond."""
    for duration in (1.899, 0.2, 0.6180339):
        for bandwidth in (92.94965609839984, 31.4159):
            path = path_through_waypoints([0.0, duration], np.array([[0.0], [1.0]]))
            end = FollowedPath.of(path, "position", bandwidth)
            assert end.sample(np.array([end.duration + 1.0]))[0][0, 0] == pytest.approx(1.0, abs=1e-3)
