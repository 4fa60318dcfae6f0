"""Hostile files: the real ones with bytes, lines or values gone wrong. Seeded."""

from __future__ import annotations

import random
import re

VALUES = [
    *(".nan", ".inf", "-.inf", "1e999", "-1.0", "0.0", "1.0e9", "5e-324", "99999999999999999999", "1", "true", "null"),
    *(
        "''",
        "text",
        "[]",
        "[1.0]",
        "{}",
        "{a: 1.0}",
        "!!python/object/apply:os.system [echo]",
        "*a",
        "&a 1.0",
        "2026-12-01",
    ),
    *("[" * 3000, "{a: " * 400, "0x10", "1_000.0", "|", "'", '"', "\x00", "é", "~", "- 1", "? x", "%", "@", "<<: *b"),
]
TAGS = ["<robot", "<link", "<joint", "<inertial", "<mass", "<origin", "<limit", "<axis", "</link>", "</robot>", "/>"]


def spoilt_bytes(rng: random.Random, data: bytes) -> bytes:
    """Cut, flipped, doubled, or not text at all."""
    way = rng.randrange(6)
    if way == 0:
        return data[: rng.randrange(len(data) + 1)]
    if way == 1:
        return rng.choice((b"", b"\xff\xfe\x00", rng.randbytes(300), b"\x00" * 40, b"\n\t\t- :", data[::-1]))
    made = bytearray(data)
    for _ in range(rng.choice((1, 2, 10))):
        at = rng.randrange(len(made))
        if way < 4:
            made[at] = rng.randrange(256)
        elif way == 4:
            del made[at : at + rng.randrange(1, 60)]
        else:
            made[at:at] = made[at : at + rng.randrange(1, 200)]
    return bytes(made)


def spoilt_yaml(rng: random.Random, text: str) -> str:
    """A value, a line or an indentation gone wrong."""
    lines = text.splitlines()
    for _ in range(rng.choice((1, 1, 2, 4))):
        at = rng.randrange(len(lines))
        way = rng.randrange(7)
        if way < 3 and ":" in lines[at]:
            lines[at] = f"{lines[at].partition(':')[0]}: {rng.choice(VALUES)}"
        elif way == 3:
            lines[at] = " " * rng.randrange(9) + lines[at].lstrip()
        elif way == 4:
            lines.insert(at, rng.choice(lines))
        elif way == 5:
            del lines[at]
            lines = lines or [""]
        else:
            lines[at] = re.sub(r"-?\d[\d.e-]*", lambda _: rng.choice(VALUES), lines[at], count=1)
    return "\n".join(lines)


def spoilt_xml(rng: random.Random, text: str) -> str:
    """An attribute or a tag gone wrong."""
    for _ in range(rng.choice((1, 1, 2, 4))):
        way = rng.randrange(4)
        if way < 2:
            found = list(re.finditer(r'"[^"]*"', text))
            value = rng.choice([*VALUES[:12], "", "1 2", "nan nan nan", "base_link", "left_hand", "1e308", "x y z"])
        else:
            found = list(re.finditer("|".join(map(re.escape, TAGS)), text))
            value = rng.choice([*TAGS, "", "<!--", "&lol;", "<![CDATA["]).join(("", ""))
        if not found:
            return text
        at = rng.choice(found)
        text = text[: at.start()] + (f'"{value}"' if way < 2 else value) + text[at.end() :]
    return text
