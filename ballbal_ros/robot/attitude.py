"""Lean, heading and body rates (physics.md, *Frames*): ``R = Rz(heading) Ry(pitch) Rx(roll)``.

``rotation_lean`` is ``base_link`` in ``base_footprint``; rates and accelerations are those of the body, in
``base_link`` axes. All functions work on stacks: leans [..., 2] as (roll, pitch), in rad.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.robot.arrays import Array


def rotation_lean(lean: Array) -> Array:
    """``Ry(pitch) Rx(roll)`` [..., 3, 3] of leans [..., 2]."""
    sin, cos = np.sin(lean), np.cos(lean)
    s_roll, s_pitch, c_roll, c_pitch = sin[..., 0], sin[..., 1], cos[..., 0], cos[..., 1]
    rotation = np.zeros((*lean.shape[:-1], 3, 3))
    rotation[..., 0, 0], rotation[..., 0, 1], rotation[..., 0, 2] = c_pitch, s_pitch * s_roll, s_pitch * c_roll
    rotation[..., 1, 1], rotation[..., 1, 2] = c_roll, -s_roll
    rotation[..., 2, 0], rotation[..., 2, 1], rotation[..., 2, 2] = -s_pitch, c_pitch * s_roll, c_pitch * c_roll
    return rotation


def rotation_heading(heading: float) -> Array:
    """``Rz(heading)`` [3, 3]."""
    sin, cos = math.sin(heading), math.cos(heading)
    return np.array([[cos, -sin, 0.0], [sin, cos, 0.0], [0.0, 0.0, 1.0]])


def rotation_rpy(rpy: Array) -> Array:
    """``Rz(yaw) Ry(pitch) Rx(roll)`` [3, 3] of fixed-axis angles [3], the URDF's convention."""
    return np.asarray(rotation_heading(float(rpy[2])) @ rotation_lean(np.asarray(rpy[:2], float)))


def lean_and_heading(rotation: Array) -> tuple[float, float, float]:
    """(roll, pitch, heading) in rad of a rotation matrix [3, 3] of ``base_link`` in ``odom``; inverse of the product
    above.
    """
    return (
        math.atan2(rotation[2, 1], rotation[2, 2]),
        math.asin(min(1.0, max(-1.0, -rotation[2, 0]))),
        math.atan2(rotation[1, 0], rotation[0, 0]),
    )


def lean_and_heading_from_quat_xyzw(x: float, y: float, z: float, w: float) -> tuple[float, float, float]:
    """(roll, pitch, heading) in rad of a unit quaternion in ROS order."""
    return (
        math.atan2(2.0 * (y * z + w * x), 1.0 - 2.0 * (x * x + y * y)),
        math.asin(min(1.0, max(-1.0, 2.0 * (w * y - x * z)))),
        math.atan2(2.0 * (x * y + w * z), 1.0 - 2.0 * (y * y + z * z)),
    )


def quat_xyzw(roll: float, pitch: float, heading: float) -> tuple[float, float, float, float]:
    """The unit quaternion in ROS order of (roll, pitch, heading), in rad."""
    cr, sr = math.cos(roll / 2), math.sin(roll / 2)
    cp, sp = math.cos(pitch / 2), math.sin(pitch / 2)
    ch, sh = math.cos(heading / 2), math.sin(heading / 2)
    return (
        sr * cp * ch - cr * sp * sh,
        cr * sp * ch + sr * cp * sh,
        cr * cp * sh - sr * sp * ch,
        cr * cp * ch + sr * sp * sh,
    )


def lean_rates(lean: Array, body_rate: Array) -> tuple[float, float, float]:
    """(roll rate, pitch rate, heading rate) in rad/s from the body's rate [3] in ``base_link`` at one lean [2]."""
    roll, pitch = float(lean[0]), float(lean[1])
    cr, sr, cp, tp = math.cos(roll), math.sin(roll), math.cos(pitch), math.tan(pitch)
    wx, wy, wz = float(body_rate[0]), float(body_rate[1]), float(body_rate[2])
    turning = sr * wy + cr * wz
    return wx + tp * turning, cr * wy - sr * wz, turning / cp


@attrs.frozen
class BodyRates:
    """Body rate ω and acceleration α in ``base_link`` [..., 3], and their derivatives [..., 3, 6].

    The six columns are the derivatives by roll, pitch, roll rate, pitch rate, roll acceleration, pitch acceleration.
    """

    rate: Array
    acceleration: Array
    rate_by_lean: Array
    acceleration_by_lean: Array


def body_rates(
    lean: Array, lean_rate: Array, lean_acceleration: Array, heading_rate: Array, heading_acceleration: Array
) -> BodyRates:
    """ω and α of the body in ``base_link`` from lean and heading, with derivatives.

    ω = φ' e_x + θ' a(φ) + ψ' b(φ, θ) with roll φ, pitch θ, heading ψ, a = (0, cos φ, -sin φ) and b the third row of
    Ry Rx. Leans [..., 2], headings [...]; rad, s.
    """
    sin, cos = np.sin(lean), np.cos(lean)
    s_r, s_p, c_r, c_p = sin[..., 0], sin[..., 1], cos[..., 0], cos[..., 1]
    v_r, v_p = lean_rate[..., 0], lean_rate[..., 1]
    zero, one = np.zeros_like(s_r), np.ones_like(s_r)

    def column(x: Array, y: Array, z: Array) -> Array:
        """Vectors [..., 3] of their components."""
        return np.stack((x, y, z), axis=-1)

    e_x = column(one, zero, zero)
    a, a_r = column(zero, c_r, -s_r), column(zero, -s_r, -c_r)
    b = column(-s_p, c_p * s_r, c_p * c_r)
    b_r, b_p = column(zero, c_p * c_r, -c_p * s_r), column(-c_p, -s_p * s_r, -s_p * c_r)
    b_rr, b_rp, b_pp = (
        column(zero, -c_p * s_r, -c_p * c_r),
        column(zero, -s_p * c_r, s_p * s_r),
        column(s_p, -c_p * s_r, -c_p * c_r),
    )
    v_r, v_p, v_h = v_r[..., None], v_p[..., None], np.asarray(heading_rate)[..., None]
    u_r, u_p = lean_acceleration[..., 0, None], lean_acceleration[..., 1, None]
    u_h = np.asarray(heading_acceleration)[..., None]
    rate = v_r * e_x + v_p * a + v_h * b
    acceleration = u_r * e_x + u_p * a + u_h * b + v_p * v_r * a_r + v_h * (v_r * b_r + v_p * b_p)
    none = np.zeros_like(e_x)
    rate_by = np.stack((v_p * a_r + v_h * b_r, v_h * b_p, e_x, a, none, none), axis=-1)
    acceleration_by = np.stack(
        (
            u_p * a_r + u_h * b_r - v_p * v_r * a + v_h * (v_r * b_rr + v_p * b_rp),
            u_h * b_p + v_h * (v_r * b_rp + v_p * b_pp),
            v_p * a_r + v_h * b_r,
            v_r * a_r + v_h * b_p,
            e_x,
            a,
        ),
        axis=-1,
    )
    return BodyRates(rate, acceleration, rate_by, acceleration_by)
