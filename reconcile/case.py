"""From a case document and its tables to a `Case`, with every problem found on the way.

The schema drives the conversion: a field with ``x-kind`` becomes a `Quantity`, one with
``x-uncertainty`` a standard uncertainty. No technique is known here by name; the caller passes the
columns each can read.
"""

from __future__ import annotations

import hashlib
import math
import re
import tomllib
from dataclasses import dataclass
from datetime import date, datetime
from difflib import get_close_matches
from typing import TYPE_CHECKING, Any

from reconcile.errors import InputError, Problem
from reconcile.measurement import Case, Effect, Measurement, Place, Sample
from reconcile.schema import as_toml, load_schema, path_text, validate
from reconcile.tables import read_bytes, read_table
from reconcile.toml_lines import line_map, line_of
from reconcile.units import KINDS, UnitError, parse_quantity, parse_uncertainty

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from reconcile.measurement import ColumnSpec, Quantity
    from reconcile.toml_lines import KeyPath

__all__ = ["load_case"]

_MAX_DEPTH = 20
_SIGNED = {"second_virial", "dn_dc", "temperature"}
# magnitudes in internal units that nothing in this trade leaves, so that a slip of a power is seen
_PLAUSIBLE = {
    "molar_mass": (1.0, 1e12),
    "viscosity_number": (1e-9, 1e6),
    "density": (0.1, 25.0),
    "dn_dc": (1e-4, 2.0),
    "temperature": (50.0, 1500.0),
    "acceleration": (1.0, 30.0),
    "length": (1e-9, 1e6),
    "second_virial": (0.0, 1e3),
}
_LARGEST_INTEGER = 10**15
_SHARED_KEYS = {"name", "date", "solvent", "temperature", "effects", "readings", "note"}


@dataclass(frozen=True, slots=True)
class _Document:
    """A parsed TOML file with what errors need: its name and its lines."""

    shown: str
    data: dict[str, Any]
    lines: dict[KeyPath, int]
    sha256: str

    def problem(self, path: KeyPath, text: str, remedy: str = "") -> Problem:
        return Problem(self.shown, line_of(path, self.lines), path_text(path), text, remedy)


def load_case(
    path: Path, tables: Mapping[str, Mapping[str, ColumnSpec]], *, allow_outside: bool = False
) -> Case:
    """Read a case document, its included effects and its tables.

    Parameters
    ----------
    path : Path
        The case document.
    tables : mapping
        Technique → the columns its tables may hold. ``stated`` needs no entry.
    allow_outside : bool
        Let tables and included files lie outside the case's folder.

    Raises
    ------
    InputError
        With every problem found in all files.
    """
    document = _read_toml(path, path.name)
    problems = [
        *_not_finite(document),
        *(
            document.problem(fault.path, fault.text, fault.remedy)
            for fault in validate(document.data, "case-1")
        ),
    ]
    if problems and not isinstance(document.data.get("sample"), dict):
        raise InputError(problems)
    schema = load_schema("case-1")
    data = _converted(document.data, schema, (), schema, document, problems)
    folder = _Folder(path.parent, allow_outside)
    effects, included = _effects(data, document, folder, problems)
    measurements: list[Measurement] = []
    hashes: dict[str, str] = {}
    for technique in (*tables, "stated"):
        entries = data.get(technique)
        for index, entry in enumerate(entries if isinstance(entries, list) else []):
            if isinstance(entry, dict):
                place = (technique, index)
                measurement = _measurement(
                    entry, place, document, (tables.get(technique), folder, hashes), problems
                )
                _check_effects(entry, place, document, effects, problems)
                measurements.append(measurement)
    _check_names(measurements, problems)
    problems.extend(_limits_reversed(data.get("limits"), document))
    if not measurements and not problems:
        problems.append(
            document.problem(
                (), "holds no measurement", f"add one of [[{']], [['.join((*tables, 'stated'))}]]"
            )
        )
    if problems:
        raise InputError(problems)
    inputs = ((document.shown, document.sha256), *included, *sorted(hashes.items()))
    digest = hashlib.sha256("\n".join(f"{k} {v}" for k, v in inputs).encode()).hexdigest()
    return Case(
        document.shown,
        _sample(data["sample"]),
        effects,
        tuple(measurements),
        _limits(data.get("limits", {})),
        inputs,
        digest,
        bool(data.get("estimate", {}).get("link_A2", False)),
    )


