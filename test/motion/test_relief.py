"""The ball motion that lets a plan begin at once takes the mismatch away and stays within its limits."""

import attrs
import numpy as np
import pytest
from numpy.typing import NDArray

from ballbal_ros.errors import PlanRefused
from ballbal_ros.motion.lean_solver import LeanProblem, LeanSolution, equilibrium_lean, solve_lean
from ballbal_ros.motion.relief import BallBasis, BallRelief, ReliefLimits, ball_relief
from ballbal_ros.robot.attitude import rotation_heading
from ballbal_ros.robot.balance_rows import OutsideMotion
from helpers.robots import reach, shelver

STEP, NODES = 0.01, 301
NONE = np.zeros(2)
AMPLE = 1e3
Array = NDArray[np.float64]


@pytest.fixture(scope="module")
def standing() -> tuple[LeanProblem, LeanSolution]:
    """The robot stands still, in balance, for three seconds."""
    none = np.zeros((NODES, shelver().joint_count))
    terms = reach().body().terms(none + reach().first, none, none)
    outside = OutsideMotion.at_rest(NODES)
    problem = LeanProblem.of(terms, outside, STEP, shelver().parameters.ball.radius, shelver().ball_apparent_mass)
    lean = equilibrium_lean(problem, 0, terms.static_lean()[0])
    return problem, solve_lean(problem, lean, lean)


def turns(angle: float) -> Array:
    """[N, 2, 2] from plan axes into axes turned by `angle` against them."""
    return np.tile(rotation_heading(angle)[:2, :2].T, (NODES, 1, 1))


def limited(torque: float = 30.0, grip: float = AMPLE, torsion: float = AMPLE, effort: float = AMPLE) -> ReliefLimits:
    """Limits of torque, grip, spin moment and actuator effort, N m."""
    return ReliefLimits.of(torque, grip, torsion, shelver().drive.effort_map / effort)


def relieve(
    standing: tuple[LeanProblem, LeanSolution],
    start: Array,
    end: Array = NONE,
    limits: ReliefLimits | None = None,
    turn: float = 0.0,
) -> tuple[BallRelief, LeanSolution]:
    """The relief of these mismatches, and the solution with it."""
    problem, solution = standing
    present = np.zeros((NODES, 2))
    relief = ball_relief(problem, solution, turns(turn), start, end, 1.4, limits or limited(), present)
    moved = problem.with_ball(turns(turn), relief.position, relief.rate, relief.acceleration)
    return relief, solve_lean(moved, solution.lean[0], solution.lean[-1])


@pytest.mark.parametrize("size", [2e-4, 0.01, 0.06])
def test_it_takes_the_mismatch_away(standing: tuple[LeanProblem, LeanSolution], size: float):
    """Small or large, at start and end, the lean rates change by what was missing; the ball begins and ends at rest."""
    start, end = size * np.array([0.6, -0.8]), 0.3 * size * np.array([-0.5, 0.2])
    relief, solution = relieve(standing, start, end)
    np.testing.assert_allclose(solution.lean_rate[0], -start, atol=2e-3 * size)
    np.testing.assert_allclose(solution.lean_rate[-1], -end, atol=2e-3 * size)
    for motion in (relief.position, relief.rate, relief.acceleration):
        np.testing.assert_allclose(motion[[0, -1]], 0.0, atol=1e-12)
    np.testing.assert_allclose(relief.position[145:215], 0.0, atol=1e-12)


def test_large_ones_keep_to_the_torque_limit(standing: tuple[LeanProblem, LeanSolution]):
    """A large relief uses the drive torque that it may, no more, and travels further where it may use less."""
    travels = []
    for torque in (30.0, 15.0):
        relief, solution = relieve(standing, np.array([0.0, 0.06]), limits=limited(torque))
        travels.append(np.abs(relief.position).max())
        assert np.abs(solution.rows.torque[:, :2]).max() < 1.05 * torque
    assert travels[1] > 1.01 * travels[0]


