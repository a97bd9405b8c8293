"""Case documents: what is read, what is refused and how it is said, and any text at all.

`broken/` holds one document per mistake; beside each, in a `.txt`, stands what a user is told.
"""

import json
import re
import tomllib
from datetime import date
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from reconcile.case import load_case
from reconcile.errors import InputError
from reconcile.measurement import EFFECT_TARGETS, ColumnSpec, Quantity
from reconcile.schema import load_schema, validate
from reconcile.toml_lines import line_map, line_of
from reconcile.units import KINDS, parse_quantity, parse_uncertainty

HERE = Path(__file__).parent
BROKEN = HERE / "broken"
TABLES = {
    "osmometry": {
        "c": ColumnSpec(("concentration",), required=True),
        "head": ColumnSpec(("length",)),
    },
    "viscometry": {
        "c": ColumnSpec(("concentration",), required=True),
        "t": ColumnSpec(("time",)),
    },
}
CASE = """\
case = 1
include = ["shared/effects.toml"]

[sample]
name = "Binder lot 0417"
polymer = "poly(vinyl acetate)"
repeat_unit = "86.09 g/mol"
solids = { value = 0.985, u = 0.004 }
note = "dried"

[effects.stock]
target = "concentration"
u = "0.8 %"
description = "one weighed stock"

[[stated]]
quantity = "Mn"
value = "131 kg/mol"
u = "4 %"

[[stated]]
name = "by ratio"
quantity = "dispersity"
value = 2.1
u = 0.2

[[viscometry]]
name = "capillary"
readings = "heads.csv"
effects = ["stock"]

[[osmometry]]
name = "osmometer"
date = 2026-03-04
solvent = "butanone"
temperature = "25 degC"
readings = "heads.csv"
u_reading = "0.1 mm"
effects = ["stock", "kept_elsewhere"]
note = "second fill"

[limits]
Mn = { min = "100 kg/mol" }
Mw = ["240 kg/mol", "280 kg/mol"]
dispersity = { max = 2.2 }
"""
EFFECTS = """\
[effects.kept_elsewhere]
target = "pressure"
u = "0.2 %"
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "shared").mkdir()
    (tmp_path / "shared" / "effects.toml").write_text(EFFECTS, encoding="utf-8")
    (tmp_path / "heads.csv").write_text("c [g/L]\n1.5\n3.0\n", encoding="utf-8")
    (tmp_path / "case.toml").write_text(CASE, encoding="utf-8")
    return tmp_path


@pytest.fixture
def case(folder):
    return load_case(folder / "case.toml", TABLES)


def refusal(path, **options):
    with pytest.raises(InputError) as error:
        load_case(path, TABLES, **options)
    return error.value


def test_measurements_in_the_order_of_the_techniques(case):
    names = [(m.technique, m.name) for m in case.measurements]

    assert names == [
        ("osmometry", "osmometer"),
        ("viscometry", "capillary"),
        ("stated", "stated Mn"),
        ("stated", "by ratio"),
    ]


def test_a_measurement(case):
    found = case.measurements[0]

    assert (found.date, found.solvent, found.temperature) == ("2026-03-04", "butanone", 298.15)
    assert found.effects == ("stock", "kept_elsewhere")
    assert found.fields == {"u_reading": Quantity(0.1 * 0.1, "length", "0.1 mm")}
    assert found.table.columns["c"].tolist() == [0.0015, 0.003]
    assert str(found.place.problem("u_reading", "is odd")) == (
        f"case.toml:{CASE[: CASE.index('u_reading')].count(chr(10)) + 1}: "
        "osmometry[0].u_reading: is odd"
    )


def test_stated_values(case):
    first, second = (m.fields for m in case.measurements[2:])

    assert (first["value"].value, first["u"].value, first["u"].kind) == (131e3, 0.04, "ratio")
    assert (second["value"], second["u"]) == (2.1, 0.2)


def test_sample_effects_and_limits(case):
    assert (case.sample.solids, case.sample.u_solids) == (0.985, 0.004)
    assert case.sample.fields["repeat_unit"].value == pytest.approx(86.09, rel=1e-15)
    assert {key: (e.target, e.u) for key, e in case.effects.items()} == {
        "stock": ("concentration", 0.008),
        "kept_elsewhere": ("pressure", 0.002),
    }
    assert case.limits == {
        "Mn": (100e3, None),
        "Mw": (240e3, 280e3),
        "dispersity": (None, 2.2),
    }


def test_every_file_counts_in_the_digest(folder, case):
    digests = {case.digest}
    for name in ("case.toml", "heads.csv", "shared/effects.toml"):
        with (folder / name).open("a", encoding="utf-8") as file:
            file.write("# touched\n")
        digests.add(load_case(folder / "case.toml", TABLES).digest)

    assert [name for name, _ in case.inputs] == ["case.toml", "shared/effects.toml", "heads.csv"]
    assert len(digests) == 4


@pytest.mark.parametrize("change", [str.encode, lambda text: b"\xef\xbb\xbf" + text.encode()])
def test_editors_of_other_systems(folder, case, change):
    (folder / "case.toml").write_bytes(change(CASE.replace("\n", "\r\n")))

    found = load_case(folder / "case.toml", TABLES)

    assert found.measurements[0].fields == case.measurements[0].fields
    assert found.measurements[0].place == case.measurements[0].place


@pytest.mark.parametrize("path", sorted(BROKEN.glob("*.txt")), ids=lambda path: path.stem)
def test_broken_document_to_the_letter(path):
    error = refusal(path.with_suffix(".toml"))

    assert str(error) == path.read_text(encoding="utf-8").rstrip("\n")
    assert all(str(problem).count("\n") <= 2 for problem in error.problems)


def test_every_broken_file_is_used():
    texts = [path.read_text(encoding="utf-8", errors="replace") for path in BROKEN.glob("*.toml")]
    unused = [
        path.name
        for path in BROKEN.iterdir()
        if path.suffix != ".txt"
        and not path.with_suffix(".txt").exists()
        and not any(path.name in text for text in texts)
    ]

    assert unused == []


def test_case_that_cannot_be_read(tmp_path):
    assert str(refusal(tmp_path / "none.toml")).startswith("none.toml: does not exist\n")
    assert str(refusal(tmp_path)).startswith(f"{tmp_path.name}: is not a file\n")


@pytest.mark.parametrize(
    "value",
    ["[" * 30 + "]" * 30, "[" * 5000 + "]" * 5000, "1" * 5000, "{a=" * 30 + "1" + "}" * 30],
)
def test_monsters_are_refused(tmp_path, value):
    (tmp_path / "case.toml").write_text(f"case = {value}")

    found = str(refusal(tmp_path / "case.toml"))

    assert "nested too deeply" in found or "too many digits" in found


def test_outside_only_when_allowed(folder):
    inner = folder / "inner"
    inner.mkdir()
    text = CASE.replace('"heads.csv"', '"../heads.csv"').replace('"shared', '"../shared')
    (inner / "case.toml").write_text(text, encoding="utf-8")
    (inner / "link.csv").symlink_to(folder / "heads.csv")
    (inner / "linked.toml").write_text(CASE.replace("heads", "link").replace("shared", "../shared"))

    assert str(refusal(inner / "case.toml")).count("lies outside the case's folder") == 3
    assert str(refusal(inner / "linked.toml")).count("'link.csv' lies outside") == 2
    assert len(load_case(inner / "case.toml", TABLES, allow_outside=True).measurements) == 4


# --- the schema


def fields(schema, path=()):
    """Yield every (path, rules) of the fields a user can write."""
    for key, rules in schema.get("properties", {}).items():
        if not (path and path[-1] == "then"):
            yield (*path, key), rules
        yield from fields(rules, (*path, key))
    for part in ("items", "then"):
        if isinstance(schema.get(part), dict):
            yield from fields(schema[part], (*path, part))
    for group in ("$defs", "patternProperties"):
        for key, rules in schema.get(group, {}).items():
            yield from fields(rules, (*path, key))


def objects(schema):
    if isinstance(schema, dict):
        if schema.get("type") == "object" or "object" in schema.get("type", ()):
            yield schema
        for part in schema.values():
            yield from objects(part)
    elif isinstance(schema, list):
        for part in schema:
            yield from objects(part)


def test_schema_is_valid_and_closed():
    schema = load_schema("case-1")
    text = json.dumps(schema)

    Draft202012Validator.check_schema(schema)
    assert all(part.get("additionalProperties") is False for part in objects(schema))
    assert '"oneOf"' not in text
    assert '"anyOf"' not in text
    assert all(ref.startswith("#/$defs/") for ref in re.findall(r'"\$ref": "([^"]*)"', text))


def test_every_field_is_described():
    found = list(fields(load_schema("case-1")))

    assert len(found) > 90
    assert [path for path, rules in found if not ({"description", "$ref"} & set(rules))] == []


def test_every_example_is_read_by_its_own_rules():
    checked = 0
    for _, rules in fields(load_schema("case-1")):
        for example in rules.get("examples", []):
            Draft202012Validator(rules).validate(example)
            if "x-kind" in rules:
                kinds = [rules["x-kind"]] if isinstance(rules["x-kind"], str) else rules["x-kind"]
                assert parse_quantity(example, kinds).kind in KINDS
                checked += 1
            elif "x-uncertainty" in rules:
                assert parse_uncertainty(example, rules["x-uncertainty"]).value > 0.0
                checked += 1

    assert checked > 30


def test_effect_targets_are_known_to_the_program():
    targets = load_schema("case-1")["$defs"]["effect"]["properties"]["target"]["enum"]

    assert set(targets) <= set(EFFECT_TARGETS)


@pytest.mark.parametrize(
    "path",
    [*HERE.glob("cases/*/case.toml"), *HERE.parent.glob("examples/*/case.toml")],
    ids=lambda path: path.parent.name,
)
def test_shipped_cases_obey_the_schema(path):
    data = tomllib.loads(path.read_text(encoding="utf-8"))

    assert list(validate(data, "case-1")) == []


# --- any text at all

KEYS = st.sampled_from(
    ["case", "sample", "effects", "include", "osmometry", "stated", "viscometry", "limits", "name",
     "polymer", "readings", "u", "value", "quantity", "target", "Mw", "min", "temperature", "date",
     "solids", "mark_houwink", "K", "M_range", "", "a\nb", "x" * 300]
)  # fmt: skip
LEAVES = st.one_of(
    st.sampled_from(
        ["1 %", "131 kg/mol", "Mn", "dispersity", "heads.csv", "stock", "25 degC", "", "\x00",
         "../x", 1, 0, -1, 2.1, float("nan"), float("inf"), 10**400, True, date(2026, 3, 4)]
    ),
    st.text(max_size=5),
)  # fmt: skip
VALUES = st.recursive(
    LEAVES,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(KEYS, inner, max_size=4)),
    max_leaves=12,
)


def toml(value):
    """Return a value as TOML on one line."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(k)} = {toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=True).replace("\x7f", "\\u007f")
    if isinstance(value, bool):
        return str(value).lower()
    return str(value)


