"""Gains designed in a process beside the loop's are those designed in it, and its end is no end of the loop."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator

import attrs
import numpy as np
import pytest

from ballbal_ros.balance.changeover import prepare
from ballbal_ros.balance.schedule import PostureRange
from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.designer import Designer
from helpers.balancing import balance
from helpers.robots import reach, shelver

WHERE = "somewhere/balance.yaml"


@pytest.fixture
def designer() -> Iterator[Designer]:
    made = Designer(shelver(), WHERE)
    yield made
    made.leave()


def test_another_process_designs_the_same_gains(designer: Designer):
    """What comes back gives the very matrices that a design in this process gives; limits alone need none."""
    posture = reach().body().posture(reach().first)
    reached = PostureRange.of(shelver(), posture)
    new = attrs.evolve(balance(), weights=attrs.evolve(balance().weights, lean=0.02))
    beside, here = (
        designer.prepare(reached, balance(), new, posture),
        prepare(reached, shelver(), balance(), new, posture),
    )
    assert beside.parameters == new and beside.schedule is not None and here.schedule is not None
    for name in ("correct", "output", "act", "predict"):
        ours, theirs = (getattr(p.schedule.at(posture), name) for p in (here, beside) if p.schedule is not None)
        assert np.allclose(ours, theirs, rtol=1e-9, atol=1e-12)
    limits = attrs.evolve(balance(), limits=attrs.evolve(balance().limits, torque=20.0))
    assert designer.prepare(reached, balance(), limits, posture).schedule is None


def test_a_refusal_comes_back_as_it_was_said(designer: Designer):
    """The line names the file as this process does, the value, and what would do."""
    posture = reach().body().posture(reach().first)
    new = attrs.evolve(balance(), estimator=attrs.evolve(balance().estimator, rate_noise=5.0))
    with pytest.raises(
        BallbalError, match=rf"^{WHERE}: with estimator.rate_noise 0.0024 → 5.0 rad/s the weights leave"
    ):
        designer.prepare(PostureRange.of(shelver(), posture), balance(), new, posture)


def test_one_that_has_been_killed_is_started_anew(designer: Designer):
    """A change fails in one line when the process dies, and the next one works."""
    posture = reach().body().posture(reach().first)
    reached = PostureRange.of(shelver(), posture)
    designer.start()
    child = designer._child
    assert child is not None
    os.kill(child.pid, signal.SIGSTOP)
    designer._send({"reach": {}})
    os.kill(child.pid, signal.SIGKILL)
    child.wait()
    new = attrs.evolve(balance(), weights=attrs.evolve(balance().weights, lean=0.02))
    assert designer.prepare(reached, balance(), new, posture).schedule is not None


def test_it_ends_with_its_input_whatever_ended_that(designer: Designer):
    """A killed node leaves no process behind: the child goes when its standard input ends."""
    designer.start()
    child = designer._child
    assert child is not None and child.stdin is not None
    child.stdin.close()
    until = time.monotonic() + 10.0
    while child.poll() is None and time.monotonic() < until:
        time.sleep(0.02)
    assert child.poll() == 0


def test_what_is_no_answer_is_refused_and_the_next_request_works(designer: Designer):
    """A library that prints into the answers spoils one change, said in one line, and not those after it."""
    posture = reach().body().posture(reach().first)
    reached = PostureRange.of(shelver(), posture)
    new = attrs.evolve(balance(), weights=attrs.evolve(balance().weights, lean=0.02))
    babble = "import sys; print('a warning', flush=True); sys.stdin.read()"
    designer._child = subprocess.Popen([sys.executable, "-c", babble], stdin=subprocess.PIPE, stdout=subprocess.PIPE)
    with pytest.raises(BallbalError, match="says what is no answer; set it again"):
        designer.prepare(reached, balance(), new, posture)
    assert designer.prepare(reached, balance(), new, posture).schedule is not None
