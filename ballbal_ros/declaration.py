"""One declaration for each parameter: default, unit, range, meaning, changeable while running or not.

Parameters are attrs classes whose fields are made by :func:`parameter`, :func:`section` and :func:`sections`. From the
same declaration come the check of a file, the ROS descriptor and the page that lists them. A parameter file
is flat in ROS ("ball.radius"); :func:`build` turns such a flat mapping into a read-only object, or raises one
:class:`~ballbal_ros.errors.ParameterError` that names the file, the key, what was found and what would do.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar, cast

import attrs

from ballbal_ros.errors import ParameterError, nearest, shown
from ballbal_ros.yaml_files import read_yaml

T = TypeVar("T")
KINDS = ("double", "integer", "bool", "string", "double_array", "string_array")


@attrs.frozen
class Declaration:
    """What is known of one parameter. ``name`` is dotted; ``<name>`` in it stands for each member of a group."""

    name: str
    kind: str
    default: Any
    unit: str
    meaning: str
    low: float | None = None
    high: float | None = None
    length: int | None = None
    choices: tuple[str, ...] = ()
    runtime: bool = False

    @property
    def required(self) -> bool:
        """Whether a file must give it, because no default would be honest."""
        return self.default is attrs.NOTHING

    @property
    def range_text(self) -> str:
        """The range in words, as the page and the errors show it."""
        if self.choices:
            return " | ".join(self.choices)
        low = "" if self.low is None else f"{self.low:g}"
        high = "" if self.high is None else f"{self.high:g}"
        return f"{low} … {high}" if low or high else ""


def parameter(
    kind: str,
    default: Any = attrs.NOTHING,
    *,
    unit: str,
    meaning: str,
    low: float | None = None,
    high: float | None = None,
    length: int | None = None,
    choices: tuple[str, ...] = (),
    runtime: bool = False,
) -> Any:
    """Declare one parameter as an attrs field.

    ``unit`` is SI, "-" where there is none; ``runtime``: may change while running.
    """
    declared = Declaration("", kind, default, unit, meaning, low, high, length, choices, runtime)
    if kind not in KINDS:
        raise TypeError(f"unknown kind of parameter {kind}")
    if isinstance(default, list):
        return attrs.field(factory=lambda: list(default), metadata={"declaration": declared})
    return attrs.field(default=default, metadata={"declaration": declared})


def section(cls: type) -> Any:
    """Declare a nested group of parameters (``ball.radius``)."""
    return attrs.field(metadata={"section": cls})


def sections(cls: type, *, named_by: str) -> Any:
    """Declare one group for each name that the string array ``named_by`` of the same class lists."""
    return attrs.field(metadata={"sections": cls, "named_by": named_by})


def declarations(cls: type, prefix: str = "", flat: Mapping[str, Any] | None = None) -> Iterator[Declaration]:
    """All declarations of a parameter class, in order.

    With ``flat`` (the values given), groups are spelled out for the names that it lists; without, once as ``<name>``.
    """
    for field in attrs.fields(cls):
        if "section" in field.metadata:
            yield from declarations(field.metadata["section"], f"{prefix}{field.name}.", flat)
        elif "sections" in field.metadata:
            listed = None if flat is None else flat.get(prefix + field.metadata["named_by"])
            known = [n for n in listed if isinstance(n, str)] if isinstance(listed, (list, tuple)) else []
            names = ["<name>"] if flat is None else known
            for name in names:
                yield from declarations(field.metadata["sections"], f"{prefix}{name}.", flat)
        else:
            yield attrs.evolve(field.metadata["declaration"], name=prefix + field.name)


def check_value(declared: Declaration, value: Any, source: str) -> Any:
    """Return ``value`` if it fits the declaration; raise :class:`ParameterError` in one line otherwise."""
    key = declared.name

    def refuse(found: str, remedy: str) -> ParameterError:
        """The error for what was found at this key."""
        return ParameterError(source, f"{key} {found}", remedy)

    if declared.kind.endswith("_array"):
        return _check_array(declared, value, refuse)
    return _check_scalar(declared, declared.kind, value, refuse)


def _check_array(declared: Declaration, value: Any, refuse: Callable[[str, str], ParameterError]) -> list[Any]:
    if not hasattr(value, "__iter__") or isinstance(value, (str, bytes, Mapping)):
        raise refuse(f"is {shown(value)}", f"it takes a list of {declared.kind[:-6]}s")
    items = [_check_scalar(declared, declared.kind[:-6], item, refuse) for item in value]
    if declared.length is not None and len(items) != declared.length:
        raise refuse(f"has {len(items)} numbers", f"it takes {declared.length}")
    if declared.kind == "string_array" and len(set(items)) != len(items):
        raise refuse(f"is {shown(items)}", "each name may stand once")
    return items


def _check_scalar(declared: Declaration, kind: str, value: Any, refuse: Callable[[str, str], ParameterError]) -> Any:
    if kind == "double":
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise refuse(f"is {shown(value)}", f"it takes a number in {declared.unit}")
        if isinstance(value, int):
            raise refuse(
                f"is the integer {shown(value)}",
                f"ROS takes no integer for a number with decimals: write {shown(value)}.0",
            )
        if not math.isfinite(value):
            raise refuse(f"is {value}", f"it takes a finite number in {declared.unit}")
    elif kind == "integer":
        if isinstance(value, bool) or not isinstance(value, int):
            raise refuse(f"is {shown(value)}", "it takes a whole number")
    elif kind == "bool":
        if not isinstance(value, bool):
            raise refuse(f"is {shown(value)}", "it takes true or false")
    elif not isinstance(value, str):
        raise refuse(f"is {shown(value)}", "it takes text")
    if declared.choices and value not in declared.choices:
        raise refuse(f"is {shown(value)}", f"it takes one of {', '.join(declared.choices)}")
    if kind in ("double", "integer"):
        below = declared.low is not None and value < declared.low
        if below or (declared.high is not None and value > declared.high):
            unit = "" if declared.unit == "-" else f" {declared.unit}"
            number = f"{value:g}" if abs(value) < 1e15 else shown(value)
            raise refuse(f"is {number}{unit}", f"its range is {declared.range_text}{unit}")
    return value


def build(cls: type[T], flat: Mapping[str, Any], source: str) -> T:
    """Make the parameter object from a flat mapping of dotted names; every key known, every value checked.

    Raises :class:`ParameterError` for an unknown, missing, mistyped or out-of-range parameter; ``source`` is named in
    it.
    """
    declared = {d.name: d for d in declarations(cls, flat=flat)}
    for key in flat:
        if key in declared and declared[key].kind == "string_array":
            # It may name groups: what is wrong with the names comes before what is unknown because of them.
            check_value(declared[key], flat[key], source)
    for key in flat:
        if key not in declared:
            raise ParameterError(source, f"unknown parameter {key}", nearest(key, declared))
    return cast(T, _build(cls, flat, source, ""))


def _build(cls: type, flat: Mapping[str, Any], source: str, prefix: str) -> Any:
    values: dict[str, Any] = {}
    for field in attrs.fields(cls):
        if "section" in field.metadata:
            values[field.name] = _build(field.metadata["section"], flat, source, f"{prefix}{field.name}.")
        elif "sections" in field.metadata:
            # Without names given and none by default, there are no groups.
            names = values.get(field.metadata["named_by"], ())
            member = field.metadata["sections"]
            values[field.name] = {n: _build(member, flat, source, f"{prefix}{n}.") for n in names}
        else:
            declared = attrs.evolve(field.metadata["declaration"], name=prefix + field.name)
            if declared.name in flat:
                values[field.name] = check_value(declared, flat[declared.name], source)
            elif declared.required:
                raise ParameterError(source, f"{declared.name} is missing", f"give it ({declared.meaning})")
    return cls(**values)


def flatten(parameters: Any, prefix: str = "") -> dict[str, Any]:
    """The flat mapping of dotted names that :func:`build` would make ``parameters`` from again."""
    flat: dict[str, Any] = {}
    for field in attrs.fields(type(parameters)):
        value = getattr(parameters, field.name)
        if "section" in field.metadata:
            flat.update(flatten(value, f"{prefix}{field.name}."))
        elif "sections" in field.metadata:
            for name, member in value.items():
                flat.update(flatten(member, f"{prefix}{name}."))
        else:
            flat[prefix + field.name] = value
    return flat


def read_parameter_file(path: Path) -> dict[str, Any]:
    """Read a ROS 2 parameter file (``/**:`` / ``ros__parameters:``) into a flat mapping of dotted names."""
    return parameters_of(read_yaml(path), str(path))


def parameters_of(document: Any, source: str) -> dict[str, Any]:
    """The flat mapping of dotted names in a parsed ROS 2 parameter file; see :func:`read_parameter_file`."""
    remedy = "it takes '/**:' with 'ros__parameters:' below it, and nothing else"
    if not isinstance(document, Mapping) or list(document) != ["/**"]:
        found = (
            f"has the sections {', '.join(map(str, document))}" if isinstance(document, Mapping) else "is no mapping"
        )
        raise ParameterError(source, found, remedy)
    inner = document["/**"]
    if not isinstance(inner, Mapping) or list(inner) != ["ros__parameters"]:
        raise ParameterError(source, "has no ros__parameters", remedy)
    flat: dict[str, Any] = {}
    _flatten_mapping(inner["ros__parameters"] or {}, "", flat, source)
    return flat


def _flatten_mapping(mapping: Any, prefix: str, flat: dict[str, Any], source: str) -> None:
    if not isinstance(mapping, Mapping):
        raise ParameterError(source, f"ros__parameters is {shown(mapping)}", "it takes names and values")
    for key, value in mapping.items():
        if isinstance(value, Mapping):
            _flatten_mapping(value, f"{prefix}{key}.", flat, source)
        elif prefix + key in flat:
            raise ParameterError(source, f"{prefix}{key} stands twice", "keep one")
        else:
            flat[prefix + key] = value


def load(cls: type[T], path: Path) -> T:
    """Read the parameter file at ``path`` and make the parameter object; see :func:`build`."""
    return build(cls, read_parameter_file(path), str(path))
