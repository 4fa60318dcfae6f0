"""Hostile messages: valid ones with some values gone wrong, and serialised ones with bytes gone wrong. Seeded."""

from __future__ import annotations

import copy
import random
from array import array
from typing import Any

import numpy as np
from rclpy.serialization import deserialize_message, serialize_message

FLOATS = [
    *(float("nan"), float("inf"), float("-inf"), 1e308, -1e308, 5e-324, -0.0, 0.0, 1.0, -1.0, 1e-9, 1e9, -1e9, 3.2e-4),
    *(0.1, -0.4, 9.81, 2.5, 60.0),
]
INTEGERS = [0, 1, -1, 2, 5, 2**15, 2**31 - 1, -(2**31), 2**32 - 1, 999_999_999, 1_000_000_000, 10**12]
TEXTS = [
    "",
    " ",
    "x",
    "left_hand",
    "base_link",
    "odom",
    "left_shoulder_pitch",
    "ü" * 9,
    "²",
    "a" * 4000,
    "%s{}",
    "-1",
    "9" * 5000 + ".0",
]

LENGTHS = [b"\xff\xff\xff\xff", b"\0\0\0\0", b"\xff\xff\xff\x7f", b"\x10\0\0\0", b"\0\1\0\0"]


def hostile(rng: random.Random, like: Any, names: list[str]) -> Any:
    """A value of the same type as ``like`` that is probably wrong."""
    if isinstance(like, bool):
        return not like
    if isinstance(like, float):
        return rng.choice([*FLOATS, rng.gauss(0.0, 1.0), like * (1.0 + 1e-9), -like])
    if isinstance(like, int):
        return rng.choice([*INTEGERS, like + 1, like - 1, rng.randrange(2**31)])
    if isinstance(like, str):
        return rng.choice([*TEXTS, *names, like + "x"])
    if isinstance(like, bytes):
        return bytes([rng.randrange(256)])
    return like


def spoilt(rng: random.Random, message: Any, names: list[str]) -> Any:
    """A copy of a message in which a few values, lengths or names have gone wrong, as the bus can carry it."""
    while True:
        made = copy.deepcopy(message)
        for _ in range(rng.choice((1, 1, 1, 2, 3, 6))):
            _spoil_one(rng, made, names)
        try:
            return deserialize_message(serialize_message(made), type(message))
        except Exception:
            # A field can't hold the value: nobody could have sent it.
            continue


def _spoil_one(rng: random.Random, message: Any, names: list[str]) -> None:
    fields = list(message.get_fields_and_field_types())
    if not fields:
        return
    name = rng.choice(fields)
    value = getattr(message, name)
    if hasattr(value, "get_fields_and_field_types"):
        _spoil_one(rng, value, names)
        return
    try:
        setattr(message, name, _spoilt_value(rng, value, names))
    except (AssertionError, TypeError, ValueError, OverflowError):
        return


def _spoilt_value(rng: random.Random, value: Any, names: list[str]) -> Any:
    if isinstance(value, (list, array, np.ndarray)):
        return _spoilt_list(rng, value, names)
    return hostile(rng, value, names)


def _spoilt_list(rng: random.Random, value: Any, names: list[str]) -> Any:
    items = list(value)
    way = rng.randrange(6)
    if items and way < 3:
        at = rng.randrange(len(items))
        if hasattr(items[at], "get_fields_and_field_types"):
            _spoil_one(rng, items[at], names)
        else:
            items[at] = hostile(rng, float(items[at]) if isinstance(items[at], np.floating) else items[at], names)
    elif way == 3:
        items = items[: rng.randrange(len(items) + 1)]
    elif items:
        items += [copy.deepcopy(rng.choice(items)) for _ in range(rng.choice((1, 1, 2, 50)))]
    if isinstance(value, np.ndarray):
        return np.array(items, value.dtype) if len(items) == len(value) else value
    return array(value.typecode, items) if isinstance(value, array) else items


def spoilt_bytes(rng: random.Random, raw: bytes) -> bytes:
    """Serialised bytes cut short, prolonged, flipped, with lengths that can't be, or of another kind altogether."""
    data = bytearray(raw)
    way = rng.randrange(7)
    if way == 0:
        return bytes(data[: rng.randrange(len(data) + 1)])
    if way == 1:
        return bytes(data) + rng.randbytes(rng.randrange(40))
    if way == 2:
        return rng.randbytes(rng.randrange(200))
    if way == 3 and len(data) > 8:
        at = 4 * rng.randrange(1, len(data) // 4)
        data[at : at + 4] = rng.choice(LENGTHS)
    elif way == 4:
        data[:4] = rng.choice((b"\0\0\0\0", b"\0\3\0\0", b"\xff\xff\xff\xff", b"\0\1\0\3"))
    else:
        for _ in range(rng.choice((1, 2, 8))):
            data[rng.randrange(len(data))] = rng.randrange(256)
    return bytes(data)
