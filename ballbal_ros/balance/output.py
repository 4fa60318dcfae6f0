"""From the torque that the loop wants to efforts that may be sent: limits, and actuators that are no longer there."""

from __future__ import annotations

import math

import numpy as np

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.balance_rows import GRAVITY
from ballbal_ros.robot.description import RobotDescription

Triple = tuple[float, float, float]

_ROUNDING = 1.0 + 1e-9


class TorqueOutput:
    """Limits torque, its rate and the drive's power, and shares it out among the actuators that give torque.

    ``scale``: what share of its torque the drive can still give (battery). With actuators ``lost`` the others give
    what is wanted about x and y; where they do not suffice for z as well, ``gives_heading`` is False, and z gets what
    comes of it.
    """

    def __init__(self, description: RobotDescription, parameters: BalanceParameters, mass: float) -> None:
        """``mass``, kg: all that stands on the ball."""
        drive, limits = description.drive, parameters.limits
        self._torque_map = np.ascontiguousarray(drive.torque_map)
        self._limits: list[float] = drive.effort_limit.tolist()
        self._step = limits.torque_rate * parameters.loop.period
        self._power = limits.drive_power
        weight = (mass + description.parameters.ball.mass) * GRAVITY
        # Beyond what the floor holds, the ball would only spin on the spot.
        self._spin_limit = description.parameters.floor.torsion * weight
        self.lost: set[int] = set()
        self.scale = 1.0
        self.gives_heading = True
        self._shares = [1.0 / limit for limit in self._limits]
        self._map_efforts(drive.effort_map)
        self._zero = np.zeros(len(drive.names))
        self.sent: Triple = (0.0, 0.0, 0.0)
        self.effort = self._zero.copy()

    def _map_efforts(self, effort_map: Array) -> None:
        # Plain numbers: for so few they are faster than arrays.
        self._effort_map, self._effort_rows = effort_map, effort_map.tolist()

    @property
    def spare(self) -> bool:
        """Whether it could do without any one of the actuators that it has now, heading and all."""
        return all(self._spans({*self.lost, i}) for i in range(len(self._limits)) if i not in self.lost)

    @property
    def calm(self) -> bool:
        """Whether the torque is so small that no actuator's failing could spin the ball on the floor."""
        return math.hypot(self.sent[0], self.sent[1]) < 0.4 * self._spin_limit

    @property
    def level_limit(self) -> float:
        """Greatest torque, N m, that the actuators give about every level axis, upright."""
        rows = np.hypot(self._effort_map[:, 0], self._effort_map[:, 1])
        return self.scale * min(limit / row for limit, row in zip(self._limits, rows.tolist()) if row > 1e-9)

    def _spans(self, without: set[int]) -> bool:
        kept = np.delete(self._torque_map, sorted(without), axis=1)
        return kept.shape[1] >= 3 and bool(np.linalg.svd(kept, compute_uv=False)[-1] > 0.1)

    def can_lose(self, index: int) -> bool:
        """Whether the others still give torque about every level axis."""
        kept = np.delete(self._torque_map[:2], sorted({*self.lost, index}), axis=1)
        return kept.shape[1] >= 2 and bool(np.linalg.svd(kept, compute_uv=False)[-1] > 0.1)

    def lose(self, index: int) -> None:
        """Reckon no more with an actuator."""
        self.lost.add(index)
        self.effort = self.effort.copy()
        self.effort[index] = 0.0
        self.sent = self._level(self.effort, (0.0, 0.0))
        self.gives_heading = self._spans(self.lost)
        kept = self._torque_map.copy()
        kept[:, sorted(self.lost)] = 0.0
        if not self.gives_heading:
            kept[2] = 0.0
        # About a level axis even where two are all that is left; pinv gives none to those that are lost.
        self._map_efforts(np.asarray(np.linalg.pinv(kept, rcond=1e-3), float))

    def find(self) -> None:
        """Reckon with every actuator again (a person has seen to them)."""
        self.lost.clear()
        self.gives_heading = True
        self._map_efforts(np.asarray(np.linalg.pinv(self._torque_map), float))

    def none(self) -> Array:
        """No torque at all, at once."""
        self.sent = (0.0, 0.0, 0.0)
        self.effort = self._zero.copy()
        return self._zero.copy()

    def send(
        self,
        tx: float,
        ty: float,
        tz: float,
        limit: float,
        lean: tuple[float, float],
        moved: list[float],
        passed: float,
    ) -> Array | None:
        """Efforts [n] for a torque on the body in ``base_footprint`` axes, N m; None where it is not finite. ``sent``
        is what they give.

        ``limit``: greatest torque, N m, about any level axis; about z it is at most what the floor holds; ``moved``:
        how far each actuator went within the last ``passed`` s, rad.
        """
        if not math.isfinite(tx + ty + tz):
            return None
        limit *= self.scale
        size = math.hypot(tx, ty)
        if size > limit:
            tx, ty = tx * limit / size, ty * limit / size
        most = min(limit, self._spin_limit)
        tz = max(-most, min(most, tz))
        last_x, last_y, last_z = self.sent
        step = self._step
        change = math.hypot(tx - last_x, ty - last_y)
        if change > step:
            tx, ty = last_x + (tx - last_x) * step / change, last_y + (ty - last_y) * step / change
        if self.gives_heading:
            tz = max(last_z - step, min(last_z + step, tz))
        effort = self._shared_out(tx, ty, tz, lean)
        most_work = self._power * passed
        work = 0.0
        for e, m in zip(effort, moved):
            work += abs(e * m)
        if work > most_work:
            effort = [e * most_work / work for e in effort]
            self.sent = self._level(effort, lean)
        self.effort = np.array(self._without_step(effort, last_x, last_y, lean))
        return self.effort

    def _without_step(self, effort: list[float], x: float, y: float, lean: tuple[float, float]) -> list[float]:
        """Where actuators' limits turned the torque aside, go no further from the last (x, y), N m, than a tick may."""
        ahead = self.sent[0] - x, self.sent[1] - y
        if math.hypot(*ahead) <= self._step * _ROUNDING:
            return effort
        last = self.effort.tolist()
        # What the last efforts give now is not quite what they gave: the body has leaned meanwhile.
        here = self._level(last, lean)
        off = here[0] - x, here[1] - y
        way = ahead[0] - off[0], ahead[1] - off[1]
        square, along = way[0] ** 2 + way[1] ** 2, off[0] * way[0] + off[1] * way[1]
        room = max(along**2 - square * (off[0] ** 2 + off[1] ** 2 - self._step**2), 0.0)
        share = min(max((math.sqrt(room) - along) / square, 0.0), 1.0)
        near = [before + share * (e - before) for e, before in zip(effort, last)]
        self.sent = self._level(near, lean)
        return near

    def _shared_out(self, tx: float, ty: float, tz: float, lean: tuple[float, float]) -> list[float]:
        """Efforts within every actuator's limit: the heading gives way first."""
        roll, pitch = lean
        sr, cr, sp, cp = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)
        x, y, z = cp * tx - sp * tz, sp * sr * tx + cr * ty + cp * sr * tz, sp * cr * tx - sr * ty + cp * cr * tz
        effort = [ex * x + ey * y + ez * z for ex, ey, ez in self._effort_rows]
        over = 0.0
        for e, share in zip(effort, self._shares):
            over = max(over, abs(e) * share)
        over /= self.scale
        if over > 1.0 and tz != 0.0:
            return self._shared_out(tx, ty, 0.0, lean)
        if over > 1.0:
            effort = [e / over for e in effort]
        if over > 1.0 or not self.gives_heading:
            self.sent = self._level(effort, lean)
        else:
            self.sent = tx, ty, tz
        return effort

    def _level(self, effort: list[float] | Array, lean: tuple[float, float]) -> Triple:
        """The torque, in ``base_footprint`` axes, that efforts give."""
        x, y, z = (self._torque_map @ effort).tolist()
        roll, pitch = lean
        sr, cr, sp, cp = math.sin(roll), math.cos(roll), math.sin(pitch), math.cos(pitch)
        return cp * x + sp * sr * y + sp * cr * z, cr * y - sr * z, -sp * x + cp * sr * y + cp * cr * z
