"""The schemas of the documents: finding them, and turning their errors into plain sentences."""

from __future__ import annotations

import json
import re
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterator

    from jsonschema.exceptions import ValidationError

__all__ = ["SchemaFault", "load_schema", "schema_text", "validate"]


@dataclass(frozen=True, slots=True)
class SchemaFault:
    """One place where a document breaks its schema."""

    path: tuple[str | int, ...]
    text: str
    remedy: str = ""

    @property
    def place(self) -> str:
        """The path as people read it: ``osmometry[0].u_reading``."""
        return path_text(self.path)


def path_text(path: tuple[str | int, ...]) -> str:
    """Return a key path as people read it.

    Examples
    --------
    >>> path_text(("osmometry", 0, "u_reading"))
    'osmometry[0].u_reading'
    """
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            # a quoted key may hold anything, line breaks too
            key = part if part.isprintable() else json.dumps(part)
            text += f".{key}" if text else key
    return text


def schema_text(name: str) -> str:
    """Return a schema's text, from the installed package or from the checkout beside it."""
    packed = files("reconcile") / "schemas" / f"{name}.schema.json"
    if packed.is_file():
        return packed.read_text("utf-8")
    checkout = Path(__file__).resolve().parent.parent / "schemas"
    return (checkout / f"{name}.schema.json").read_text("utf-8")


@cache
def load_schema(name: str) -> dict[str, Any]:
    """Return a schema by name and version, such as ``case-1``."""
    schema: dict[str, Any] = json.loads(schema_text(name))
    return schema


def validate(document: Any, name: str) -> Iterator[SchemaFault]:
    """Yield every place where a document breaks its schema, as plain sentences."""
    from jsonschema import Draft202012Validator, FormatChecker  # noqa: PLC0415 - slow to import

    validator = Draft202012Validator(load_schema(name), format_checker=FormatChecker(["date"]))
    # a date of the wrong form breaks its pattern and its format; one sentence will do
    seen: set[tuple[Any, ...]] = set()
    for error in validator.iter_errors(document):
        place = tuple(error.absolute_path)
        if error.validator not in {"pattern", "format"} or place not in seen:
            yield from _explain(error)
        if error.validator in {"pattern", "format"}:
            seen.add(place)


@dataclass(frozen=True, slots=True)
class _Broken:
    """A validation error with its parts as plain values."""

    path: tuple[str | int, ...]
    rule: str
    limit: Any
    instance: Any
    schema: dict[str, Any]
    message: str


def _explain(error: ValidationError) -> Iterator[SchemaFault]:
    broken = _Broken(
        tuple(error.absolute_path),
        str(error.validator),
        error.validator_value,
        error.instance,
        dict(error.schema) if isinstance(error.schema, dict) else {},
        error.message,
    )
    if broken.rule == "additionalProperties":
        yield from _unknown(broken)
    elif broken.rule == "required":
        missing = [key for key in broken.limit if key not in broken.instance]
        # jsonschema raises one error per missing key, each naming it first
        key = next(k for k in missing if broken.message.startswith(repr(k)))
        yield SchemaFault(broken.path, f"{key!r} is missing", _hint(broken.schema, key))
    else:
        yield SchemaFault(broken.path, _sentence(broken), _example(broken))


def _unknown(error: _Broken) -> Iterator[SchemaFault]:
    known = list(error.schema.get("properties", {}))
    patterns = error.schema.get("patternProperties", {})
    for key in error.instance:
        if key in known or any(re.search(pattern, key) for pattern in patterns):
            continue
        near = get_close_matches(key, known, 1, 0.6)
        remedy = f"did you mean {near[0]!r}?" if near else f"known: {', '.join(sorted(known)[:12])}"
        if patterns:
            remedy = "use lower-case letters, digits and underscores, a letter first"
        yield SchemaFault((*error.path, key), "unknown key", remedy)


def _hint(schema: dict[str, Any], key: str) -> str:
    entry = schema.get("properties", {}).get(key, {})
    examples = entry.get("examples")
    return f"for example: {key} = {as_toml(examples[0])}" if examples else ""


def _example(broken: _Broken) -> str:
    examples = broken.schema.get("examples")
    if broken.rule != "type" or not examples or not broken.path:
        return ""
    return f"for example: {broken.path[-1]} = {as_toml(examples[0])}"


def as_toml(value: Any) -> str:
    """Return a value of an example as TOML writes it.

    Examples
    --------
    >>> print(as_toml({"value": "0.080 mL/g", "n": [1, True]}))
    { value = "0.080 mL/g", n = [1, true] }
    """
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {as_toml(entry)}" for key, entry in value.items()) + " }"
    if isinstance(value, list):
        return "[" + ", ".join(as_toml(entry) for entry in value) + "]"
    return json.dumps(value, ensure_ascii=False)


_TYPES = {
    "string": "a text in quotes", "number": "a number", "integer": "a whole number",
    "array": "a list", "object": "a table", "boolean": "true or false", "null": "nothing",
}  # fmt: skip


def _sentence(error: _Broken) -> str:
    found = json.dumps(error.instance, ensure_ascii=False, default=str)
    found = found if len(found) <= 60 else found[:57] + "…"
    rule, value = error.rule, error.limit
    if rule == "type":
        kinds = [value] if isinstance(value, str) else list(value)
        return f"found {found}, expected {' or '.join(_TYPES[k] for k in kinds)}"
    if rule == "enum":
        near = get_close_matches(str(error.instance), [str(v) for v in value], 1, 0.6)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        return f"found {found}, expected one of {', '.join(map(str, value))}{hint}"
    texts = {
        "const": f"found {found}, expected {value!r}",
        "minimum": f"found {found}, expected {value} or more",
        "exclusiveMinimum": f"found {found}, expected more than {value}",
        "maximum": f"found {found}, expected {value} or less",
        "minLength": f"found {found}, expected a text",
        "minItems": f"found {found}, expected at least {value} entries",
        "maxItems": f"found {found}, expected at most {value} entries",
        "uniqueItems": f"found {found}, expected each entry once",
        "format": f"found {found}, expected {error.schema.get('x-expected', value)}",
        "pattern": f"found {found}, expected {error.schema.get('x-expected', value)}",
        "minProperties": "is empty",
    }
    return texts.get(rule, f"found {found}, which breaks the rule {rule!r}")
