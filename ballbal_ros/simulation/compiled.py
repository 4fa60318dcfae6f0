"""The simulated robot's inner loops, compiled: what happened between MuJoCo's steps took longer in Python than they do.

Plain functions on arrays: the classes beside this module own the arrays and say what they mean. All are in this one
file, because the compiler's cache only knows when the file of the function itself has changed. Compiled once for a
machine, on import.
"""

from __future__ import annotations

import math
from pathlib import Path

import mujoco
import numpy as np
from llvmlite.binding import load_library_permanently
from numba import njit, types

from ballbal_ros.robot.arrays import Array

# Below this speed (m/s) the resistance falls to zero in proportion, as for a real ball that settles in its dent.
_CRAWL = 1e-3
_UPRIGHT = math.cos(math.radians(45.0))

_libraries = sorted(Path(mujoco.__file__).parent.glob("libmujoco.so*"))
if not _libraries:
    # Without it the compiler would end the process at the first function that calls it.
    raise ImportError(f"no libmujoco.so beside {mujoco.__file__}: the simulated robot needs MuJoCo's wheel for Linux")
load_library_permanently(str(_libraries[0]))
# MuJoCo's C functions: model, data and arrays are addresses.
_step1 = types.ExternalFunction("mj_step1", types.void(types.intp, types.intp))
_step2 = types.ExternalFunction("mj_step2", types.void(types.intp, types.intp))
_multiply = types.ExternalFunction("mj_mulM", types.void(types.intp, types.intp, types.intp, types.intp))
_full = types.ExternalFunction("mj_fullM", types.void(types.intp, types.intp, types.intp))


@njit("void(f8[:,::1], f8[:,::1], f8[::1], f8[::1])", cache=True)
def drive_torque(actuators: Array, state: Array, effort: Array, torque: Array) -> None:
    """``torque`` [3] on the ball of these efforts; see :class:`~ballbal_ros.simulation.drive.SimulatedDrive`."""
    x = y = z = 0.0
    for i in range(len(effort)):
        given, turn = min(max(effort[i], -actuators[i, 9]), actuators[i, 9]) * actuators[i, 10], state[1, i]
        if abs(turn) > actuators[i, 6] and given * turn > 0.0:
            given = 0.0
        given -= state[3, i]
        x += actuators[i, 3] * given
        y += actuators[i, 4] * given
        z += actuators[i, 5] * given
    torque[0], torque[1], torque[2] = x, y, z


@njit("void(f8[:,::1], f8[:,::1], f8, f8, f8, f8)", cache=True)
def drive_turn(actuators: Array, state: Array, slides_at: float, x: float, y: float, z: float) -> None:
    """Turn the actuators with the ball, whose rate (rad/s) this is.

    Rows of ``state``: angle, turn, bristle, friction.
    """
    for i in range(state.shape[1]):
        turn = actuators[i, 0] * x + actuators[i, 1] * y + actuators[i, 2] * z
        before = state[2, i]
        bent = (before + turn) / (1.0 + abs(turn) / slides_at)
        state[0, i] += turn
        state[1, i] = turn
        state[2, i] = bent
        state[3, i] = actuators[i, 7] * bent + actuators[i, 8] * (bent - before)


@njit("void(f8[::1], f8, f8, f8, f8, f8[::1])", cache=True)
def floor_moment(floor: Array, load: float, vx: float, vy: float, spin: float, moment: Array) -> None:
    """``moment`` [3] of the floor on the ball; see :class:`~ballbal_ros.simulation.floor.FloorMoments`."""
    load = max(load, 0.0)
    share = floor[0] * load / math.sqrt(vx * vx + vy * vy + _CRAWL**2)
    turned = spin * floor[4]
    before = floor[5]
    bent = (before + turned) / (1.0 + abs(turned) / floor[2])
    floor[5] = bent
    torsion = floor[1] * load
    hold = torsion * bent / floor[2] + floor[3] * (bent - before)
    moment[0], moment[1], moment[2] = share * vy, -share * vx, -min(max(hold, -torsion), torsion)


@njit("void(f8[::1], f8, f8, f8, f8[::1])", cache=True)
def turn_quaternion(quat: Array, hx: float, hy: float, hz: float, out: Array) -> None:
    """``out``: the quaternion wxyz, turned about its own axes by the small rotation vector 2 h, made a unit."""
    w, x, y, z = quat[0], quat[1], quat[2], quat[3]
    nw, nx = w - x * hx - y * hy - z * hz, x + w * hx + y * hz - z * hy
    ny, nz = y + w * hy + z * hx - x * hz, z + w * hz + x * hy - y * hx
    scale = 1.0 / math.sqrt(nw * nw + nx * nx + ny * ny + nz * nz)
    out[0], out[1], out[2], out[3] = nw * scale, nx * scale, ny * scale, nz * scale


