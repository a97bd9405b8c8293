"""Reading tables of readings: every cell as text, decided once per file, never guessed.

A table is text in columns with units in the headings. Encoding, separator and decimal mark are
decided for the file as a whole; what would need guessing is an error.
"""

from __future__ import annotations

import csv
import hashlib
import io
import math
import re
from dataclasses import dataclass
from difflib import get_close_matches
from typing import TYPE_CHECKING, Any

from reconcile.errors import InputError, Problem
from reconcile.measurement import Table
from reconcile.units import UnitError, parse_number, parse_unit

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    from reconcile.measurement import ColumnSpec

__all__ = ["MAX_BYTES", "MAX_ROWS", "read_bytes", "read_table"]

MAX_BYTES = 20_000_000
MAX_ROWS = 200_000
_MAX_SHOWN = 8
# the patterns below take a time that grows with the square of a heading's length
_LONGEST_HEADING = 200

_BRACKET = re.compile(r"^\s*(.+?)\s*\[([^\[\]]*)\]\s*$")
_SLASH = re.compile(r"^\s*(.+?)\s*/\s*(?:\((.+)\)|(\S.*))\s*$")
_ROUND = re.compile(r"^\s*(.+?)\s+\((.*)\)\s*$")
_COMMA = re.compile(r"^\s*(.+?)\s*(?:,|\s+in\s)\s*(\S.*)\s*$")
_THOUSANDS = re.compile(r"[+-]?[1-9]\d{0,2},\d{3}")
_IGNORED = re.compile(r"^\s*(note|comment|remark)s?\b", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class _Line:
    number: int
    cells: tuple[str, ...]


def read_bytes(path: Path, shown: str) -> bytes:
    """Return a file's bytes.

    Raises
    ------
    InputError
        If it is missing, not a plain file, unreadable or larger than the cap.
    """
    remedy = "check the name and the folder"
    try:
        if not path.exists():
            raise InputError([Problem(shown, 0, "", "does not exist", remedy)])
        if not path.is_file():
            raise InputError([Problem(shown, 0, "", "is not a file", remedy)])
        size = path.stat().st_size
        if size > MAX_BYTES:
            found = f"has {size / 1e6:.0f} MB, expected at most {MAX_BYTES / 1e6:.0f} MB"
            raise InputError([Problem(shown, 0, "", found, "split the table")])
        return path.read_bytes()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "cannot be read"
        raise InputError([Problem(shown, 0, "", str(reason).lower(), remedy)]) from error


def read_table(path: Path, shown: str, columns: Mapping[str, ColumnSpec]) -> tuple[Table, str]:
    """Read a table and return it with the SHA-256 of its bytes.

    Parameters
    ----------
    path : Path
    shown : str
        The name to print in problems.
    columns : mapping
        The columns the technique can read.

    Raises
    ------
    InputError
        With every problem found.
    """
    raw = read_bytes(path, shown)
    lines = _lines(_decode(raw, shown), shown)
    problems: list[Problem] = []
    heads = _headings(lines[0], shown, columns, problems)
    body = lines[1:]
    if not body:
        problems.append(Problem(shown, lines[0].number, "", "holds headings but no readings"))
    width = len(lines[0].cells)
    for line in body:
        if len(line.cells) != width:
            found = f"found {len(line.cells)} cells, expected {width} as in the headings"
            problems.append(Problem(shown, line.number, "", found))
    if problems:
        raise InputError(problems[:_MAX_SHOWN])
    values = _values(body, heads, shown, problems)
    if problems:
        raise InputError(problems[:_MAX_SHOWN])
    table = Table(
        shown,
        values,
        {key: unit for key, _, unit, _ in heads},
        tuple(line.number for line in body),
    )
    return table, hashlib.sha256(raw).hexdigest()


def _decode(raw: bytes, shown: str) -> str:
    """Return the text: by its byte-order mark, else strict UTF-8, else Windows Latin-1."""
    marked = raw.startswith((b"\xff\xfe", b"\xfe\xff"))
    for attempt in ("utf-16" if marked else "utf-8-sig", "cp1252"):
        try:
            text = raw.decode(attempt)
        except UnicodeDecodeError:
            continue
        if "\x00" in text:
            break
        return text
    raise InputError([Problem(shown, 0, "", "is not a text table", "save it as CSV in UTF-8")])


def _lines(text: str, shown: str) -> list[_Line]:
    """Return the lines that hold cells, split at the file's separator."""
    kept = [
        (number, line)
        for number, line in enumerate(text.splitlines(), start=1)
        if line.strip(" \t;,") and not line.lstrip().startswith("#")
    ]
    if not kept:
        raise InputError([Problem(shown, 0, "", "is empty", "expected headings and readings")])
    if len(kept) > MAX_ROWS:
        found = f"has {len(kept)} rows, expected at most {MAX_ROWS}"
        raise InputError([Problem(shown, 0, "", found, "average the scans first")])
    head = kept[0][1]
    # a tie, as in "c, g/L;t, s" over decimal commas, goes to the mark that stands first here
    separator = max(
        [mark for mark in "\t;," if mark in head] or [","],
        key=lambda mark: sum(line.count(mark) == head.count(mark) for _, line in kept),
    )
    result: list[_Line] = []
    for number, line in kept:
        try:
            cells = next(csv.reader(io.StringIO(line), delimiter=separator, strict=True))
        except (csv.Error, StopIteration):
            raise InputError([Problem(shown, number, "", "has an unfinished quote")]) from None
        while len(cells) > 1 and not cells[-1].strip():
            cells.pop()
        if result:
            cells += [""] * _n_blank_notes(result[0].cells, len(cells))
        result.append(_Line(number, tuple(cell.strip() for cell in cells)))
    return result


def _n_blank_notes(head: Sequence[str], n_cells: int) -> int:
    """Return how many cells a row lacks, if only notes stand in those columns; else 0."""
    missing = head[n_cells:]
    return len(missing) if all(_IGNORED.match(heading) for heading in missing) else 0


def _split_heading(text: str) -> tuple[str, str]:
    """Return name and unit of a heading: ``c [g/L]``, ``c (g/L)``, ``c / g L-1``, ``c, g/L``."""
    if len(text) > _LONGEST_HEADING:
        return text.strip(), ""
    match = _BRACKET.match(text)
    if match is not None:
        return match[1], match[2].strip()
    for pattern in (_COMMA, _SLASH, _ROUND):
        match = pattern.match(text)
        if match is not None:
            unit = next(group for group in match.groups()[1:] if group is not None)
            if _is_unit(unit):
                return match[1], unit.strip()
    return text.strip(), ""


def _is_unit(text: str) -> bool:
    from reconcile.units import KINDS  # noqa: PLC0415 - every kind, for headings only

    try:
        parse_unit(text, list(KINDS))
    except UnitError:
        return False
    return True


def _headings(
    head: _Line, shown: str, columns: Mapping[str, ColumnSpec], problems: list[Problem]
) -> list[tuple[str, float, str, int]]:
    """Return (column key, factor to internal units, unit as written, position) per used column."""
    known = {name.casefold(): key for key, spec in columns.items() for name in (key, *spec.aliases)}
    found: list[tuple[str, float, str, int]] = []
    for position, heading in enumerate(head.cells):
        if _IGNORED.match(heading):
            continue
        name, unit = _split_heading(heading)
        key = known.get(name.casefold()) or known.get(heading.strip().casefold())
        if key is None:
            near = get_close_matches(name.casefold(), known, 1, 0.6)
            hint = f"; did you mean {known[near[0]]!r}?" if near else ""
            expected = f"expected one of {', '.join(columns)}{hint}"
            problems.append(
                Problem(shown, head.number, f"column {heading!r}", f"unknown heading, {expected}")
            )
            continue
        if key in {entry[0] for entry in found}:
            problems.append(Problem(shown, head.number, f"column {heading!r}", "stands twice"))
            continue
        try:
            factor, _ = parse_unit(unit, columns[key].kinds)
        except UnitError as error:
            text = str(error) if unit else f"has no unit; {str(error).split(', ', 1)[-1]}"
            remedy = f"write the unit in brackets: {key} [unit]"
            problems.append(Problem(shown, head.number, f"column {heading!r}", text, remedy))
            continue
        found.append((key, factor, unit, position))
    problems.extend(
        Problem(shown, head.number, "", f"has no column {key!r}", f"found: {', '.join(head.cells)}")
        for key, spec in columns.items()
        if spec.required and key not in {entry[0] for entry in found} and not problems
    )
    return found


def _values(
    body: Sequence[_Line],
    heads: Sequence[tuple[str, float, str, int]],
    shown: str,
    problems: list[Problem],
) -> dict[str, NDArray[Any]]:
    import numpy as np  # noqa: PLC0415 - a broken table costs no import

    comma = _has_decimal_comma(body, heads, shown)
    columns: dict[str, NDArray[Any]] = {}
    for key, factor, _, position in heads:
        numbers = []
        for line in body:
            cell = line.cells[position]
            try:
                numbers.append(_number(cell.replace(",", ".") if comma else cell, factor))
            except UnitError as error:
                text = "is blank, expected a number" if not cell else f"{error}, expected a number"
                problems.append(Problem(shown, line.number, f"column {key!r}", text))
        array = np.array(numbers, dtype=float)
        array.setflags(write=False)
        columns[key] = array
    return columns


def _number(cell: str, factor: float) -> float:
    number = parse_number(cell) * factor
    if not math.isfinite(number):
        raise UnitError(f'"{cell}" is too large')
    return number


def _has_decimal_comma(
    body: Sequence[_Line], heads: Sequence[tuple[str, float, str, int]], shown: str
) -> bool:
    """Return whether the file writes decimals with a comma; refuse a file that does both."""
    cells = [(line.number, line.cells[entry[3]]) for line in body for entry in heads]
    commas = [place for place in cells if "," in place[1]]
    # a cell such as "n.d." is no number, and told so later
    points = [place for place in cells if "." in place[1] and any(c.isdigit() for c in place[1])]
    if commas and points:
        number = max(commas[0][0], points[0][0])
        found = f"found {commas[0][1]!r} and {points[0][1]!r}: decimal comma and decimal point"
        raise InputError(
            [Problem(shown, number, "", found, "use one of the two, and no thousands marks")]
        )
    if any(cell.count(",") > 1 for _, cell in commas):
        number, cell = next(place for place in commas if place[1].count(",") > 1)
        raise InputError([Problem(shown, number, "", f"found {cell!r}, expected a number")])
    if commas and all(_THOUSANDS.fullmatch(cell) for _, cell in commas):
        number, cell = commas[0]
        found = f"found {cell!r}: a decimal comma or a thousands mark?"
        raise InputError([Problem(shown, number, "", found, "write a decimal point")])
    return bool(commas)
