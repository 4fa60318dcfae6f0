"""The picture of what a delay line is worth: ball travel against its delay."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import matplotlib

matplotlib.use("Agg")

import matplotlib.pyplot as plt

_INK, _POINT, _MEASURED = "#1f2a33", "#b3541e", "#5a6fa8"


def draw_delays(points: Sequence[tuple[float, float]], measured: Sequence[float], path: Path, title: str) -> None:
    """Write the picture: ``points`` of (delay s, largest ball travel mm), one a run; ``measured``: the travel of runs
    in which the arms were known by their encoders alone, mm.
    """
    figure, axes = plt.subplots(figsize=(7.0, 4.0), facecolor="white")
    worst: dict[float, float] = {}
    for delay, travel in points:
        worst[delay] = max(travel, worst.get(delay, 0.0))
    ordered = sorted(worst.items())
    axes.plot([d for d, _ in ordered], [t for _, t in ordered], color=_POINT, linewidth=1.6)
    axes.plot([d for d, _ in points], [t for _, t in points], "o", color=_POINT, markersize=5)
    for delay, travel in ordered:
        axes.annotate(f"{travel:.0f}", (delay, travel), (5, 6), textcoords="offset points", color=_INK, fontsize=9)
    if measured:
        axes.axhline(max(measured), color=_MEASURED, linewidth=1.2, linestyle="--")
        axes.annotate("encoders alone", (0.98, max(measured)), (0, 4), xycoords=("axes fraction", "data"),
                      textcoords="offset points", ha="right", color=_MEASURED, fontsize=9)  # fmt: skip
    axes.set_xlabel("delay of the delay line, s", color=_INK)
    axes.set_ylabel("largest ball travel, mm", color=_INK)
    axes.set_ylim(0.0, 1.1 * axes.get_ylim()[1])
    axes.set_title(title, loc="left", color=_INK, fontsize=11)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    figure.tight_layout()
    figure.savefig(path, dpi=140)
    plt.close(figure)