@njit("void(f8[::1], f8, f8, f8[::1], f8[::1], f8[::1])", cache=True)
def filter_attitude(state: Array, pull: float, half: float, rate: Array, bias: Array, force: Array) -> None:
    """Take in a gyro's rate, less its bias, and a specific force; see
    :class:`~ballbal_ros.simulation.sensors.AttitudeFilter`.

    ``state``: the quaternion wxyz, and the rate before; NaN where there was none yet.
    """
    w, x, y, z = state[0], state[1], state[2], state[3]
    gx, gy, gz = rate[0] - bias[0], rate[1] - bias[1], rate[2] - bias[2]
    ax, ay, az = force[0], force[1], force[2]
    lx, ly, lz = state[4], state[5], state[6]
    if math.isnan(lx):
        lx, ly, lz = gx, gy, gz
    share = pull / math.sqrt(ax * ax + ay * ay + az * az + 1e-12)
    vx, vy, vz = 2.0 * (x * z - w * y), 2.0 * (y * z + w * x), 1.0 - 2.0 * (x * x + y * y)
    hx = half * (0.5 * (gx + lx) + share * (ay * vz - az * vy))
    hy = half * (0.5 * (gy + ly) + share * (az * vx - ax * vz))
    hz = half * (0.5 * (gz + lz) + share * (ax * vy - ay * vx))
    state[4], state[5], state[6] = gx, gy, gz
    turn_quaternion(state, hx, hy, hz, state)


@njit("void(f8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[::1])", cache=True)
def sense(
    sample: Array, errors: Array, attitude: Array, filtering: Array, known_bias: Array, steps: Array, told: Array
) -> None:
    """``told``, laid out as ``sample`` is, is what the sensors make of it; see
    :class:`~ballbal_ros.simulation.sensors.SimulatedSensors`.

    ``filtering``: the attitude filter's pull and half its period; a pull of zero: there is no filter.
    """
    for i in range(6):
        told[i] = sample[i] + errors[i]
    true = sample[6:10]
    if filtering[0] > 0.0:
        filter_attitude(attitude, filtering[0], filtering[1], told[:3], known_bias, told[3:6])
        true = attitude[:4]
    turn_quaternion(true, errors[6], errors[7], errors[8], told[6:10])
    for i in range(len(steps)):
        told[10 + i] = steps[i] * np.rint(sample[10 + i] * (1.0 / steps[i]))


@njit("void(f8[:,::1], f8[::1])", cache=True)
def _solve(matrix: Array, vector: Array) -> None:
    """Solve a symmetric positive definite system in place, by Cholesky's method; so small a one, where it stands."""
    size = len(vector)
    for i in range(size):
        for k in range(i + 1):
            rest = matrix[i, k]
            for m in range(k):
                rest -= matrix[i, m] * matrix[k, m]
            matrix[i, k] = math.sqrt(rest) if i == k else rest / matrix[k, k]
        for m in range(i):
            vector[i] -= matrix[i, m] * vector[m]
        vector[i] /= matrix[i, i]
    for i in range(size - 1, -1, -1):
        for m in range(i + 1, size):
            vector[i] -= matrix[m, i] * vector[m]
        vector[i] /= matrix[i, i]


@njit(
    "void(intp, intp, intp, intp, i8, f8[::1], f8[:,::1], i8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[::1],"
    " f8[:,::1], f8[:,::1])",
    cache=True,
)
def arm_torque(
    model: int,
    data: int,
    full: int,
    dense: int,
    first: int,
    pull: Array,
    gains: Array,
    free: Array,
    position: Array,
    rate: Array,
    applied: Array,
    bias: Array,
    contact: Array,
    work: Array,
    inertia: Array,
) -> None:
    """Apply the torques of the arm joints, from ``first`` of nv on; see :class:`~ballbal_ros.simulation.arms.ArmServo`.

    ``full``, ``dense``: what ``mj_fullM`` takes beside the model. Rows of ``gains``: of position, of rate, and the
    highest torque. ``free``: the other places in [nv]. ``work`` [3, nv] and ``inertia`` [nv, nv] are room to work in.
    """
    wanted, forces, outside = work[0], work[1], work[2]
    wanted[:] = 0.0
    for i in range(len(pull)):
        wanted[first + i] = pull[i] - gains[1, i] * rate[i] - gains[0, i] * position[i]
    _multiply(model, data, forces.ctypes.data, wanted.ctypes.data)
    outside[:] = applied + contact - bias - forces
    _full(model, full, dense)
    count = len(free)
    block, right = np.empty((count, count)), np.empty(count)
    for i in range(count):
        right[i] = outside[free[i]]
        for k in range(count):
            block[i, k] = inertia[free[i], free[k]]
    _solve(block, right)
    for i in range(count):
        wanted[free[i]] = right[i]
    _multiply(model, data, forces.ctypes.data, wanted.ctypes.data)
    for i in range(len(pull)):
        most = gains[2, i]
        applied[first + i] = min(max(forces[first + i] + bias[first + i], -most), most)


