"""Loads and pushes of a simulated run come and go at their time."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.happenings import Happenings
from helpers.robots import shelver


class _Listener:
    """Stands in for a simulated robot, and writes down what is done to it."""

    description = shelver()

    def __init__(self, rotation: np.ndarray) -> None:
        self.done: list[Any] = []
        self._rotation = rotation

    @property
    def data(self) -> Any:
        listener = self

        class Data:
            def body(self, name: str) -> Any:
                return type("Body", (), {"xmat": listener._rotation.ravel()})

        return Data()

    def set_load(self, load: Load) -> None:
        self.done.append(("load", load.mass))

    def push(self, link: str, at: tuple[float, ...], force: tuple[float, ...]) -> None:
        self.done.append(("push", link, tuple(at), tuple(force)))

    def release_push(self) -> None:
        self.done.append("release")


def test_each_happens_at_its_time_and_once() -> None:
    """In order of time, whatever the order in which they were added; a push is released after its duration."""
    robot = _Listener(np.eye(3))
    happenings = Happenings(robot)  # type: ignore[arg-type]
    happenings.add_load(Load("left_hand", 2.0), 0.4)
    happenings.add_load(Load("left_hand", 1.0), 0.2)
    happenings.add_push(0.3, 0.1, "base_link", (0, 0, 1), (5, 0, 0))
    seen = {}
    for tick in range(12):
        robot.done.clear()
        happenings.come_to(0.05 * tick)
        if robot.done:
            seen[tick] = list(robot.done)
    assert seen == {
        4: [("load", 1.0)],
        6: [("push", "base_link", (0, 0, 1), (5, 0, 0))],
        8: [("load", 2.0), "release"],
    }


def test_a_wrench_pushes_along_its_line_of_action() -> None:
    """A force with the torque that it makes about a link's origin acts at a point on the same line, in the link's
    axes.
    """
    turned = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    robot = _Listener(turned)
    at, force = np.array([0.2, 0.0, 1.1]), np.array([0.0, 30.0, 0.0])
    happenings = Happenings(robot)  # type: ignore[arg-type]
    happenings.add_wrench(0.0, 0.1, "base_link", force, np.cross(at, force))
    happenings.come_to(0.0)
    _, _, point, pushed = robot.done[0]
    assert np.cross(turned @ np.array(point), pushed) == pytest.approx(np.cross(at, force))


@pytest.mark.parametrize(
    ("link", "force", "torque", "words"),
    [
        ("no_link", (1.0, 0.0, 0.0), (0.0, 0.0, 0.0), "unknown link"),
        ("base_link", (float("nan"), 0.0, 0.0), (0.0, 0.0, 0.0), "finite"),
        ("base_link", (1.0, 0.0, 0.0), (1.0, 0.0, 0.0), "right angles"),
    ],
)
def test_a_push_that_cannot_be_is_refused(link: str, force: Any, torque: Any, words: str) -> None:
    """An unknown link, a number that is none, a torque that no push makes: one line."""
    with pytest.raises(BallbalError, match=words):
        Happenings(_Listener(np.eye(3))).add_wrench(0.0, 0.1, link, force, torque)  # type: ignore[arg-type]
