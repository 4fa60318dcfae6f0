"""Other values in the text of a parameter file, with its comments and its layout left as they are."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Mapping
from typing import Any

import yaml

from ballbal_ros.errors import ParameterError

_PLAIN = re.compile(r"^[A-Za-z_][A-Za-z0-9_./-]*$")
_WORDS = {"true", "false", "yes", "no", "on", "off", "null", "y", "n"}


def yaml_text(value: Any) -> str:
    """A value as it stands in a parameter file, such that every reader of YAML takes it for what it is."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(f"{value} can't stand in a parameter file")
        text = repr(value)
        # 1e-05 is text to some readers, 1.0e-05 to none.
        return text.replace("e", ".0e") if "e" in text and "." not in text else text
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(yaml_text(item) for item in value)}]"
    if isinstance(value, str) and not (_PLAIN.match(value) and value.lower() not in _WORDS):
        return json.dumps(value, ensure_ascii=False)
    return str(value)


def edited(text: str, values: Mapping[str, Any], source: str) -> str:
    """The text of a parameter file with the values of some dotted names replaced, or added where it does not name them.

    Raises :class:`ParameterError` where the file has no such layout; the caller checks that the result reads as wanted.
    """
    places = _places(text, source)
    named = {name: node for name, node in places if isinstance(node, (yaml.ScalarNode, yaml.SequenceNode))}
    replaced = [name for name in values if name in named]
    for name in sorted(replaced, key=lambda n: named[n].start_mark.index, reverse=True):
        begin, end = named[name].start_mark.index, named[name].end_mark.index
        text = text[:begin] + yaml_text(values[name]) + text[end:]
    for name in values:
        if name not in named:
            text = _added(text, name, yaml_text(values[name]), source)
    return text


def _places(text: str, source: str) -> list[tuple[str, yaml.Node]]:
    """(dotted name, node) of everything below ros__parameters, itself as ""; groups before what they hold."""
    root = yaml.compose(text, Loader=yaml.SafeLoader)
    for key in ("/**", "ros__parameters"):
        found = [v for k, v in root.value if k.value == key] if isinstance(root, yaml.MappingNode) else []
        if len(found) != 1:
            raise ParameterError(source, f"has no {key}", "mend the file first")
        root = found[0]
    return [] if root is None else list(_below("", root))


def _below(name: str, node: yaml.Node) -> Iterator[tuple[str, yaml.Node]]:
    yield name, node
    if isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            yield from _below(f"{name}.{key.value}" if name else key.value, value)


def _added(text: str, name: str, value: str, source: str) -> str:
    """One more line, in the group that holds the most of its name."""
    groups = {n: node for n, node in _places(text, source) if isinstance(node, yaml.MappingNode) and node.value}
    group, rest = "", name
    for candidate in groups:
        if candidate and name.startswith(f"{candidate}.") and len(candidate) > len(group):
            group, rest = candidate, name[len(candidate) + 1 :]
    node = groups.get(group)
    if node is None or node.flow_style:
        raise ParameterError(source, f"has no place for {name}", f"add {name} there by hand")
    column = node.value[0][0].start_mark.column
    last = node.value[-1][1]
    while isinstance(last, yaml.MappingNode) and last.value and not last.flow_style:
        last = last.value[-1][1]
    line_end = text.find("\n", last.end_mark.index)
    at = len(text) if line_end < 0 else line_end
    lines, indent = "", " " * column
    *parents, leaf = rest.split(".")
    for parent in parents:
        lines += f"\n{indent}{parent}:"
        indent += "  "
    return f"{text[:at]}{lines}\n{indent}{leaf}: {value}{text[at:] or chr(10)}"
