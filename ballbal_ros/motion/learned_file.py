"""What the repetitions of a plan have taught, in a text file beside the plan: YAML, read by a safe loader."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.plan_mark import PlanMark
from ballbal_ros.motion.repetition import Learned
from ballbal_ros.robot.arrays import Array
from ballbal_ros.yaml_files import read_yaml

_KEYS = ("motion", "fits", "runs", "step", "moment_roll", "moment_pitch", "torque_x", "torque_y")
_HEAD = """# What repetitions of a plan have taught, N m every step s from the plan's start: written by
# 'ballbal rehearse --learn'. It is known again by the mark 'motion', and holds for the model, loads and plan of the
# mark 'fits' alone; delete the file to begin anew.
"""


def write_learned(path: Path, learned: Learned) -> None:
    """Write what was learnt; raises :class:`BallbalError` where the file can't be written."""
    columns = (*learned.moment.T, *learned.torque.T)
    mark = learned.mark
    lines = [f"motion: '{mark.motion}'", f"fits: '{mark.fits}'", f"runs: {learned.runs}", f"step: {learned.step:g}"]
    for name, column in zip(_KEYS[4:], columns):
        lines.append(f"{name}: [{', '.join(f'{value:.4f}' for value in column.tolist())}]")
    try:
        path.write_text(_HEAD + "\n".join(lines) + "\n", encoding="utf-8")
    except OSError as error:
        raise BallbalError(str(path), f"can't be written: {error.strerror}", "give the path of a file") from error


def read_learned(path: Path) -> Learned:
    """Read what :func:`write_learned` wrote; raises :class:`BallbalError` in one line for anything else."""
    document = read_yaml(path)
    if not isinstance(document, Mapping) or sorted(document) != sorted(_KEYS):
        raise BallbalError(str(path), "is no file of what was learnt", f"it has {', '.join(_KEYS)}; delete it")
    runs, step = document["runs"], _number(document["step"])
    columns = [_column(document[name], name, path) for name in _KEYS[4:]]
    if not isinstance(runs, int) or runs < 1 or not step > 0.0 or len({len(column) for column in columns}) != 1:
        raise BallbalError(str(path), "has no runs, no step, or columns of several lengths", "delete it to begin anew")
    roll, pitch, x, y = columns
    mark = PlanMark(str(document["motion"]), str(document["fits"]))
    return Learned(mark, runs, step, np.stack((roll, pitch), axis=1), np.stack((x, y), axis=1))


def _number(value: Any) -> float:
    return float(value) if isinstance(value, (int, float)) and not isinstance(value, bool) else float("nan")


def _column(value: Any, name: str, path: Path) -> Array:
    column = np.array([_number(item) for item in value] if isinstance(value, list) else [np.nan])
    if len(column) < 2 or not np.isfinite(column).all():
        raise BallbalError(str(path), f"{name} is no list of finite numbers", "delete the file to begin anew")
    return column
