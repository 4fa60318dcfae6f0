"""What the planned runs are held to."""

from __future__ import annotations

from collections.abc import Sequence

from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.simulation.rehearsal import RobotFiles
from ballbal_ros.simulation.run_result import LimitCheck, RunResult


def planned_limits(runs: Sequence[RunResult], files: RobotFiles, plan: LeanPlan | None) -> tuple[LimitCheck, ...]:
    """The worst of the planned runs against the limits of robot.yaml and compensation.yaml; with no planned run, of
    the still ones.
    """
    held = [run for run in runs if run.compensation == "planned"] or [
        run for run in runs if run.compensation == "still"
    ]
    if not held:
        return ()
    limits, use = files.description.parameters.limits, files.compensation.acceptance
    checks = [
        LimitCheck("falls", float(sum(run.fell for run in held)), 0.0, ""),
        LimitCheck("ball travel", max(run.ball_travel_peak_mm for run in held), 1e3 * use.ball_travel, "mm"),
        LimitCheck("lean", max(run.lean_peak_deg for run in held), 57.29577951 * limits.lean, "deg"),
        LimitCheck("drive torque", max(run.drive_torque_peak_nm for run in held), limits.drive_torque, "N m"),
        LimitCheck("friction use", max(run.friction_use_peak for run in held), 1.0, ""),
    ]
    if plan is not None:
        checks += [
            LimitCheck(f"planned {u.name}", u.value, u.limit, u.unit) for u in plan.uses if u.name == "torsion use"
        ]
    return tuple(checks)
