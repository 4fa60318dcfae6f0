"""Which postures tell the most: optimal design of the weighing, on the model, before the robot moves."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.weighing.clearance import Clearance
from ballbal_ros.weighing.links import Links
from ballbal_ros.weighing.regressor import Motion, balance_regressor

_TOLD = 1.0
_EXCHANGES = 4


@attrs.frozen(kw_only=True)
class DesignSettings:
    """How postures are looked for. ``margin``: least distance between parts, m; ``lean_share``: of limits.lean, that a
    posture's equilibrium lean may use; ``joint_share``: of each joint's range about its middle; ``effort_share``: of
    each joint's effort limit, to hold the arm.
    """

    count: int = 8
    candidates: int = 150
    seed: int = 1
    margin: float = 0.04
    lean_share: float = 0.5
    joint_share: float = 0.9
    effort_share: float = 0.6


@attrs.frozen(eq=False)
class Design:
    """Postures [K, n] in the order to visit them. ``weakest``: smallest singular value of the scaled regressor over
    what postures can tell at all: along ``directions`` [m, unknowns]; ``candidates``: among how many they were chosen.
    """

    postures: Array
    weakest: float
    directions: Array
    candidates: int


def scaled_regressor(description: RobotDescription, postures: Array, rest_error: float) -> Array:
    """What one rest at each posture [K, n] tells of each unknown [K, 2, 10 links + 2]: rows over the error of a rest
    (N m), columns over the unknowns' standard deviations; the last two are the IMU's tilt.
    """
    links, body = Links.of(description), WholeBody(description)
    lean = np.array([body.posture(posture).equilibrium_lean for posture in postures])
    motion, start = Motion.at_rest(lean, postures), np.zeros(links.unknowns)
    dynamic, step = links.dynamic(start), 1e-4
    rows = balance_regressor(description, motion, np.zeros(2))
    columns = [rows.by_dynamic @ links.dynamic_by(start)]
    for tilt in step * np.eye(2):
        change = balance_regressor(description, motion, tilt).by_dynamic - rows.by_dynamic
        columns.append((links.spread.imu_tilt / step * (change @ dynamic))[:, :, None])
    return np.concatenate(columns, axis=2) / rest_error


def choose_postures(
    description: RobotDescription, home: Array, settings: DesignSettings, rest_error: float = 0.03
) -> Design:
    """Choose postures that maximise the smallest singular value of the scaled regressor, and order them.

    Candidates are drawn within the joints' limits (seeded); those stay whose parts keep clear, on the straight way
    from ``home`` [n] too, whose equilibrium lean is within its share, and which the joints can hold. Of all directions
    of the unknowns those count that all candidates together tell better than the prior does. Greedily by the
    determinant first, then by exchange for the smallest singular value.

    Raises :class:`BallbalError` where too few candidates are left.
    """
    clearance = Clearance(description, settings.margin)
    postures = _candidates(description, home, settings, clearance)
    told = scaled_regressor(description, postures, rest_error)
    _, strength, directions = np.linalg.svd(told.reshape(-1, told.shape[2]), full_matrices=False)
    kept = directions[strength > _TOLD * np.sqrt(len(postures) / settings.count)]
    kept = kept[: 2 * settings.count]
    blocks = told @ kept.T
    chosen = _greedy(blocks, settings.count)
    chosen = _exchange(blocks, chosen)
    ordered = _tour(home, postures[chosen], clearance)
    return Design(ordered, _weakest(blocks, chosen), kept, len(postures))


def _candidates(
    description: RobotDescription, home: Array, settings: DesignSettings, clearance: Clearance
) -> Array:
    rng, body = np.random.default_rng(settings.seed), WholeBody(description)
    # A joint without limits is a turn either way.
    low, high = np.maximum(description.position_low, -np.pi), np.minimum(description.position_high, np.pi)
    middle, half = 0.5 * (low + high), 0.5 * settings.joint_share * (high - low)
    most = settings.lean_share * description.parameters.limits.lean
    found: list[Array] = []
    for _ in range(40 * settings.candidates):
        posture = middle + half * rng.uniform(-1.0, 1.0, description.joint_count)
        if (
            clearance.clear(posture)
            and np.hypot(*body.posture(posture).equilibrium_lean) <= most
            and np.all(np.abs(body.holding_effort(posture)) <= settings.effort_share * description.effort_limit)
            and clearance.way_clear(home, posture)
        ):
            found.append(posture)
            if len(found) == settings.candidates:
                return np.array(found)
    if len(found) < 2 * settings.count:
        raise BallbalError(
            "weigh-in",
            f"finds only {len(found)} postures that are clear of the robot itself and within its limits",
            "begin from a posture with the arms further from the body (--posture)",
        )
    return np.array(found)


def _information(blocks: Array, chosen: list[int]) -> Array:
    rows = blocks[chosen].reshape(-1, blocks.shape[2])
    return np.asarray(rows.T @ rows)


def _weakest(blocks: Array, chosen: list[int]) -> float:
    return float(np.sqrt(max(np.linalg.eigvalsh(_information(blocks, chosen))[0], 0.0)))


def _greedy(blocks: Array, count: int) -> list[int]:
    """One after the other that which adds most to the determinant of prior and information together."""
    chosen: list[int] = []
    total = np.eye(blocks.shape[2])
    for _ in range(min(count, len(blocks))):
        inverse = np.linalg.inv(total)
        gain = np.linalg.slogdet(np.eye(2) + blocks @ inverse @ blocks.transpose(0, 2, 1))[1]
        gain[chosen] = -np.inf
        best = int(np.argmax(gain))
        chosen.append(best)
        total = total + blocks[best].T @ blocks[best]
    return chosen


def _exchange(blocks: Array, chosen: list[int]) -> list[int]:
    """Swap one posture for another as long as the smallest singular value grows."""
    best, chosen = _weakest(blocks, chosen), list(chosen)
    squares = np.einsum("kri,krj->kij", blocks, blocks)
    for _ in range(_EXCHANGES):
        before = best
        for place in range(len(chosen)):
            rest = [index for k, index in enumerate(chosen) if k != place]
            weakest = np.linalg.eigvalsh(_information(blocks, rest) + squares)[:, 0]
            weakest[rest] = -np.inf
            index = int(np.argmax(weakest))
            value = float(np.sqrt(max(weakest[index], 0.0)))
            if value > best * (1.0 + 1e-9):
                chosen[place], best = index, value
        if best <= before * (1.0 + 1e-6):
            break
    return chosen


def _tour(home: Array, postures: Array, clearance: Clearance) -> Array:
    """The postures in an order of short ways, all clear; by way of home where no direct way is."""
    left, here, ordered = list(range(len(postures))), home, []
    while left:
        far = [float(np.abs(postures[k] - here).max()) for k in left]
        by_distance = [left[k] for k in np.argsort(far)]
        direct = next((k for k in by_distance if here is home or clearance.way_clear(here, postures[k])), None)
        if direct is None:
            ordered.append(home)
            here = home
            continue
        ordered.append(postures[direct])
        here = postures[direct]
        left.remove(direct)
    return np.array(ordered)
