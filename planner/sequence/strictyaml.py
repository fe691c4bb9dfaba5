"""YAML read strictly: the scalars of the YAML 1.2 core schema, no duplicate keys, and the line of every key.

PyYAML by itself follows YAML 1.1, in which `12:30:05` is the number 45005, `1e-3` is text and a repeated key
silently wins. Here times and dates stay text for the models to parse, and whatever is doubtful is an error.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import yaml

from planner.errors import DocumentError, InputError

Key = tuple[str | int, ...]

_TAG = "tag:yaml.org,2002:"
_MAX_BYTES = 32_000_000
_MAX_DEPTH = 40


class CoreResolver(yaml.resolver.BaseResolver):
    """Implicit types of the YAML 1.2.2 core schema (section 10.3.2)."""


for _name, _pattern, _first in (
    ("null", r"~|null|Null|NULL|", ["~", "n", "N", ""]),
    ("bool", r"true|True|TRUE|false|False|FALSE", list("tTfF")),
    ("int", r"[-+]?[0-9]+|0o[0-7]+|0x[0-9a-fA-F]+", list("-+0123456789")),
    (
        "float",
        r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?|[-+]?(\.inf|\.Inf|\.INF)|\.nan|\.NaN|\.NAN",
        list("-+0123456789."),
    ),
):
    CoreResolver.add_implicit_resolver(_TAG + _name, re.compile(rf"^(?:{_pattern})$"), _first)


if yaml.__with_libyaml__:

    class _Composer(yaml.cyaml.CParser, CoreResolver):
        def __init__(self, stream: bytes) -> None:
            yaml.cyaml.CParser.__init__(self, stream)
            CoreResolver.__init__(self)

else:  # pragma: no cover - wheels of PyYAML carry libyaml

    class _Composer(  # type: ignore[no-redef]
        yaml.reader.Reader, yaml.scanner.Scanner, yaml.parser.Parser, yaml.composer.Composer, CoreResolver
    ):
        def __init__(self, stream: bytes) -> None:
            yaml.reader.Reader.__init__(self, stream)
            yaml.scanner.Scanner.__init__(self)
            yaml.parser.Parser.__init__(self)
            yaml.composer.Composer.__init__(self)
            CoreResolver.__init__(self)

        def dispose(self) -> None:
            pass


@dataclass(frozen=True)
class Document:
    """A YAML document: plain data, and the 1-based line on which each key or item stands."""

    path: Path | str
    data: Any
    lines: dict[Key, int] = field(default_factory=dict)

    def line(self, key: Key) -> int | None:
        """Return the line of this key, or of the nearest thing that holds it."""
        for end in range(len(key), -1, -1):
            if key[:end] in self.lines:
                return self.lines[key[:end]]
        return None


def dotted(key: Key) -> str:
    """Return a key path as people write it: `rig.filters[0].name`."""
    text = ""
    for part in key:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text or "(document)"


def read(path: str | Path) -> Document:
    """Read a YAML file strictly; raises DocumentError naming file, line and key."""
    path = Path(path)
    try:
        if path.stat().st_size > _MAX_BYTES:
            raise DocumentError(path, None, "file", f"{path.stat().st_size} bytes", f"at most {_MAX_BYTES}")
        content = path.read_bytes()
    except FileNotFoundError:
        raise DocumentError(
            path, None, "file", "nothing there", "give the name of a file that exists"
        ) from None
    except OSError as refusal:
        raise DocumentError(
            path, None, "file", refusal.strerror or "an error", "a readable file is needed"
        ) from None
    return parse(content, path)


def parse(content: str | bytes, path: str | Path = "(text)") -> Document:
    """Parse YAML text strictly; `path` is what errors name; raises DocumentError."""
    if isinstance(content, str):
        content = content.encode("utf-8", "surrogatepass")
    try:
        content.decode("utf-8")
    except UnicodeDecodeError as wrong:
        bad_line = content[: wrong.start].count(b"\n") + 1
        raise DocumentError(
            path, bad_line, "file", "bytes that are not UTF-8", "save it as UTF-8 text"
        ) from None
    lines: dict[Key, int] = {}
    try:
        _refuse_expansion(content, path)
        composer = _Composer(content)
        try:
            node = composer.get_single_node()
        finally:
            composer.dispose()
    except yaml.MarkedYAMLError as wrong:
        mark = wrong.problem_mark or wrong.context_mark
        line = mark.line + 1 if mark else None
        raise DocumentError(path, line, "file", wrong.problem or "bad YAML", "YAML is needed here") from None
    except yaml.YAMLError as wrong:
        raise DocumentError(path, None, "file", " ".join(str(wrong).split()), "YAML text is needed") from None
    except RecursionError:
        raise DocumentError(path, None, "file", "very deep nesting", f"at most {_MAX_DEPTH} levels") from None
    data = None if node is None else _construct(node, (), lines, path)
    return Document(path, data, lines)


def _refuse_expansion(content: bytes, path: str | Path) -> None:
    """Aliases and nesting let a few lines exhaust memory or stack, and no document here needs them."""
    depth = 0
    for event in yaml.parse(content, Loader=yaml.CSafeLoader if yaml.__with_libyaml__ else yaml.SafeLoader):
        if isinstance(event, yaml.AliasEvent):
            raise DocumentError(
                path, event.start_mark.line + 1, "file", f"the alias *{event.anchor}", "write the value out"
            )
        depth += isinstance(event, yaml.CollectionStartEvent) - isinstance(event, yaml.CollectionEndEvent)
        if depth > _MAX_DEPTH:
            line = event.start_mark.line + 1
            raise DocumentError(path, line, "file", "very deep nesting", f"at most {_MAX_DEPTH} levels")


def _construct(node: yaml.Node, key: Key, lines: dict[Key, int], path: str | Path) -> Any:
    lines.setdefault(key, node.start_mark.line + 1)
    if isinstance(node, yaml.ScalarNode):
        return _scalar(node, key, path)
    if isinstance(node, yaml.SequenceNode) and node.tag == _TAG + "seq":
        return [_construct(item, (*key, index), lines, path) for index, item in enumerate(node.value)]
    if isinstance(node, yaml.MappingNode) and node.tag == _TAG + "map":
        mapping: dict[str, Any] = {}
        for name_node, value_node in node.value:
            line = name_node.start_mark.line + 1
            if not isinstance(name_node, yaml.ScalarNode):
                raise DocumentError(
                    path, line, dotted(key), "a key that is not text", "plain keys are needed"
                )
            name = name_node.value
            if name in mapping:
                first = lines[(*key, name)]
                raise DocumentError(
                    path,
                    line,
                    dotted((*key, name)),
                    f"this key twice (first on line {first})",
                    "keep one of them",
                )
            lines[(*key, name)] = line
            mapping[name] = _construct(value_node, (*key, name), lines, path)
        return mapping
    raise DocumentError(
        path, node.start_mark.line + 1, dotted(key), f"the tag {node.tag}", "plain YAML is needed"
    )


def _scalar(node: yaml.ScalarNode, key: Key, path: str | Path) -> Any:
    text = node.value
    kind = node.tag.removeprefix(_TAG)
    try:
        if kind == "str":
            return text
        if kind == "null":
            return None
        if kind == "bool":
            return {"true": True, "false": False}[text.lower()]
        if kind == "int":
            return int(text, {"0o": 8, "0x": 16}.get(text[:2], 10))
        if kind == "float":
            return float(text.lower().replace(".inf", "inf").replace(".nan", "nan"))
    except (ValueError, KeyError):
        pass
    line = node.start_mark.line + 1
    raise DocumentError(path, line, dotted(key), f"{text[:40]!r} tagged {node.tag}", "plain YAML is needed")


class _Dumper(yaml.CSafeDumper if yaml.__with_libyaml__ else yaml.SafeDumper):  # type: ignore[misc]
    """Writes text that reads the same under YAML 1.1 and 1.2: what either takes for a number or a time is quoted."""

    def ignore_aliases(self, data: Any) -> bool:
        return True


_Dumper.yaml_implicit_resolvers = {
    first: list(pairs) for first, pairs in yaml.resolver.Resolver.yaml_implicit_resolvers.items()
}
for _first, _pairs in CoreResolver.yaml_implicit_resolvers.items():
    _Dumper.yaml_implicit_resolvers.setdefault(_first, []).extend(_pairs)


class OneLine(dict):
    """A mapping that is written on one line."""


class Row(list):
    """A list that is written on one line."""


_Dumper.add_representer(
    OneLine, lambda dumper, data: dumper.represent_mapping(_TAG + "map", data.items(), flow_style=True)
)
_Dumper.add_representer(
    Row, lambda dumper, data: dumper.represent_sequence(_TAG + "seq", data, flow_style=True)
)


def dump(data: Any) -> str:
    """Return data as YAML text in the order given, one line for each `OneLine` and `Row`; reads back equal."""
    try:
        return yaml.dump(data, Dumper=_Dumper, sort_keys=False, allow_unicode=True, width=2**20)
    except yaml.representer.RepresenterError as wrong:
        raise InputError(f"cannot be written as YAML: {wrong}") from None
