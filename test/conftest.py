"""Set-up that all tests share: one thread per BLAS, ROS on this machine only, a ROS domain of its own for each test."""

import os

# Before NumPy loads its BLAS, and before any process starts that inherits it.
os.environ["OPENBLAS_NUM_THREADS"] = "1"
os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] = "LOCALHOST"

import fcntl
import itertools
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

TEST = Path(__file__).resolve().parent
# Higher domains collide with Linux's ephemeral ports.
DOMAINS = range(1, 102)
_turn = itertools.count()


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Mark by folder: what lies in test/ros is `ros`, what lies in test/benchmark is `bench`."""
    for item in items:
        folders = item.path.relative_to(TEST).parts[:-1] if item.path.is_relative_to(TEST) else ()
        for folder, mark in (("ros", pytest.mark.ros), ("benchmark", pytest.mark.bench)):
            if folder in folders:
                item.add_marker(mark)


@pytest.fixture(scope="session", autouse=True)
def state_home(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    """What nodes keep between runs goes to a folder of the tests, not to the user's."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_STATE_HOME", str(tmp_path_factory.mktemp("state")))
        yield


@pytest.fixture
def ros_domain_id(monkeypatch: pytest.MonkeyPatch) -> Iterator[int]:
    """A ROS domain that no other test on this machine has while this one runs; ROS_DOMAIN_ID is set to it.

    Held by a lock on a file, so that it holds between processes too. Each test begins its search one further, so that a
    process of the last test that is slow to leave is not met again.
    """
    first = os.getpid() + next(_turn)
    for step in range(len(DOMAINS)):
        domain = DOMAINS[(first + step) % len(DOMAINS)]
        with open(Path(tempfile.gettempdir()) / f"ballbal_ros-domain-{domain}.lock", "a") as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                continue
            monkeypatch.setenv("ROS_DOMAIN_ID", str(domain))
            yield domain
            return
    pytest.fail("no ROS domain is free: other tests hold all of 1 to 101")


@pytest.fixture(scope="session")
def root() -> Path:
    """The repository's root."""
    return TEST.parent
