"""Which line of a TOML text a key stands on, for errors that name it.

The standard reader gives values without places. This map follows only what it needs: headers, keys,
strings that may hide either, and brackets that continue a value over lines. A key inside an inline
table or an array gets the line on which its statement starts.
"""

from __future__ import annotations

import re
import tomllib

__all__ = ["KeyPath", "line_map", "line_of"]

KeyPath = tuple[str | int, ...]

_BARE = r"""(?:"(?:[^"\\]|\\.)*"|'[^']*'|[A-Za-z0-9_-]+)"""
_DOTTED = rf"{_BARE}(?:\s*\.\s*{_BARE})*"
_HEADER = re.compile(rf"\s*(\[\[?)\s*({_DOTTED})\s*\]")
_STATEMENT = re.compile(rf"\s*({_DOTTED})\s*=")
_QUOTED = re.compile(
    r'"""(?:[^\\]|\\.)*?"""|\'\'\'.*?\'\'\'|"(?:[^"\\\n]|\\.)*"|\'[^\'\n]*\'|#[^\n]*', re.DOTALL
)


def line_map(text: str) -> dict[KeyPath, int]:
    r"""Return key path → 1-based line of a text that is valid TOML.

    Examples
    --------
    >>> line_map('a = 1\n[[b]]\nc = 2\n[[b]]\nc = 3\n')[("b", 1, "c")]
    5
    """
    lines: dict[KeyPath, int] = {(): 1}
    count: dict[KeyPath, int] = {}
    prefix: KeyPath = ()
    depth = 0
    # blank out what strings and comments hold, but keep their line breaks
    shadow = _QUOTED.sub(lambda m: re.sub(r"[^\n\"']", " ", m[0]) if m[0][0] != "#" else "", text)
    continued = _inside_strings(text)
    for number, (raw, bare) in enumerate(
        zip(text.split("\n"), shadow.split("\n"), strict=True), start=1
    ):
        if depth == 0 and number not in continued:
            header = _HEADER.match(raw)
            if header is not None:
                prefix = _enter(header[1], _parts(header[2]), count)
                for depth_of in range(1, len(prefix) + 1):
                    lines.setdefault(prefix[:depth_of], number)
                continue
            statement = _STATEMENT.match(raw)
            if statement is not None:
                path = (*prefix, *_parts(statement[1]))
                for depth_of in range(len(prefix) + 1, len(path) + 1):
                    lines.setdefault(path[:depth_of], number)
        depth += sum(bare.count(c) for c in "[{") - sum(bare.count(c) for c in "]}")
    return lines


def _inside_strings(text: str) -> set[int]:
    """Return the lines that start inside a string of several lines."""
    inside: set[int] = set()
    line, seen = 1, 0
    for match in _QUOTED.finditer(text):
        breaks = match[0].count("\n")
        if breaks:
            line, seen = line + text.count("\n", seen, match.start()), match.start()
            inside.update(range(line + 1, line + 1 + breaks))
    return inside


def _parts(dotted: str) -> KeyPath:
    if '"' not in dotted and "'" not in dotted:
        return tuple(part.strip() for part in dotted.split("."))
    # quoted keys have escapes of their own, which the standard reader knows best
    value, parts = tomllib.loads(f"{dotted} = 0"), []
    while isinstance(value, dict):
        (part, value), *_ = value.items()
        parts.append(part)
    return tuple(parts)


def _enter(bracket: str, parts: KeyPath, count: dict[KeyPath, int]) -> KeyPath:
    """Return the path of a header; names of table arrays are followed by the index in force."""
    path: KeyPath = ()
    for position, part in enumerate(parts):
        path = (*path, part)
        last = position == len(parts) - 1
        if last and bracket == "[[":
            count[path] = count.get(path, -1) + 1
        if path in count:
            path = (*path, count[path])
    return path


def line_of(path: KeyPath, lines: dict[KeyPath, int]) -> int:
    """Return the line of a key path, or of the nearest path above it that has one."""
    while path not in lines:
        path = path[:-1]
    return lines[path]
