"""How much memory a process has."""

from __future__ import annotations

from pathlib import Path


def resident(pid: int | str = "self") -> float:
    """Resident memory, MB."""
    lines = Path(f"/proc/{pid}/status").read_text(encoding="ascii").splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith("VmRSS")) / 1024.0