@pytest.mark.parametrize("axis", [0, 1])
def test_the_floors_grip_limits_the_torque(standing: tuple[LeanProblem, LeanSolution], axis: int):
    """What the floor's friction gives limits the torque as the drive does, in all directions."""
    start = 0.06 * np.eye(2)[axis]
    by_torque, _ = relieve(standing, start, limits=limited(15.0))
    by_grip, _ = relieve(standing, start, limits=limited(grip=15.0))
    np.testing.assert_allclose(by_grip.position, by_torque.position, atol=2e-5)
    _, solution = relieve(standing, 0.07 * np.array([0.7, 0.7]), limits=limited(grip=15.0))
    assert np.hypot(*solution.rows.torque[:, :2].T).max() < 1.12 * 15.0


def test_the_floors_spin_moment_and_each_actuator_have_their_limits(standing: tuple[LeanProblem, LeanSolution]):
    """Spin moment and actuator efforts of a quick roll stay within what is given, for more travel."""
    start = np.array([0.06, 0.01])
    free, loose = relieve(standing, start)
    drive = shelver().drive
    for limits, use in (
        (limited(torsion=1.0), lambda torque: np.abs(torque[:, 2]).max() / 1.0),
        (limited(effort=6.0), lambda torque: np.abs(torque @ drive.effort_map.T).max() / 6.0),
    ):
        relief, solution = relieve(standing, start, limits=limits)
        assert use(loose.rows.torque) > 1.3
        assert use(solution.rows.torque) < 1.1
        assert np.abs(relief.position).max() > np.abs(free.position).max()


def test_what_the_drive_can_not_do_is_refused(standing: tuple[LeanProblem, LeanSolution]):
    """A mismatch that no ball motion within the limits takes away is refused in one line."""
    with pytest.raises(PlanRefused, match="no ball motion within .* give it more lead-in") as caught:
        relieve(standing, np.array([0.0, 1.5]), limits=limited(5.0))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("size", [2e-4, 0.05])
@pytest.mark.parametrize("angle", [np.pi / 2, np.pi])
def test_it_knows_no_direction(standing: tuple[LeanProblem, LeanSolution], size: float, angle: float):
    """Plan axes turned by a right angle against the body's turn the answer, seen in the body, not at all."""
    straight, _ = relieve(standing, np.array([0.0, size]))
    turned, _ = relieve(standing, np.array([0.0, size]), turn=angle)
    seen = turned.position @ turns(angle)[0].T
    np.testing.assert_allclose(seen, straight.position, atol=1e-7)


def test_the_opposite_mismatch_takes_the_opposite_motion(standing: tuple[LeanProblem, LeanSolution]):
    """The relief of the opposite mismatch goes as far the other way."""
    there, _ = relieve(standing, np.array([0.03, 0.0]))
    back, _ = relieve(standing, np.array([-0.03, 0.0]))
    np.testing.assert_allclose(np.abs(back.position).max(), np.abs(there.position).max(), rtol=2e-3)


def test_position_rate_and_acceleration_of_the_basis_belong_together():
    """Rates and accelerations of the motions are their derivatives, by finite differences on a fine grid."""
    step = 0.001
    basis = BallBasis.on(step, 3001, 1.2, 0.1)
    for value, rate in ((basis.position, basis.rate), (basis.rate, basis.acceleration)):
        difference = (value[2:] - value[:-2]) / (2 * step)
        np.testing.assert_allclose(difference, rate[1:-1], atol=0.02 * np.abs(rate).max())


@pytest.mark.parametrize("step", [0.002, 0.01, 0.05])
@pytest.mark.parametrize("at_end", [False, True])
def test_the_basis_fits_any_grid(step: float, at_end: bool):
    """On fine and coarse grids the motions are at rest at the window's ends and outside it, and none is lost."""
    nodes = round(3.0 / step) + 1
    basis = BallBasis.on(step, nodes, 1.2, 0.04, at_end=at_end)
    assert basis.count >= 3
    assert np.linalg.matrix_rank(basis.acceleration) == basis.count
    inside = np.flatnonzero(np.any(basis.position != 0.0, axis=1))
    for motion in attrs.astuple(basis)[:3]:
        np.testing.assert_allclose(motion[[0, -1]], 0.0, atol=1e-9)
    assert (len(inside) - 1) * step < 1.2 + 8 * step