@dataclass(frozen=True, slots=True)
class _Folder:
    """The case's own folder, outside which nothing is read unless allowed."""

    root: Path
    allow_outside: bool

    def find(self, name: str) -> Path | str:
        """Return the path of a named file, or the reason why it may not be read."""
        if "\\" in name:
            return "has a backslash; write folders with /, so that cases travel"
        if "\x00" in name:
            return "is not a file name"
        found = self.root / name
        try:
            inside = found.resolve().is_relative_to(self.root.resolve())
        except (OSError, RuntimeError):
            return "cannot be followed"
        if not inside and not self.allow_outside:
            return "lies outside the case's folder; move it there, or give --allow-outside"
        return found


def _read_toml(path: Path, shown: str) -> _Document:
    raw = read_bytes(path, shown)
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError(
            [Problem(shown, line, "", "is not UTF-8 text", "save the case as UTF-8")]
        ) from None
    text = text.replace("\r\n", "\n")
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError([_toml_problem(shown, text, str(error))]) from None
    except RecursionError:
        raise InputError([Problem(shown, 0, "", "is nested too deeply")]) from None
    except ValueError:
        # what Python itself refuses to read as an integer
        raise InputError([Problem(shown, 0, "", "holds a number of too many digits")]) from None
    if _depth(data) > _MAX_DEPTH:
        raise InputError([Problem(shown, 0, "", "is nested too deeply")])
    return _Document(shown, _dates_as_text(data), line_map(text), hashlib.sha256(raw).hexdigest())


def _not_finite(document: _Document) -> list[Problem]:
    """Return a problem for every number that is none: TOML knows nan and inf, no quantity does."""
    found: list[Problem] = []
    stack: list[tuple[KeyPath, Any]] = [((), document.data)]
    while stack:
        path, entry = stack.pop()
        if isinstance(entry, float) and not math.isfinite(entry):
            found.append(document.problem(path, f"found {entry}, expected a number"))
        elif isinstance(entry, int) and abs(entry) > _LARGEST_INTEGER:
            text = f"found a number of {len(str(abs(entry)))} digits, expected a smaller one"
            found.append(document.problem(path, text))
        elif isinstance(entry, dict):
            stack.extend(((*path, key), child) for key, child in entry.items())
        elif isinstance(entry, list):
            stack.extend(((*path, key), child) for key, child in enumerate(entry))
    return found


def _depth(value: Any) -> int:
    deepest, stack = 0, [(value, 1)]
    while stack:
        entry, depth = stack.pop()
        deepest = max(deepest, depth)
        children = entry.values() if isinstance(entry, dict) else entry
        if isinstance(entry, (dict, list)):
            stack.extend((child, depth + 1) for child in children)
    return deepest


