"""What is wrong in a parameter file is said in one line that names file, key, what was found and what would do."""

import math
import random
from pathlib import Path

import attrs
import pytest

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import (
    build,
    check_value,
    declarations,
    flatten,
    load,
    parameter,
    read_parameter_file,
    section,
    sections,
)
from ballbal_ros.errors import ParameterError
from ballbal_ros.robot.parameters import RobotParameters
from helpers.robots import CONFIG


@attrs.frozen(kw_only=True)
class Lamp:
    power: float = parameter("double", unit="W", low=0.5, high=60.0, meaning="power")
    colour: str = parameter("string", "warm", unit="-", choices=("warm", "cold"), meaning="colour")


@attrs.frozen(kw_only=True)
class Room:
    lamps: list[str] = parameter("string_array", unit="-", meaning="names of the lamps")
    lamp: dict[str, Lamp] = sections(Lamp, named_by="lamps")


@attrs.frozen(kw_only=True)
class House:
    floors: int = parameter("integer", 2, unit="-", low=1, high=9, meaning="floors", runtime=True)
    heated: bool = parameter("bool", True, unit="-", meaning="whether it is heated")
    corner: list[float] = parameter("double_array", [0.0, 0.0], unit="m", length=2, meaning="a corner")
    room: Room = section(Room)


GOOD = {"room.lamps": ["desk", "bed"], "room.desk.power": 5.0, "room.bed.power": 7.5}


def refusal(flat: dict[str, object]) -> str:
    """What building from `flat` is refused with; always one line, always the file first."""
    with pytest.raises(ParameterError) as caught:
        build(House, flat, "house.yaml")
    line = str(caught.value)
    assert "\n" not in line
    assert line.startswith("house.yaml: ")
    return line


def test_a_flat_mapping_becomes_the_object_and_comes_back():
    """Building from a flat mapping and flattening again gives the mapping with its defaults filled in."""
    house = build(House, GOOD, "house.yaml")
    assert house.room.lamp["bed"].power == 7.5
    flat = flatten(house)
    assert flat.items() >= GOOD.items()
    assert build(House, flat, "house.yaml") == house


def test_defaults_are_not_shared():
    """A list that is a default belongs to one object alone."""
    first, second = build(House, GOOD, "a"), build(House, GOOD, "b")
    first.corner.append(9.0)
    assert second.corner == [0.0, 0.0]


@pytest.mark.parametrize(
    ("key", "value", "words"),
    [
        ("flors", 3, ("unknown parameter flors", "did you mean floors?")),
        ("floors", 3.0, ("floors is 3.0", "whole number")),
        ("floors", True, ("floors is True", "whole number")),
        ("floors", 12, ("floors is 12", "1 … 9")),
        ("heated", "yes", ("heated is 'yes'", "true or false")),
        ("room.desk.power", 5, ("room.desk.power is the integer 5", "5.0")),
        ("room.desk.power", float("nan"), ("room.desk.power is nan", "finite")),
        ("room.desk.power", float("inf"), ("room.desk.power is inf", "finite")),
        ("room.desk.power", 61.0, ("room.desk.power is 61 W", "0.5 … 60 W")),
        ("room.desk.power", "much", ("room.desk.power is 'much'", "a number in W")),
        ("room.desk.colour", "wram", ("room.desk.colour is 'wram'", "warm, cold")),
        ("corner", [0.0, 1.0, 2.0], ("corner has 3", "takes 2")),
        ("corner", [0.0, 1], ("corner is the integer 1", "1.0")),
        ("corner", "ab", ("corner is 'ab'", "list of doubles")),
        ("room.lamps", 5, ("room.lamps is 5", "list of strings")),
        ("room.lamps", ["desk", "desk"], ("room.lamps", "once")),
        ("room.lamps", ["desk", "bde"], ("unknown parameter room.bed.power", "did you mean room.bde.power?")),
    ],
)
def test_what_is_wrong_is_named_with_what_would_do(key: str, value: object, words: tuple[str, ...]):
    """Each wrong key or value is refused with its name, what was found and what it takes."""
    line = refusal({**GOOD, key: value})
    for word in words:
        assert word in line


