"""``ballbal weigh-in --live`` as a person meets it: the bus is played."""

from __future__ import annotations

import io
from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy")

from rich.console import Console
from typer.testing import CliRunner

from ballbal_ros.commands import bus_weighing
from ballbal_ros.commands.live_weighing import live_weighing
from ballbal_ros.commands.main import app
from ballbal_ros.errors import BallbalError
from ballbal_ros.weighing.postures import DesignSettings
from helpers.rehearsing import files
from helpers.robots import reach


class PlayedRobot:
    """A robot that balances, and a person who answers; it must not be moved."""

    answer, simulated = "yes", False

    def __init__(self, *_: Any) -> None: ...

    def __enter__(self) -> PlayedRobot:
        return self

    def __exit__(self, *_: object) -> None: ...

    def wait_for_robot(self) -> None: ...

    def arms(self) -> np.ndarray:
        return reach().first.copy()

    def read_line(self) -> str:
        return f"{self.answer}\n"

    def begin(self) -> None:
        raise AssertionError("it began")


def weigh(monkeypatch: pytest.MonkeyPatch, sure: bool, **of_robot: Any) -> str:
    """What is printed; raises what the weighing does."""
    monkeypatch.setattr(bus_weighing, "BusWeighing", type("Played", (PlayedRobot,), of_robot))
    console = Console(file=io.StringIO(), width=100)
    try:
        live_weighing(files(), 1, "", DesignSettings(count=2, candidates=40), console, sure=sure)
    finally:
        printed = console.file.getvalue()  # type: ignore[attr-defined]
        weigh.printed = printed  # type: ignore[attr-defined]
    return printed


def test_unless_confirmed_in_words_nothing_is_sent(monkeypatch: pytest.MonkeyPatch):
    """The cautions are told; another answer than the words asked for ends it, and so does the end of the input."""
    for answer in ("yes", ""):
        with pytest.raises(BallbalError, match="was not confirmed, and has sent nothing"):
            weigh(monkeypatch, False, answer=answer)
        assert "emergency stop" in weigh.printed and "Type all is clear" in weigh.printed  # type: ignore[attr-defined]
    with pytest.raises(AssertionError, match="it began"):
        weigh(monkeypatch, False, answer="All is clear")


def test_nobody_answers_in_advance_for_a_real_robot(monkeypatch: pytest.MonkeyPatch):
    """--yes is refused where no simulated robot is up."""
    with pytest.raises(BallbalError, match="--yes: is for the simulated robot alone"):
        weigh(monkeypatch, True)
    with pytest.raises(AssertionError, match="it began"):
        weigh(monkeypatch, True, simulated=True)


@pytest.mark.parametrize("words", [["--truth", "drawn=1"], ["--posture", "config/plans/reach.yaml"]])
def test_what_only_the_simulation_knows_is_refused(words: list[str]):
    """A robot that is there is as it is: no truth, no posture to begin in."""
    run = CliRunner().invoke(app, ["weigh-in", "--live", *words])
    assert run.exit_code != 0 and f"{words[0]}: is for the simulated robot in one process" in str(run.exception)
