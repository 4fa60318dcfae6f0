"""The picture of a planned motion: the robot leans before its arms move, and the ball stays where it is."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np

matplotlib.use("Agg")

import matplotlib.pyplot as plt
from matplotlib.patches import Circle, Polygon
from matplotlib.ticker import FuncFormatter

from ballbal_ros.report.silhouette import outlines, shapes
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.simulation.rehearsal import Trace
from ballbal_ros.simulation.run_result import KINDS
from ballbal_ros.simulation.timeline import Timeline

_INK, _LEAN, _ARMS = "#1f2a33", "#b3541e", "#2b6a6c"
_COLORS = {"planned": "#b3541e", "quasi_static": "#5a6fa8", "none": "#8a8f94", "still": "#2b6a6c"}


def draw_motion(
    description: RobotDescription,
    loads: tuple[Load, ...],
    timeline: Timeline,
    traces: Mapping[str, Trace],
    path: Path,
    title: str,
) -> None:
    """Write the picture of some runs of one plan (PNG, SVG or PDF by the file's ending).

    Above the robot from its left side at five times of the planned run, below arms and lean, and the ball's travel of
    all.
    """
    planned = traces.get("planned") or next(iter(traces.values()))
    figure = plt.figure(figsize=(10.0, 7.8), facecolor="white")
    grid = figure.add_gridspec(
        3, 5, height_ratios=(1.9, 1.0, 1.0), hspace=0.38, wspace=0.05, left=0.08, right=0.93, top=0.9, bottom=0.07
    )
    figure.suptitle(title, x=0.08, ha="left", fontsize=13, color=_INK)
    moments = _moments(timeline, planned)
    body, solids = WholeBody(description, loads), shapes(description)
    for column, moment in enumerate(moments):
        _draw_robot(figure.add_subplot(grid[0, column]), description, body, solids, planned, moment, timeline)
    curves = figure.add_subplot(grid[1, :])
    _draw_curves(curves, planned, timeline, moments)
    _draw_travel(figure.add_subplot(grid[2, :], sharex=curves), traces, timeline)
    figure.savefig(path, dpi=140)
    plt.close(figure)


def _moments(timeline: Timeline, trace: Trace) -> list[float]:
    """Before the lean, half-way through it, as the arms start, in the middle of their first motion, and at its end."""
    moved = np.abs(trace.arms - trace.arms[np.searchsorted(trace.time, timeline.arms) - 1]).max(axis=1) > 1e-3
    first = float(trace.time[int(np.argmax(moved))]) if moved.any() else timeline.arms
    steady = np.abs(np.diff(trace.arms, axis=0)).max(axis=1) < 1e-6
    after = np.flatnonzero(steady & (trace.time[1:] > first + 0.1))
    end = float(trace.time[after[0]]) if len(after) else float(trace.time[-1])
    return [max(trace.time[0], timeline.lean), first - 0.3, first, 0.5 * (first + end), end]


def _draw_robot(
    axes: Any,
    description: RobotDescription,
    body: WholeBody,
    solids: list[Any],
    trace: Trace,
    moment: float,
    timeline: Timeline,
) -> None:
    k = min(int(np.searchsorted(trace.time, moment)), len(trace.time) - 1)
    lean, arms, ball_x = trace.lean[k], trace.arms[k], float(trace.ball[k, 0] - trace.ball[0, 0])
    radius = description.parameters.ball.radius
    axes.add_patch(Circle((ball_x, radius), radius, facecolor="#d9d4c8", edgecolor=_INK, linewidth=0.8))
    for outline in outlines(description, solids, arms, lean, ball_x):
        axes.add_patch(Polygon(outline.corners, facecolor=outline.color, edgecolor=_INK, linewidth=0.5))
    center = _center(body, arms, lean) + np.array([ball_x, radius])
    axes.plot([center[0], center[0]], [0.0, center[1]], color=_LEAN, linewidth=1.0, linestyle=(0, (4, 2)))
    axes.plot(*center, marker="o", markersize=5, color=_LEAN)
    axes.axhline(0.0, color=_INK, linewidth=1.0)
    axes.set_xlim(-0.45, 0.85)
    axes.set_ylim(-0.05, 1.55)
    axes.set_aspect("equal")
    axes.axis("off")
    axes.set_title(f"{moment - timeline.arms:+.2f} s\nlean {np.degrees(lean[1]):.1f}°", fontsize=10, color=_INK)


def _center(body: WholeBody, arms: Array, lean: Array) -> Array:
    """Mass centre as (x, z) from the ball's centre, leaning."""
    roll, pitch = lean
    x, y, z = body.center_of_mass(arms).tolist()
    up = np.cos(roll) * z + np.sin(roll) * y
    return np.array([np.cos(pitch) * x + np.sin(pitch) * up, np.cos(pitch) * up - np.sin(pitch) * x])


def _draw_curves(axes: Any, trace: Trace, timeline: Timeline, moments: list[float]) -> None:
    time = trace.time - timeline.arms
    widest = int(np.argmax(np.ptp(trace.arms, axis=0)))
    axes.plot(time, np.degrees(trace.lean[:, 1]), color=_LEAN, label="lean")
    axes.set_ylabel("lean, deg", color=_LEAN)
    other = axes.twinx()
    other.plot(time, np.degrees(trace.arms[:, widest]), color=_ARMS, label="arm")
    other.set_ylabel("arm joint, deg", color=_ARMS)
    for moment in moments:
        axes.axvline(moment - timeline.arms, color="#c9c9c9", linewidth=0.8, zorder=0)
    axes.set_title("The lean comes before the arms", fontsize=10, loc="left", color=_INK)
    for spine in ("top",):
        axes.spines[spine].set_visible(False)
        other.spines[spine].set_visible(False)


def _draw_travel(axes: Any, traces: Mapping[str, Trace], timeline: Timeline) -> None:
    for kind in KINDS:
        if kind in traces:
            trace = traces[kind]
            away = 1e3 * np.hypot(*(trace.ball - trace.ball[0]).T)
            axes.plot(
                trace.time - timeline.arms, np.maximum(away, 1e-2), color=_COLORS[kind], label=kind, linewidth=1.2
            )
    axes.set_yscale("log")
    axes.set_ylim(0.03, None)
    axes.set_ylabel("ball travel, mm")
    axes.set_xlabel("time from the start of the arms, s")
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.legend(frameon=False, ncols=4, fontsize=9, loc="lower right", bbox_to_anchor=(1.0, 0.97))
    axes.set_title("How far the ball goes", fontsize=10, loc="left", color=_INK)
    for spine in ("top", "right"):
        axes.spines[spine].set_visible(False)
