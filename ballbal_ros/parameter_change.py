"""What differs between two sets of values of one parameter class, each told as ``name old → new unit``."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import attrs

from ballbal_ros.declaration import Declaration, declarations, flatten


@attrs.frozen
class Change:
    """One parameter whose value changes."""

    declared: Declaration
    old: Any
    new: Any

    @property
    def name(self) -> str:
        """The parameter's dotted name."""
        return self.declared.name

    def __str__(self) -> str:
        unit = "" if self.declared.unit == "-" else f" {self.declared.unit}"
        return f"{self.name} {value_text(self.old)} → {value_text(self.new)}{unit}"


def value_text(value: Any) -> str:
    """A value as a log line shows it; a number so that it can be read back, None as "nothing"."""
    if value is None:
        return "nothing"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(value_text(item) for item in value)}]"
    if isinstance(value, bool):
        return str(value).lower()
    return repr(value) if isinstance(value, float) else str(value)


def changes(old: Any, new: Any) -> list[Change]:
    """What differs between two objects of one parameter class, in the order of declaration."""
    return flat_changes(type(new), flatten(old), flatten(new))


def flat_changes(cls: type, old: Mapping[str, Any], new: Mapping[str, Any]) -> list[Change]:
    """The same for flat mappings with all their values; what only one of them has counts as None in the other."""
    declared = {d.name: d for values in (old, new) for d in declarations(cls, flat=values)}
    return [Change(d, old.get(n), new.get(n)) for n, d in declared.items() if old.get(n) != new.get(n)]
