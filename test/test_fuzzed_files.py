"""Whatever stands in a file: it is taken whole, or refused in one line that names it; never a traceback."""

from __future__ import annotations

import gc
import random
import shutil
import traceback
from collections import Counter
from pathlib import Path

import pytest

from ballbal_ros.commands.files import read_robot
from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.story import read_story
from helpers.fuzz_files import spoilt_bytes, spoilt_xml, spoilt_yaml
from helpers.resident import resident
from helpers.robots import CONFIG, shelver

FILES = ("robot.yaml", "balance.yaml", "compensation.yaml", "simulation.yaml", "shelver.urdf")
PLANS = tuple(sorted(path.name for path in (CONFIG / "plans").glob("*.yaml")))
GROWS = 10.0


def spoilt(rng: random.Random, original: bytes, name: str) -> bytes:
    if rng.random() < 0.3:
        return spoilt_bytes(rng, original)
    change = spoilt_xml if name.endswith("urdf") else spoilt_yaml
    return change(rng, original.decode()).encode("utf-8", errors="replace")


def tried(folder: Path, rng: random.Random, found: Counter[str]) -> str:
    """Spoil one file, read it as the commands do, and put it right again; what came of it."""
    name = rng.choice((*FILES, *PLANS))
    path = folder / name
    original = path.read_bytes()
    path.write_bytes(spoilt(rng, original, name))
    try:
        if name in PLANS:
            read_story(path, shelver())
        else:
            read_robot(folder)
    except BallbalError as error:
        line = str(error)
        if "\n" in line or len(line) > 1000 or folder.name not in line:
            found[f"{name}: {line[:300]!r}"] += 1
        return "refused"
    except Exception:
        lines = traceback.format_exc().splitlines()
        found[f"{name}: {lines[-1]} at {lines[-3].strip()} {lines[-2].strip()}"] += 1
        return "raised"
    finally:
        path.write_bytes(original)
    return "taken"


def campaign(home: Path, count: int, seed: int) -> Counter[str]:
    """So many spoilt files; how many were taken and how many refused."""
    folder = home / "shelver"
    shutil.copytree(CONFIG / "shelver", folder)
    for plan in PLANS:
        shutil.copy(CONFIG / "plans" / plan, folder)
    rng, found, outcomes = random.Random(seed), Counter[str](), Counter[str]()
    before = 0.0
    for number in range(count):
        outcomes[tried(folder, rng, found)] += 1
        if number == count // 5:
            gc.collect()
            before = resident()
    gc.collect()
    grown = resident() - before
    print(f"{count} files: {dict(outcomes)}, memory grew by {grown:.1f} MB")
    assert not found, "\n".join(f"{n} × {what}" for what, n in found.most_common())
    assert grown <= GROWS
    return outcomes


def test_spoilt_files_are_taken_whole_or_refused_in_one_line(tmp_path: Path):
    """150 parameter files, plans and URDFs gone wrong in bytes, lines or values."""
    outcomes = campaign(tmp_path, 150, 1)
    assert outcomes["refused"] > 75 and outcomes["taken"] > 5


@pytest.mark.prove
def test_ten_thousand_spoilt_files(tmp_path: Path):
    """10⁴ of them."""
    campaign(tmp_path, 10_000, 2)