@pytest.fixture(scope="module")
def scratch(tmp_path_factory):
    folder = tmp_path_factory.mktemp("scratch")
    (folder / "heads.csv").write_text("c [g/L]\n1.5\n", encoding="utf-8")
    return folder


def read_or_refuse(folder, content):
    (folder / "case.toml").write_bytes(content)
    problems = ()
    try:
        load_case(folder / "case.toml", TABLES)
    except InputError as error:
        problems = error.problems
    assert all(len(str(problem).splitlines()) <= 3 for problem in problems)


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.dictionaries(KEYS, VALUES, max_size=5))
def test_any_document_is_read_or_refused(scratch, document):
    text = "".join(f"{json.dumps(key)} = {toml(value)}\n" for key, value in document.items())

    read_or_refuse(scratch, text.encode("utf-8", "replace"))


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(KEYS, KEYS, VALUES)
def test_a_good_document_with_one_bad_value_is_read_or_refused(scratch, section, key, value):
    head = 'case = 1\nsample = {name = "a", polymer = "b"}\n'
    text = f"{head}[[stated]]\n{json.dumps(key)} = {toml(value)}\n"
    if section not in {"case", "sample", "stated"}:
        text = f"{head}{json.dumps(section)} = {toml(value)}\n"

    read_or_refuse(scratch, text.encode("utf-8", "replace"))


