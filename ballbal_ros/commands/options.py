"""Options that several commands take, each declared once."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Optional

import typer

ROBOT = Path("config/shelver")
Robot = Annotated[Path, typer.Option("--robot", help="The robot's folder.")]
Posture = Annotated[Optional[Path], typer.Option("--posture", help="Plan file whose start gives posture and loads.")]
Joints = Annotated[Optional[list[str]], typer.Option("--joint", help="NAME=VALUE: an arm joint, rad or m.")]
Loads = Annotated[Optional[list[str]], typer.Option("--load", help="HAND=MASS: what a hand holds, kg.")]
Compensation = Annotated[
    Optional[list[str]],
    typer.Option("--compensation", help="planned, quasi_static, none or still; repeatable. All without it."),
]
Seed = Annotated[int, typer.Option("--seed", min=0, help="First seed of the noise.")]
Repeat = Annotated[int, typer.Option("--repeat", min=1, help="How many seeds.")]
Truth = Annotated[
    Optional[list[str]],
    typer.Option("--truth", help="KEY=VALUE: where the simulated robot differs from the model; repeatable."),
]
LeadIn = Annotated[Optional[float], typer.Option("--lead-in", min=0.0, help="Lead-in, s, in place of the parameter's.")]
Json = Annotated[Optional[Path], typer.Option("--json", help="File for what was found.")]
