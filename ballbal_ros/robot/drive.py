"""The drive: contacts on the ball, and the maps between actuator rates, efforts, and the torque on the body."""

from __future__ import annotations

import attrs
import numpy as np

from ballbal_ros.errors import ModelError
from ballbal_ros.robot.arrays import Array, read_only
from ballbal_ros.robot.parameters import DriveParameters


@attrs.frozen
class Drive:
    """The drive as matrices, in ``base_link`` (physics.md, *Drive*).

    With n contacts: ``rate = rate_map @ (ω_ball - ω_body)`` [n, 3], and the torque on the **body** is
    ``-rate_map.T @ effort``. Power is the same on both sides: ``effort @ rate = torque_on_ball @ (ω_ball - ω_body)``.
    """

    names: tuple[str, ...]
    rate_map: Array
    torque_map: Array
    effort_map: Array
    spin_map: Array
    effort_limit: Array
    rate_limit: Array
    reflected_inertia: Array
    stiction: Array
    encoder_step: Array

    @classmethod
    def from_parameters(cls, parameters: DriveParameters, ball_radius: float, where: str = "robot.yaml") -> Drive:
        """Make the maps from the contacts; raises :class:`ModelError`, which names ``where``, if they can't drive it.

        ``torque_map`` [3, n]: effort → torque on the body. ``effort_map`` [n, 3]: torque on the body → least-norm
        effort. ``spin_map`` [3, n]: actuator rates → rate of the ball relative to the body (least squares).
        """
        rows = []
        for name in parameters.contacts:
            contact = parameters.contact[name]
            point, push = np.array(contact.point), np.array(contact.push)
            for label, vector in (("point", point), ("push", push)):
                if abs(np.linalg.norm(vector) - 1.0) > 1e-3:
                    raise ModelError(
                        where,
                        f"drive.{name}.{label} has length {np.linalg.norm(vector):.4f}",
                        "it takes a unit vector (to 0.001)",
                    )
            point, push = point / np.linalg.norm(point), push / np.linalg.norm(push)
            if abs(point @ push) > 2e-3:
                raise ModelError(
                    where,
                    f"drive.{name}.push is {np.degrees(np.arccos(abs(point @ push))):.1f}° from drive.{name}.point",
                    "a contact pushes along the ball's surface: 90°",
                )
            rows.append(ball_radius / contact.effective_radius * np.cross(point, push))
        rate_map: Array = np.array(rows, float).reshape(-1, 3)
        if len(rows) < 3 or np.linalg.svd(rate_map, compute_uv=False)[-1] < 1e-6 * np.abs(rate_map).max():
            raise ModelError(
                where,
                f"drive.contacts has {len(rows)} contacts that can't turn the ball about all three axes",
                "give three or more whose n × d span space",
            )
        members = [parameters.contact[name] for name in parameters.contacts]
        rotor = np.diag([m.rotor_inertia for m in members])
        return cls(
            names=tuple(parameters.contacts),
            rate_map=read_only(rate_map),
            torque_map=read_only(-rate_map.T.copy()),
            effort_map=read_only(np.asarray(-np.linalg.pinv(rate_map.T))),
            spin_map=read_only(np.asarray(np.linalg.pinv(rate_map))),
            effort_limit=read_only(np.array([m.effort_limit for m in members])),
            rate_limit=read_only(np.array([m.rate_limit for m in members])),
            reflected_inertia=read_only(rate_map.T @ rotor @ rate_map),
            stiction=read_only(np.array([m.stiction for m in members])),
            encoder_step=read_only(np.array([m.encoder_step for m in members])),
        )

    def effort(self, torque_on_body: Array) -> Array:
        """Least-norm actuator efforts [n], N m, that give this torque on the body [3], N m, in ``base_link``."""
        return np.asarray(self.effort_map @ torque_on_body)

    def torque(self, effort: Array) -> Array:
        """Torque on the body [3], N m, in ``base_link``, of these actuator efforts [n], N m."""
        return np.asarray(self.torque_map @ effort)

    def torque_limit(self, axis: Array | tuple[float, float, float]) -> float:
        """Greatest torque, N m, about a unit axis of ``base_link`` within all actuators' limits, least-norm efforts."""
        share = np.abs(self.effort_map @ np.asarray(axis, float))
        return float(np.min(self.effort_limit[share > 1e-12] / share[share > 1e-12]))
