"""The nodes as processes: started together, watched, and ended together whatever happens."""

from __future__ import annotations

import contextlib
import ctypes
import os
import signal
import subprocess
import tempfile
import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import IO

import attrs

_PARENT_DEATH = 1  # PR_SET_PDEATHSIG
_GRACE = 4.0
_WRONG = 2
_MOST_RESTARTS = 3
_TOLD_TO_END = threading.Event()
_LIBC = ctypes.CDLL(None, use_errno=True)


class RunFailed(Exception):
    """A run could not be brought to its end; the one line says who failed and what its last words were."""


@attrs.define(eq=False)
class _Child:
    name: str
    process: subprocess.Popen[bytes]
    words: IO[bytes]
    start: Callable[[], subprocess.Popen[bytes]]
    respawn: bool

    def last_words(self) -> str:
        """The last line that it wrote to standard error, without colours."""
        self.words.seek(0)
        lines = [line.strip() for line in self.words.read().decode(errors="replace").splitlines() if line.strip()]
        return lines[-1] if lines else "it said nothing"


def _die_with_parent() -> None:
    """Have the kernel end this child cleanly, should the runner be killed."""
    _LIBC.prctl(_PARENT_DEATH, signal.SIGINT, 0, 0, 0)


def _stand_back() -> None:
    """As :func:`_die_with_parent`, for a process that must not push others off their core when it wakes up."""
    _die_with_parent()
    os.sched_setscheduler(0, os.SCHED_BATCH, os.sched_param(0))


class Processes:
    """A group of processes. As a context it ends them all: SIGINT, after a while SIGTERM, SIGKILL only as a last
    resort.
    """

    def __init__(self) -> None:
        self._children: list[_Child] = []
        self.restarts: list[tuple[str, str]] = []

    def __enter__(self) -> Processes:
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()

    def start(
        self,
        name: str,
        words: Sequence[str],
        environment: Mapping[str, str],
        hurried: bool = True,
        respawn: bool = False,
    ) -> None:
        """Start a process in a session of its own, so that a Ctrl-C at the terminal comes to the runner alone.

        One that is not ``hurried`` gives way to those that are. With ``respawn`` it is started anew when it ends, up to
        three times, unless what it was given is wrong (exit status 2); ``restarts`` says of which, and how each ended.
        """
        log = tempfile.TemporaryFile()  # noqa: SIM115 - open as long as the child lives

        def begin() -> subprocess.Popen[bytes]:
            """Start the process, the first time or anew."""
            return subprocess.Popen(
                words,
                env=dict(environment),
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=log,
                start_new_session=True,
                preexec_fn=_die_with_parent if hurried else _stand_back,
            )

        self._children.append(_Child(name, begin(), log, begin, respawn))

    def check(self) -> None:
        """Raise :class:`RunFailed` if any process has ended with an error, or has ended at all but may not have; those
        that may be are started anew.

        Raises KeyboardInterrupt where somebody wants the run to end.
        """
        if _TOLD_TO_END.is_set():
            raise KeyboardInterrupt
        for child in self._children:
            status = child.process.poll()
            if status is not None and (status != 0 or child.name != self.may_end):
                how = f"signal {-status}" if status < 0 else f"status {status}"
                if child.respawn and status != _WRONG and len(self.restarts) < _MOST_RESTARTS:
                    self.restarts.append((child.name, how))
                    child.process = child.start()
                    continue
                raise RunFailed(f"{child.name} ended with {how}: {child.last_words()}")

    may_end = ""
    """The one process whose end with status 0 is the run's end."""

    def ended(self, name: str) -> bool:
        """Whether a process has ended."""
        return any(c.name == name and c.process.poll() is not None for c in self._children)

    def stop(self) -> None:
        """End all that still run, and wait until they have gone."""
        with _undisturbed():
            for ending in (signal.SIGINT, signal.SIGTERM, signal.SIGKILL):
                running = [c.process for c in self._children if c.process.poll() is None]
                for process in running:
                    with contextlib.suppress(ProcessLookupError):
                        process.send_signal(ending)
                until = time.monotonic() + _GRACE
                while any(p.poll() is None for p in running) and time.monotonic() < until:
                    time.sleep(0.02)
            for child in self._children:
                child.words.close()
            self._children.clear()


@contextlib.contextmanager
def _undisturbed() -> Iterator[None]:
    """A second Ctrl-C must not leave processes behind."""
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


@contextlib.contextmanager
def interruptible() -> Iterator[None]:
    """Ctrl-C, being told to end (SIGTERM) and a closed terminal all end a run at its next look at the processes.

    An exception out of a signal handler could come anywhere, even where it is lost.
    """
    told = _TOLD_TO_END
    told.clear()
    signals = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
    before = {number: signal.signal(number, lambda *_: told.set()) for number in signals}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def environment(domain: int) -> dict[str, str]:
    """This process's environment for nodes of a ROS domain, which talk on this machine only unless told otherwise."""
    return {
        "ROS_AUTOMATIC_DISCOVERY_RANGE": "LOCALHOST",
        **os.environ,
        "ROS_DOMAIN_ID": str(domain),
        "OPENBLAS_NUM_THREADS": "1",
    }