def test_what_is_missing_is_named_with_its_meaning():
    """A parameter without an honest default must be given, and the refusal says what it means."""
    line = refusal({key: value for key, value in GOOD.items() if key != "room.bed.power"})
    assert "room.bed.power is missing" in line
    assert "(power)" in line


def test_nothing_of_a_wrong_mapping_is_kept():
    """A refused mapping leaves the mapping itself as it was: nothing is half-applied."""
    flat = {**GOOD, "floors": 99}
    refusal(flat)
    assert flat == {**GOOD, "floors": 99}


def test_every_declaration_says_unit_and_meaning():
    """Each robot parameter has a unit and a meaning, groups are spelled as <name>, defaults pass their check."""
    names = [d.name for d in declarations(RobotParameters)]
    assert len(names) == len(set(names))
    assert "drive.<name>.point" in names
    for declared in declarations(RobotParameters):
        assert declared.unit
        assert declared.meaning
        if not declared.required:
            check_value(declared, declared.default, "default")


def write(folder: Path, text: str) -> Path:
    path = folder / "robot.yaml"
    path.write_text(text)
    return path


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("/**:\n  ros__parameters:\n    a: 1\n    a: 2\n", ("line 4", "a stands twice")),
        ("/**:\n  ros__parameters:\n    a: [1\n", ("line",)),
        ("robot:\n  ros__parameters: {}\n", ("robot", "/**:")),
        ("/**:\n  parameters: {}\n", ("no ros__parameters",)),
        ("just text\n", ("no mapping",)),
        ("", ("no mapping",)),
        ("/**:\n  ros__parameters: 7\n", ("ros__parameters is 7",)),
        ("/**:\n  ros__parameters:\n    a.b: 1\n    a: {b: 2}\n", ("a.b stands twice",)),
        ("/**:\n  ros__parameters:\n    1: 2\n", ("1 is no name",)),
    ],
)
def test_a_file_that_is_no_parameter_file_is_refused_in_one_line(tmp_path: Path, text: str, words: tuple[str, ...]):
    """YAML that is broken, repeats a key or has other sections is refused, and the line names the file."""
    path = write(tmp_path, text)
    with pytest.raises(ParameterError) as caught:
        read_parameter_file(path)
    line = str(caught.value)
    assert "\n" not in line
    for word in (str(path), *words):
        assert word in line


def test_a_file_that_is_not_there_is_refused_in_one_line(tmp_path: Path):
    """A missing file, a folder and a file that is not text are each refused with the reason."""
    (tmp_path / "bytes.yaml").write_bytes(b"\xff\xfe\x00\x81")
    for path in (tmp_path / "none.yaml", tmp_path, tmp_path / "bytes.yaml"):
        with pytest.raises(ParameterError, match="can't be read") as caught:
            read_parameter_file(path)
        assert "\n" not in str(caught.value)


def test_an_exponent_without_a_point_is_a_number(tmp_path: Path):
    """1e-3 is read as a number, as ROS reads it, and not as text."""
    flat = read_parameter_file(write(tmp_path, "/**:\n  ros__parameters:\n    a: {b: 1e-3, c: -2E3}\n"))
    assert flat == {"a.b": 1e-3, "a.c": -2000.0}


def test_the_demo_robot_survives_a_round_trip():
    """The demo robot's file gives the same parameters again after flattening and building."""
    parameters = load(RobotParameters, CONFIG / "shelver" / "robot.yaml")
    assert build(RobotParameters, flatten(parameters), "again") == parameters


