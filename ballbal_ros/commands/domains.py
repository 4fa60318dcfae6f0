"""A ROS domain of one's own: so that no run ever meets another, or a robot."""

from __future__ import annotations

import fcntl
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from ballbal_ros.errors import BallbalError

# Higher domains collide with Linux's ephemeral ports.
DOMAINS = range(1, 102)


@contextmanager
def own_domain(asked: int | None = None) -> Iterator[int]:
    """The domain asked for, or that of ``ROS_DOMAIN_ID``, or one that no other run on this machine has while this one
    lasts.

    Held by a lock on a file. Raises :class:`BallbalError` for a domain that is none, or where none is free.
    """
    text = os.environ.get("ROS_DOMAIN_ID", "") if asked is None else str(asked)
    if text:
        if not (text.isdigit() and int(text) <= 232):
            where = "ROS_DOMAIN_ID" if asked is None else "--domain"
            raise BallbalError(where, f"is {text!r}", "it takes a number from 0 to 232; 1 to 101 are safe")
        yield int(text)
        return
    for step in range(len(DOMAINS)):
        domain = DOMAINS[(os.getpid() + step) % len(DOMAINS)]
        with open(Path(tempfile.gettempdir()) / f"ballbal_ros-domain-{domain}.lock", "a") as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                continue
            yield domain
            return
    raise BallbalError("--domain", "no ROS domain from 1 to 101 is free", "wait for other runs to end, or name one")