def _dates_as_text(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _dates_as_text(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [_dates_as_text(entry) for entry in value]
    if isinstance(value, date) and not isinstance(value, datetime):
        return value.isoformat()
    return value


def _toml_problem(shown: str, text: str, message: str) -> Problem:
    """Return a reader's complaint with the mistake that most often causes it."""
    match = re.search(r"\(at line (\d+), column \d+\)|\(at end of document\)", message)
    number = int(match[1]) if match and match[1] else 0
    lines = text.split("\n")
    line = lines[number - 1] if 0 < number <= len(lines) else ""
    what = message.split(" (at ", maxsplit=1)[0]
    what = what[:1].lower() + what[1:]
    remedy = ""
    if re.search(r"=\s*-?\d+,\d", line):
        remedy = "a decimal comma? write a point: 1.5"
    elif "verwrite" in message or "declare" in message or "twice" in message:
        remedy = "a key or an effect's id stands twice; rename or remove one"
    elif re.search(r"=\s*[A-Za-z]", line):
        remedy = "put texts in quotes"
    elif re.search(r"=\s*[\d.]+\s+\S", line) or re.search(r"=\s*\d+(\.\d+)?[A-Za-z%]", line):
        remedy = 'put a number with a unit in quotes: "25 degC"'
    return Problem(shown, number, "", f"not valid TOML: {what}", remedy)


def _converted(
    value: Any,
    schema: Mapping[str, Any],
    path: KeyPath,
    root: Mapping[str, Any],
    document: _Document,
    problems: list[Problem],
) -> Any:
    """Return the value with every text that the schema calls a quantity turned into one."""
    if "$ref" in schema:
        schema = root["$defs"][schema["$ref"].rsplit("/", 1)[-1]]
    if isinstance(value, dict):
        fields = _fields(schema, value)
        return {
            key: _converted(entry, fields.get(key, {}), (*path, key), root, document, problems)
            for key, entry in value.items()
        }
    if isinstance(value, list):
        items = schema.get("items", {})
        return [
            _converted(entry, items, (*path, i), root, document, problems)
            for i, entry in enumerate(value)
        ]
    if not isinstance(value, str):
        return value
    try:
        if "x-kind" in schema:
            kinds = schema["x-kind"]
            found = parse_quantity(value, [kinds] if isinstance(kinds, str) else kinds)
            _check_sign(found)
            return found
        if "x-uncertainty" in schema:
            return _checked_uncertainty(value, schema)
    except UnitError as error:
        examples = schema.get("examples", [])
        remedy = f"for example: {path[-1]} = {as_toml(examples[0])}" if examples else ""
        problems.append(document.problem(path, str(error), remedy))
    return value


def _check_sign(found: Quantity) -> None:
    """Refuse what no quantity of a kind can be."""
    if found.kind not in _SIGNED and found.value <= 0.0:
        raise UnitError(f'found "{found.text}", expected more than 0')
    low, high = _PLAUSIBLE.get(found.kind, (0.0, math.inf))
    if not low <= abs(found.value) <= high:
        raise UnitError(f'found "{found.text}", which no {KINDS[found.kind].title} is')


def _checked_uncertainty(text: str, schema: Mapping[str, Any]) -> Quantity:
    found = parse_uncertainty(text, schema["x-uncertainty"])
    if schema.get("x-positive") and found.value == 0.0:
        raise UnitError(f'found "{text}", expected more than 0; leave it out if it is not known')
    if found.kind == "ratio" and found.value >= 1.0:
        raise UnitError(f'found "{text}", expected less than 100 %')
    return found


def _fields(schema: Mapping[str, Any], value: Mapping[str, Any]) -> dict[str, Any]:
    """Return the schema of each key, with those of the branches that the value selects."""
    fields = dict(schema.get("properties", {}))
    for pattern, entry in schema.get("patternProperties", {}).items():
        fields |= {key: entry for key in value if re.search(pattern, key)}
    for branch in schema.get("allOf", []):
        rules = branch["if"]["properties"]
        if all(
            value.get(key) in rule.get("enum", [rule.get("const")]) for key, rule in rules.items()
        ):
            for key, entry in branch["then"].get("properties", {}).items():
                fields[key] = {**fields.get(key, {}), **entry}
    return fields


def _effects(
    data: Mapping[str, Any], document: _Document, folder: _Folder, problems: list[Problem]
) -> tuple[dict[str, Effect], tuple[tuple[str, str], ...]]:
    """Return all effects by id, and name and digest of every included file."""
    effects = _effects_of(data)
    origin = dict.fromkeys(effects, document.shown)
    included = []
    names = data.get("include", [])
    for index, name in enumerate(names if isinstance(names, list) else []):
        found = folder.find(name) if isinstance(name, str) else "is not a file name"
        if isinstance(found, str):
            problems.append(document.problem(("include", index), f"{name!r} {found}"))
            continue
        try:
            other = _read_toml(found, name)
        except InputError as error:
            problems.extend(error.problems)
            continue
        included.append((name, other.sha256))
        for key, effect in _included_effects(other, problems).items():
            if key in effects:
                problems.append(
                    other.problem(
                        ("effects", key),
                        f"this effect's id is already in {origin[key]}",
                        "rename one, or remove one where they are the same effect",
                    )
                )
            effects[key], origin[key] = effect, name
    return effects, tuple(included)


def _effects_of(data: Mapping[str, Any]) -> dict[str, Effect]:
    found = data.get("effects", {})
    return {
        key: Effect(key, entry["target"], entry["u"].value, entry.get("description", ""))
        for key, entry in (found.items() if isinstance(found, dict) else ())
        if isinstance(entry, dict) and hasattr(entry.get("u"), "value") and "target" in entry
    }


def _included_effects(other: _Document, problems: list[Problem]) -> dict[str, Effect]:
    schema = load_schema("case-1")
    probe = {"case": 1, "sample": {"name": "x", "polymer": "x"}, **other.data}
    faults = [
        other.problem(fault.path, fault.text, fault.remedy) for fault in validate(probe, "case-1")
    ]
    faults += [
        other.problem((key,), "an included file holds [effects] only")
        for key in other.data
        if key != "effects"
    ]
    data = _converted(other.data, schema, (), schema, other, faults)
    problems.extend(faults)
    return _effects_of(data)


def _measurement(
    entry: dict[str, Any],
    place: tuple[str, int],
    document: _Document,
    context: tuple[Mapping[str, ColumnSpec] | None, _Folder, dict[str, str]],
    problems: list[Problem],
) -> Measurement:
    columns, folder, hashes = context
    technique = place[0]
    table = None
    name = entry.get("readings")
    if columns is not None and isinstance(name, str):
        found = folder.find(name)
        if isinstance(found, str):
            problems.append(document.problem((*place, "readings"), f"{name!r} {found}"))
        else:
            try:
                table, hashes[name] = read_table(found, name, columns)
            except InputError as error:
                problems.extend(error.problems)
    lines = {path_text(key[2:]): line for key, line in document.lines.items() if key[:2] == place}
    temperature = entry.get("temperature")
    default = f"{technique} {entry.get('quantity', place[1] + 1)}"
    effects = entry.get("effects", [])
    return Measurement(
        technique,
        str(entry.get("name", default)),
        {key: value for key, value in entry.items() if key not in _SHARED_KEYS},
        table,
        tuple(effects) if isinstance(effects, list) else (),
        Place(document.shown, path_text(place), lines),
        entry.get("date"),
        entry.get("solvent"),
        getattr(temperature, "value", None),
    )


def _check_effects(
    entry: Mapping[str, Any],
    place: tuple[str, int],
    document: _Document,
    effects: Mapping[str, Effect],
    problems: list[Problem],
) -> None:
    names = entry.get("effects", [])
    own = document.data.get("effects", {})
    defined = sorted({*effects, *(own if isinstance(own, dict) else ())})
    for name in names if isinstance(names, list) else []:
        if not isinstance(name, str) or name in defined:
            continue
        near = get_close_matches(name, defined, 1, 0.6)
        remedy = f"did you mean {near[0]!r}?" if near else f"add [effects.{name}], or remove it"
        problems.append(
            document.problem((*place, "effects"), f"{name!r} is not under [effects]", remedy)
        )


def _check_names(measurements: list[Measurement], problems: list[Problem]) -> None:
    seen: dict[str, Measurement] = {}
    for measurement in measurements:
        if measurement.name in seen:
            other = seen[measurement.name].place.path
            problems.append(
                measurement.place.problem(
                    "name",
                    f"{measurement.name!r} is also the name of {other}",
                    "give each measurement a name of its own",
                )
            )
        seen[measurement.name] = measurement


def _limits_reversed(limits: Any, document: _Document) -> list[Problem]:
    """Return a problem for every limit whose lower end is not below its upper one."""
    found = []
    for name, limit in limits.items() if isinstance(limits, dict) else ():
        pair = [limit.get("min"), limit.get("max")] if isinstance(limit, dict) else limit
        ends = [getattr(end, "value", end) for end in pair] if isinstance(pair, list) else []
        numbers = [end for end in ends if isinstance(end, (int, float))]
        if len(numbers) == 2 and numbers[0] >= numbers[1]:
            text = "the lowest is not below the highest"
            found.append(document.problem(("limits", name), text, "exchange them"))
    return found


def _sample(entry: Mapping[str, Any]) -> Sample:
    solids = entry.get("solids", {"value": 1.0, "u": 0.0})
    own = {"name", "polymer", "architecture", "composition", "charged", "solids", "note"}
    return Sample(
        entry["name"],
        entry["polymer"],
        entry.get("architecture", "unknown"),
        entry.get("composition", "homopolymer"),
        bool(entry.get("charged", False)),
        float(solids["value"]),
        float(solids["u"]),
        {key: value for key, value in entry.items() if key not in own},
    )


def _limits(entry: Mapping[str, Any]) -> dict[str, tuple[float | None, float | None]]:
    limits = {}
    for name, limit in entry.items():
        ends = limit if isinstance(limit, list) else [limit.get("min"), limit.get("max")]
        low, high = (getattr(end, "value", end) for end in ends)
        limits[name] = (
            None if low is None else float(low),
            None if high is None else float(high),
        )
    return limits
