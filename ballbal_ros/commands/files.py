"""A robot's folder as commands read it, and files that commands write."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import load
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.parameters import SimulationParameters
from ballbal_ros.simulation.rehearsal import RobotFiles


def read_robot(folder: Path) -> RobotFiles:
    """Read the four parameter files and the URDF of a robot's folder; raises :class:`BallbalError` in one line."""
    if not folder.is_dir():
        raise BallbalError(
            "--robot", f"{folder} is no folder", "give the folder that holds robot.yaml, such as config/shelver"
        )
    return RobotFiles(
        description=RobotDescription.load(folder),
        balance=load(BalanceParameters, folder / "balance.yaml"),
        compensation=load(CompensationParameters, folder / "compensation.yaml"),
        simulation=load(SimulationParameters, folder / "simulation.yaml"),
    )


def write_json(path: Path, document: Any) -> None:
    """Write a document as JSON; raises :class:`BallbalError` where it can't be written or holds a NaN."""
    try:
        path.write_text(json.dumps(document, indent=2, allow_nan=False) + "\n", encoding="utf-8")
    except ValueError as error:
        what = "can't be written: something that was measured is not a number"
        raise BallbalError(str(path), what, "a robot that fell before its run began has no figures") from error
    except OSError as error:
        raise BallbalError(
            str(path), f"can't be written: {error.strerror}", "give the path of a file to write"
        ) from error