@njit("void(f8[::1], f8[::1], f8, f8[::1], f8[:,::1], f8[:,::1], f8[::1], i8[::1], f8[::1])", cache=True)
def look(
    sensed: Array,
    felt: Array,
    steps: float,
    turning: Array,
    half_step: Array,
    drive: Array,
    place: Array,
    arms: Array,
    sample: Array,
) -> None:
    """Take a sample [10 + actuators + arms]; see :class:`~ballbal_ros.simulation.sensors.SimulatedSensors`.

    ``felt`` [3]: sum of the specific forces in so many ``steps``; it begins anew.
    """
    for i in range(3):
        # The integrator's rates are half a step older than its positions: a gyro's are not.
        sample[i] = sensed[i] + (
            half_step[i, 0] * turning[0] + half_step[i, 1] * turning[1] + half_step[i, 2] * turning[2]
        )
        sample[3 + i] = felt[i] / steps
        felt[i] = 0.0
    sample[6:10] = sensed[6:10]
    actuators = drive.shape[1]
    sample[10 : 10 + actuators] = drive[0]
    for i in range(len(arms)):
        sample[10 + actuators + i] = place[arms[i]]


@njit("f8(f8[::1], f8[:,::1], f8[::1], i8)", cache=True)
def _spin(up: Array, axes: Array, velocity: Array, rolling: int) -> float:
    """The ball's rate about the vertical, rad/s: the body's, and its own in the body."""
    spin = 0.0
    for i in range(3):
        rate = velocity[3 + i]
        for k in range(3):
            rate += axes[i, k] * velocity[rolling + k]
        spin += up[i] * rate
    return spin


@njit(
    "b1(intp, intp, i8[::1], f8[::1], f8[::1], f8[::1], f8[:,::1], f8[:,::1], f8[::1], f8[::1], f8[::1], f8[::1],"
    " f8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[:,::1], f8[:,::1], f8[::1], i8[::1], f8[::1])",
    cache=True,
)
def go_on(
    model: int,
    data: int,
    numbers: Array,
    sizes: Array,
    before: Array,
    after: Array,
    actuators: Array,
    drive: Array,
    torque: Array,
    floor: Array,
    moment: Array,
    place: Array,
    velocity: Array,
    applied: Array,
    contact: Array,
    sensed: Array,
    turning: Array,
    up: Array,
    axes: Array,
    half_step: Array,
    felt: Array,
    arms: Array,
    sample: Array,
) -> bool:
    """Go on by a tick of physics steps, and return whether the robot stands; fills ``sample``: :func:`look`.

    ``numbers``: physics steps in a tick; how many of them still have the efforts ``before``, the others have those
    ``after``; after which one the sensors look; where the ball joint is in ``velocity`` and in ``place``. ``sizes``:
    presliding, rad, and the ball's radius, m. ``moment``: the floor's on the ball. That, ``place`` to ``turning`` and
    the vertical in the body, ``up``, are MuJoCo's own. ``axes``: the drive's in the body.
    """
    rolling, quat = numbers[3], numbers[4]
    for step in range(numbers[0]):
        drive_torque(actuators, drive, before if step < numbers[1] else after, torque)
        applied[rolling : rolling + 3] = torque
        floor_moment(floor, contact[2], velocity[0], velocity[1], _spin(up, axes, velocity, rolling), moment)
        _step2(model, data)
        for i in range(3):
            felt[i] += sensed[3 + i]
        drive_turn(actuators, drive, sizes[0], velocity[rolling], velocity[rolling + 1], velocity[rolling + 2])
        # The ball has turned about this very rate, so that the rate's numbers hold in the drive's axes too.
        place[quat], place[quat + 1], place[quat + 2], place[quat + 3] = 1.0, 0.0, 0.0, 0.0
        _step1(model, data)
        if step == numbers[2]:
            look(sensed, felt, float(numbers[0]), turning, half_step, drive, place, arms, sample)
    return up[2] > _UPRIGHT and abs(place[2] - sizes[1]) < sizes[1]
