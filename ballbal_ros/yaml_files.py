"""YAML read safely: plain data only, no aliases, no key twice, nothing large; what is wrong is said in one line."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any, cast

import yaml

from ballbal_ros.errors import ParameterError, shown

_LARGEST = 1 << 20


class _Loader(yaml.SafeLoader):
    """YAML's safe loader, which reads 1e-3 as a number, and refuses a key that stands twice and aliases: ROS reads no
    file with aliases, and a few lines of them can stand for more than fits into memory.
    """

    def compose_node(self, parent: yaml.Node | None, index: Any) -> yaml.Node | None:
        """A node as written."""
        event = self.peek_event()  # type: ignore[no-untyped-call]
        if isinstance(event, yaml.AliasEvent):
            raise yaml.composer.ComposerError(None, None, f"an alias (*{event.anchor})", cast(Any, event.start_mark))
        return super().compose_node(parent, index)


_Loader.add_implicit_resolver(  # type: ignore[no-untyped-call]
    "tag:yaml.org,2002:float", re.compile(r"^[-+]?[0-9][0-9]*(\.[0-9]*)?[eE][-+]?[0-9]+$"), list("-+0123456789")
)


def _mapping_once(loader: _Loader, node: yaml.MappingNode) -> dict[Any, Any]:
    mapping: dict[Any, Any] = {}
    for key_node, value_node in node.value:
        key = loader.construct_object(key_node, deep=True)  # type: ignore[no-untyped-call]
        if not isinstance(key, str):
            raise yaml.constructor.ConstructorError(None, None, f"{shown(key)} is no name", key_node.start_mark)
        if key in mapping:
            raise yaml.constructor.ConstructorError(None, None, f"{key} stands twice", key_node.start_mark)
        mapping[key] = loader.construct_object(value_node, deep=True)  # type: ignore[no-untyped-call]
    return mapping


_Loader.add_constructor("tag:yaml.org,2002:map", _mapping_once)


def read_yaml(path: Path) -> Any:
    """Read a YAML file safely. Raises :class:`ParameterError` in one line where it can't be read or is no YAML."""
    try:
        if path.stat().st_size > _LARGEST:
            raise ParameterError(str(path), f"is larger than {_LARGEST >> 20} MiB", "give a parameter file or a plan")
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else "it is not UTF-8 text"
        raise ParameterError(str(path), f"can't be read: {reason}", "give the path of a YAML file") from error
    return parse_yaml(text, str(path))


def parse_yaml(text: str, source: str) -> Any:
    """Parse YAML text safely; ``source`` is named in the :class:`ParameterError` that says what is wrong."""
    try:
        return yaml.load(text, Loader=_Loader)
    except (yaml.YAMLError, ValueError, RecursionError) as error:
        mark = getattr(error, "problem_mark", None)
        line = f"line {mark.line + 1}: " if mark is not None else ""
        problem = getattr(error, "problem", None) or str(error)
        raise ParameterError(source, f"{line}{problem}", "mend the YAML") from error