def places(value, path=()):
    """Yield the path of every value in a document."""
    entries = value.items() if isinstance(value, dict) else enumerate(value)
    for key, entry in entries:
        yield (*path, key)
        if isinstance(entry, (dict, list)):
            yield from places(entry, (*path, key))


def changed(value, path, new):
    """Return a document with one value exchanged."""
    if not path:
        return new
    entries = dict(value) if isinstance(value, dict) else list(value)
    entries[path[0]] = changed(value[path[0]], path[1:], new)
    return entries


ODD = [5, True, "", "nowhere", "1 %", float("nan"), 10**400, [], {}, [[1]], [{"a": 1}], {"b": [1]}]


@pytest.mark.parametrize("path", list(places(tomllib.loads(CASE))), ids=str)
def test_any_value_in_any_place_is_read_or_refused(folder, path):
    document = tomllib.loads(CASE)
    for odd in ODD:
        new = changed(document, path, odd)
        text = "".join(f"{key} = {toml(value)}\n" for key, value in new.items())

        read_or_refuse(folder, text.encode())


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.binary(max_size=100))
def test_any_bytes_are_read_or_refused(scratch, content):
    read_or_refuse(scratch, content)


# --- lines


def test_lines_of_keys():
    text = (
        "a = 1 # [x]\n"
        "'b c'.\"d\\\"e\" = '''\n[not.a.header]\nx = 1\n'''\n"
        "[t]\n"
        "list = [\n  { k = 1 }, # ]\n  2,\n]\n"
        'after = "]"\n'
        "[[m]]\n[[m]]\n[m.sub]\nk = 1\n[[m.n]]\nk = 2\n"
    )
    lines = line_map(text)

    assert lines == {
        (): 1,
        ("a",): 1,
        ("b c",): 2,
        ("b c", 'd"e'): 2,
        ("t",): 6,
        ("t", "list"): 7,
        ("t", "after"): 11,
        ("m",): 12,
        ("m", 0): 12,
        ("m", 1): 13,
        ("m", 1, "sub"): 14,
        ("m", 1, "sub", "k"): 15,
        ("m", 1, "n"): 16,
        ("m", 1, "n", 0): 16,
        ("m", 1, "n", 0, "k"): 17,
    }
    assert line_of(("t", "list", 0, "k"), lines) == 7


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.lists(st.tuples(st.sampled_from("abc[="), st.text(max_size=8), VALUES), max_size=6))
def test_lines_of_any_document(parts):
    text, expected = "", {}
    for index, (sign, noise, value) in enumerate(parts):
        comment = "".join(c for c in noise if c.isprintable())
        text += f"# {comment}{sign}\n[[t]]\n"
        expected["t", index] = text.count("\n")
        text += f'note = """{"".join(c for c in comment if c.isalnum())}\n[[t]]\nk = 1"""\n'
        text += f"k = {toml(value)} # {sign}\n"
        expected["t", index, "k"] = text.count("\n")

    lines = line_map(text)

    assert {path: lines[path] for path in expected} == expected
