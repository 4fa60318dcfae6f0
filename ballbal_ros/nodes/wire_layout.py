"""How a stamped message lies in its bytes (little-endian CDR, as in OMG DDSI-RTPS): header, stamp, padding."""

from __future__ import annotations

LITTLE_ENDIAN = b"\x00\x01"
START, STAMP_END = 4, 12
BILLION = 1_000_000_000


def aligned(at: int, to: int) -> int:
    """The first byte from ``at`` on where something of ``to`` bytes may begin; CDR counts from behind its header."""
    return at + (START - at) % to
