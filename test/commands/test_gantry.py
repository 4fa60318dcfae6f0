"""``ballbal checkup --gantry`` as a person meets it, against the simulated drive hung up; the bus is played."""

from __future__ import annotations

import io
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("rclpy")

from rich.console import Console

from ballbal_ros.bring_up.hand_turns import TURNS
from ballbal_ros.commands.gantry import BringUp, gantry
from ballbal_ros.errors import BallbalError
from ballbal_ros.findings import OK
from ballbal_ros.robot.arrays import Array
from helpers.hung import HungDrive, Wiring
from helpers.robots import CONFIG

SHELVER = CONFIG / "shelver"


class PlayedLine:
    """The drive and a person at the terminal: `answers` are typed in their order; "turn" turns the ball."""

    hung: HungDrive
    answers: list[str]

    def __init__(self, domain: int, namespace: str, names: tuple[str, ...]) -> None:
        self.see: Callable[[Array], None] | None = None
        self._turns = iter(TURNS)

    def __enter__(self) -> PlayedLine:
        return self

    def __exit__(self, *_: object) -> None: ...

    def turn_for(self, span: float) -> None: ...

    def check_alone(self) -> None: ...

    def wait_for_drive(self, timeout: float) -> None: ...

    @property
    def angle(self) -> Array:
        return self.hung.reading

    def read_line(self) -> str:
        answer = self.answers.pop(0)
        if answer == "turn":
            assert self.see is not None
            self.hung.turn_by_hand(next(self._turns).axis, 1.0, self.see)
            return "\n"
        return answer

    def run(self, tick: Callable[[float, Array], Array], done: Callable[[], bool]) -> None:
        while not done():
            self.hung.go_on(tick(self.hung.time, self.hung.reading))


def guided(monkeypatch: pytest.MonkeyPatch, wiring: Wiring, *answers: str, share: float = 0.05) -> tuple[BringUp, str]:
    """Go through it with these answers; what it found, and what stood on the screen."""
    played = type("Played", (PlayedLine,), {"hung": HungDrive(wiring), "answers": list(answers)})
    monkeypatch.setattr("ballbal_ros.commands.gantry_bus.DriveLine", played)
    screen = io.StringIO()
    return gantry(SHELVER, 7, "", share, Console(file=screen, width=80)), screen.getvalue()


def test_a_drive_in_order_is_said_to_be(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cautions first, then each turn is asked for in words, then the pushes; all in order, the delay too."""
    done, screen = guided(monkeypatch, Wiring.right(), "it hangs free\n", "turn", "turn", "turn", "go\n")
    assert done.ok, screen
    order = ["risk assessment", "emergency stop", "it hangs free", "plumb line", "rolled forward", "to the left", "go:"]
    assert [screen.index(words) for words in order] == sorted(screen.index(words) for words in order)
    assert all(len(line) <= 80 for line in screen.splitlines())
    assert any(finding.what == "delay" and finding.verdict == OK for finding in done.findings)


def test_what_is_wrong_is_on_the_screen_with_what_would_do(monkeypatch: pytest.MonkeyPatch) -> None:
    """A swapped pair of encoders and a wrong torque constant, each in plain words."""
    wiring = Wiring.right()
    wiring.encoder, wiring.gain = [1, 0, 2], np.array([1.0, 1.0, 1.5])
    done, screen = guided(monkeypatch, wiring, "it hangs free\n", "turn", "turn", "turn", "go\n")
    words = " ".join(screen.split())
    assert not done.ok
    assert "is the one on back's wheel" in words and "torque constant" in words


def test_where_no_encoder_counts_nothing_is_pushed(monkeypatch: pytest.MonkeyPatch) -> None:
    """Enter without a turn, or all encoders dead: it ends there, and has sent nothing."""
    done, screen = guided(monkeypatch, Wiring.right(), "it hangs free\n", "\n", "\n", "\n")
    assert not done.ok and "nothing was sent" in screen


@pytest.mark.parametrize(
    "answers",
    [
        ("yes\n",),
        ("",),
        ("it hangs free\n", ""),
        ("it hangs free\n", "skip\n", "no\n"),
        ("it hangs free\n", "skip\n", ""),
    ],
)
def test_without_the_words_it_leaves(monkeypatch: pytest.MonkeyPatch, answers: tuple[str, ...]) -> None:
    """Anything but the words asked for, or a closed terminal: one line, and nothing was sent."""
    with pytest.raises(BallbalError, match="has sent nothing"):
        guided(monkeypatch, Wiring.right(), *answers)


def test_a_share_too_large_is_refused_before_anybody_is_asked(monkeypatch: pytest.MonkeyPatch) -> None:
    """Half of the rated torque is no small share."""
    with pytest.raises(BallbalError, match="--share"):
        guided(monkeypatch, Wiring.right(), share=0.5)


def test_a_folder_without_a_robot_is_named(tmp_path: Path) -> None:
    """As everywhere: one line that says which file."""
    with pytest.raises(BallbalError, match="robot.yaml"):
        gantry(tmp_path, 7, "", 0.05, Console(file=io.StringIO()))