BOMB = """/**:
  ros__parameters:
    a: &a {x: 1.0, y: 1.0, z: 1.0}
    b: &b {x: *a, y: *a, z: *a}
    c: {x: *b, y: *b, z: *b}
"""


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (BOMB, ("line 4", "alias")),
        ("/**:\n  ros__parameters:\n    a: !!python/object/apply:os.getcwd []\n", ("line 3", "constructor")),
        ("/**:\n  ros__parameters:\n    a: !!python/name:os.system\n", ("line 3",)),
        ("/**:\n  ros__parameters:\n    a: 2020-13-45\n", ("month",)),
        (f"/**:\n  ros__parameters:\n    a: {'[' * 3000}\n", ()),
        (f"# {'x' * (1 << 20)}\n", ("larger than 1 MiB",)),
    ],
)
def test_a_file_can_do_nothing_but_be_read(tmp_path: Path, text: str, words: tuple[str, ...]):
    """Files that would run code, or grow beyond memory or stack, are refused in one line and do nothing else."""
    with pytest.raises(ParameterError) as caught:
        read_parameter_file(write(tmp_path, text))
    line = str(caught.value)
    assert "\n" not in line
    for word in words:
        assert word in line


def spoilt(text: str, rng: random.Random) -> str:
    """A file's text with some of what goes wrong in an editor, on a disk, or in somebody's mind."""
    for _ in range(rng.randint(1, 4)):
        lines = text.splitlines(keepends=True) or [""]
        at, where = rng.randrange(len(lines)), rng.randrange(len(text) + 1)
        kind = rng.randrange(7)
        if kind == 0:
            text = text[:where] + rng.choice(SIGNS) + text[where:]
        elif kind == 1:
            text = text[:where] + text[where + rng.randint(1, 30) :]
        elif kind == 2:
            text = "".join(lines[:at] + lines[at + 1 :])
        elif kind == 3:
            text = "".join([*lines[:at], lines[at], lines[at], *lines[at + 1 :]])
        elif kind == 4:
            lines[at] = f"{lines[at].partition(':')[0]}: {rng.choice(VALUES)}\n"
            text = "".join(lines)
        elif kind == 5:
            text = text[:where]
        else:
            lines[at] = " " * rng.randrange(9) + lines[at].lstrip()
            text = "".join(lines)
    return text


SIGNS = [
    "{",
    "}",
    "[",
    "]",
    ":",
    "- ",
    "&a ",
    "*a",
    "!!set",
    "%",
    "\t",
    "\x00",
    "\ud7ff",
    "\u202e",
    "'",
    '"',
    "|",
    "> ",
    "#",
    "? ",
]
VALUES = [
    ".nan",
    ".inf",
    "-1e999",
    "1e400",
    "0x" + "f" * 300,
    "9" * 5000,
    "1:30",
    "2020-02-30",
    "~",
    "yes",
    "[]",
    "{}",
    "[[1.0]]",
    "''",
]


@pytest.mark.parametrize("count", [300, pytest.param(10_000, marks=pytest.mark.prove)])
def test_whatever_becomes_of_a_file_it_is_read_or_refused_in_one_line(tmp_path: Path, count: int):
    """Spoilt copies of the files give finite, checked values, or one line that names the file; never a traceback."""
    rng = random.Random(6)
    classes = {"robot.yaml": RobotParameters, "balance.yaml": BalanceParameters}
    texts = {name: (CONFIG / "shelver" / name).read_text(encoding="utf-8") for name in classes}
    read = 0
    for _ in range(count):
        name = rng.choice(list(classes))
        path = tmp_path / name
        path.write_text(spoilt(texts[name], rng), encoding="utf-8", errors="surrogatepass")
        try:
            parameters = load(classes[name], path)
        except ParameterError as error:
            line = str(error)
            assert "\n" not in line and str(path) in line and len(line) < 2000
        else:
            read += 1
            for value in flatten(parameters).values():
                assert not isinstance(value, float) or math.isfinite(value)
    assert 0 < read < count
