"""The steps of a plan file, each one verb: what they take, and how they are read."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, TypeVar

import attrs
import cattrs
import numpy as np
from attrs import validators
from cattrs.v import format_exception

from ballbal_ros.errors import PlanError, nearest, shown

T = TypeVar("T")


def _finite(_: object, attribute: attrs.Attribute[Any], value: object) -> None:
    numbers = value.values() if isinstance(value, Mapping) else np.atleast_1d(np.asarray(value, float))
    if not all(np.isfinite(number) for number in numbers):
        raise ValueError(f"{attribute.name} is {shown(value)}; it takes finite numbers")


_POSITIVE = [_finite, validators.gt(0.0)]
_VECTOR: Any = [_finite, validators.min_len(3), validators.max_len(3)]


@attrs.frozen
class Wait:
    """Nothing happens for ``wait`` s."""

    wait: float = attrs.field(validator=[_finite, validators.ge(0.0)])


@attrs.frozen
class Move:
    """The named joints go from rest to rest together, rad or m, in ``during`` s."""

    move: dict[str, float] = attrs.field(validator=_finite)
    during: float = attrs.field(validator=_POSITIVE)


@attrs.frozen
class LoadStep:
    """A hand's load becomes this one, at once; mass 0 takes it away. ``announced``: the robot is told."""

    hand: str
    mass: float = attrs.field(validator=[_finite, validators.ge(0.0)])
    center: list[float] = attrs.field(factory=lambda: [0.0, 0.0, 0.0], validator=_VECTOR)
    announced: bool = True


@attrs.frozen
class PushStep:
    """Somebody pushes: ``force`` [3] N in odom axes at ``at`` [3] m of a link, for ``during`` s."""

    link: str
    at: list[float] = attrs.field(validator=_VECTOR)
    force: list[float] = attrs.field(validator=_VECTOR)
    during: float = attrs.field(validator=_POSITIVE)


@attrs.frozen
class PullStep:
    """What the world exerts on a hand goes to ``force`` [3] N and ``moment`` [3] N m within ``during`` s, and stays.

    ``base_footprint`` axes, at the hand link's origin; ``announced``: the planner is told.
    """

    hand: str
    during: float = attrs.field(validator=_POSITIVE)
    force: list[float] = attrs.field(factory=lambda: [0.0, 0.0, 0.0], validator=_VECTOR)
    moment: list[float] = attrs.field(factory=lambda: [0.0, 0.0, 0.0], validator=_VECTOR)
    announced: bool = True


@attrs.frozen
class RollStep:
    """The ball rolls from rest to rest to x, y (m) and heading (rad) from where the plan began, in ``during`` s."""

    x: float = attrs.field(default=0.0, validator=_finite)
    y: float = attrs.field(default=0.0, validator=_finite)
    heading: float = attrs.field(default=0.0, validator=_finite)
    during: float | None = attrs.field(default=None, validator=validators.optional(_POSITIVE))


@attrs.frozen
class Start:
    """Where the plan begins: joints not named are at 0; what the hands hold."""

    posture: dict[str, float] = attrs.field(factory=dict, validator=_finite)
    loads: list[LoadStep] = attrs.field(factory=list)


def _strict(kind: type[T]) -> Callable[[Any, Any], T]:
    def hook(value: Any, _: Any) -> T:
        """The value, where it is of the kind to the letter; raises ValueError where it is not."""
        wanted: tuple[type, ...] = (int, float) if kind is float else (kind,)
        if isinstance(value, bool) != (kind is bool) or not isinstance(value, wanted):
            raise ValueError(f"{shown(value)} is no {'number' if kind is float else kind.__name__}")
        return kind(value)  # type: ignore[call-arg]

    return hook


_CONVERTER = cattrs.Converter(forbid_extra_keys=True, detailed_validation=True)
for _kind in (float, str, bool):
    _CONVERTER.register_structure_hook(_kind, _strict(_kind))
_VERBS: dict[str, type] = {
    "wait": Wait, "move": Move, "load": LoadStep, "push": PushStep, "pull": PullStep, "roll": RollStep
}  # fmt: skip


def _reason(error: BaseException, kind: type | None) -> str:
    if isinstance(error, AttributeError):
        # What cattrs says of a text or a number where keys should be is about Python, not about the file.
        return "is no mapping of keys to values"
    said = type(error) is ValueError and str(error)
    return said or format_exception(error, kind)


def _structure(value: Any, cls: type[T], where: str, what: str) -> T:
    try:
        return _CONVERTER.structure(value, cls)
    except Exception as error:
        reason = "; ".join(cattrs.transform_error(error, path=what, format_exception=_reason))
        known = ", ".join(f.name for f in attrs.fields(cls))  # type: ignore[arg-type]
        raise PlanError(where, reason or f"{what} is {shown(value)}", f"{what} takes {known}") from error


def read_start(start: Any, where: str) -> Start:
    """Where the plan begins; raises :class:`PlanError` that names file ``where``."""
    return _structure(start, Start, where, "start")


def read_step(step: Any, where: str, what: str) -> object:
    """One step as its verb's class; raises :class:`PlanError` that names file ``where`` and step ``what``."""
    if not isinstance(step, Mapping):
        raise PlanError(where, f"{what} is {shown(step)}", f"each step is one verb: {', '.join(_VERBS)}")
    verbs = [key for key in step if key in _VERBS]
    if len(verbs) != 1:
        unknown = next((str(key) for key in step if key not in _VERBS), "")
        raise PlanError(where, f"{what} has the verbs {', '.join(verbs) or 'none'}", nearest(unknown, _VERBS))
    verb, inner = verbs[0], step[verbs[0]]
    if verb in ("wait", "move") or not isinstance(inner, Mapping):
        return _structure(dict(step), _VERBS[verb], where, what)
    return _structure(
        {**inner, **{k: v for k, v in step.items() if k != verb}}, _VERBS[verb], where, f"{what} ({verb})"
    )
