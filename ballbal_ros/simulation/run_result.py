"""What a run measured, and what several runs say together, as ``--json`` writes it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import attrs

KINDS = ("planned", "quasi_static", "none", "still")


@attrs.frozen
class RunResult:
    """One run. Ball travel is that of the true ball centre from where it was when the run began, or from where it was
    meant to be.
    """

    compensation: str
    seed: int
    fell: bool
    ball_travel_peak_mm: float
    ball_travel_end_mm: float
    lean_peak_deg: float
    drive_torque_peak_nm: float
    friction_use_peak: float
    duration_s: float
    real_time_factor: float


@attrs.frozen
class LimitCheck:
    """One value that a run is held to."""

    name: str
    value: float
    limit: float
    unit: str

    @property
    def ok(self) -> bool:
        """Whether it is within its limit, or on it to rounding."""
        return self.value <= self.limit * (1.0 + 1e-9)


@attrs.frozen
class RunSet:
    """Runs of one plan on one robot. ``clock`` is in-process, lock-step or real-time; ``notes`` say what else
    happened.
    """

    robot: str
    plan: str
    clock: str
    runs: tuple[RunResult, ...]
    limits: tuple[LimitCheck, ...]
    notes: tuple[str, ...] = ()

    @property
    def ok(self) -> bool:
        """Whether no planned run fell and all limits are kept."""
        return all(limit.ok for limit in self.limits)

    def as_json(self) -> dict[str, Any]:
        """The document that ``--json`` writes."""
        return {
            "robot": self.robot,
            "plan": self.plan,
            "clock": self.clock,
            "runs": [attrs.asdict(run) for run in self.runs],
            "limits": [{**attrs.asdict(limit), "ok": limit.ok} for limit in self.limits],
            "ok": self.ok,
            **({"notes": list(self.notes)} if self.notes else {}),
        }


def median(values: Sequence[float]) -> float:
    """The middle value, or the mean of the two in the middle."""
    ordered = sorted(values)
    half = len(ordered) // 2
    return ordered[half] if len(ordered) % 2 else 0.5 * (ordered[half - 1] + ordered[half])
