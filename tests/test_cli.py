"""The command line: exit codes, messages, streams, and the same bytes on a re-run."""

import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from conftest import CASES, DEMO, run_cli

from reconcile.schema import validate

GOOD = """\
case = 1

[sample]
name = "Lot 1"
polymer = "polystyrene"

[effects.stock]
target = "concentration"
u = "1 %"

[[osmometry]]
name = "osmometer"
solvent = "toluene"
temperature = "25 degC"
readings = "osmometry.csv"
liquid_density = "0.8618 g/mL"
u_reading = "0.1 mm"
effects = ["stock"]
"""
TABLE = "c [g/L],head [mm]\n2,5.2\n4,11.5\n6,19.0\n8,27.8\n"


def write(folder, case=GOOD, table=TABLE):
    (folder / "case.toml").write_text(case, encoding="utf-8")
    if table is not None:
        (folder / "osmometry.csv").write_text(table, encoding="utf-8")
    return folder / "case.toml"


def refused(path, *arguments):
    """Return the lines of standard error of a case that cannot be used."""
    result = run_cli("run", path, *arguments)
    assert result.exit_code == 3, result.output
    assert result.stdout == ""
    return result.stderr.splitlines()


def test_the_good_case_is_good(tmp_path):
    assert run_cli("run", write(tmp_path)).exit_code == 0
    assert run_cli("check", tmp_path / "case.toml").exit_code == 0


BROKEN = [
    (
        'u_reading = "0.1 mm"',
        'u_reading = "0.1 mg"',
        ['case.toml:17: osmometry[0].u_reading: "mg" is a unit of something else'],
    ),
    (
        'liquid_density = "0.8618 g/mL"',
        'liquid_density = "0.8618 mL/g"',
        ['case.toml:16: osmometry[0].liquid_density: "mL/g" is a viscosity number, expected a den'],
    ),
    (
        'solvent = "toluene"',
        'solvant = "toluene"',
        ["case.toml:13: osmometry[0].solvant: unknown key", "  did you mean 'solvent'?"],
    ),
    (
        'readings = "osmometry.csv"',
        'readings = "osmometri.csv"',
        ["osmometri.csv: does not exist", "  check the name and the folder"],
    ),
    (
        'temperature = "25 degC"',
        "temperature = 25",
        ["case.toml:14: osmometry[0].temperature: found 25, expected a text in quotes"],
    ),
    (
        'temperature = "25 degC"',
        'temperature = "25"',
        ['case.toml:14: osmometry[0].temperature: "25" has no unit, expected a temperature'],
    ),
    (
        'effects = ["stock"]',
        'effects = ["stok"]',
        ["case.toml:18: osmometry[0].effects: 'stok' is not under [effects]",
         "  did you mean 'stock'?"],
    ),
    (
        "[[osmometry]]",
        '[effects.stock]\ntarget = "dn_dc"\nu = "1 %"\n\n[[osmometry]]',
        ["case.toml:11: not valid TOML:", "  a key or an effect's id stands twice"],
    ),
    (
        'name = "Lot 1"',
        "name = Lot 1",
        ["case.toml:4: not valid TOML:", "  put texts in quotes"],
    ),
    (
        'u = "1 %"',
        "u = 1,5",
        ["case.toml:9: not valid TOML:", "  a decimal comma? write a point: 1.5"],
    ),
    (
        'target = "concentration"',
        'target = "concentratoin"',
        ['case.toml:8: effects.stock.target: found "concentratoin", expected one of'],
    ),
    (
        'liquid_density = "0.8618 g/mL"\n',
        "",
        ["case.toml:11: osmometry[0].liquid_density: is missing, and heads need it",
         "  give the density of the liquid in the manometer"],
    ),
    (
        "case = 1",
        "case = 2",
        ["case.toml:1: case: found 2, expected 1"],
    ),
    (
        'polymer = "polystyrene"\n',
        "",
        ["case.toml:3: sample: 'polymer' is missing", '  for example: polymer = "poly(vinyl'],
    ),
]  # fmt: skip


@pytest.mark.parametrize(("good", "bad", "expected"), BROKEN)
def test_a_broken_case_is_told_in_three_lines(tmp_path, good, bad, expected):
    assert GOOD.count(good) >= 1

    lines = refused(write(tmp_path, GOOD.replace(good, bad, 1)))

    assert len(lines) <= 3, lines
    for line, start in zip(lines, expected, strict=False):
        assert line.startswith(start), lines


TABLES = [
    ("", ["osmometry.csv: is empty"]),
    ("c [g/L],head [mm]\n", ["osmometry.csv:1: holds headings but no readings"]),
    (
        "c [g/L],head [mm]\n2,5.2\n4,high\n",
        ["osmometry.csv:3: column 'head': \"high\" is not a number, expected a number"],
    ),
    (
        "c [g/L],head [mm]\n2,5.2\n-4,11\n6,17\n",
        ["osmometry.csv:3: column 'c': found -0.004, expected more than 0"],
    ),
    (
        "c [g/L],head [mm]\n2,5.2\n2,5.3\n",
        ["case.toml:15: osmometry[0].readings: found 1 concentration, expected at least 2",
         "  one concentration cannot separate Mn from A2"],
    ),
    (
        "c,head [mm]\n2,5.2\n",
        ["osmometry.csv:1: column 'c': has no unit; expected a mass concentration",
         "  write the unit in brackets"],
    ),
    (
        "c [g/L],haed [mm]\n2,5.2\n",
        ["osmometry.csv:1: column 'haed [mm]': unknown heading, expected one of c, head, pi;"],
    ),
    (
        "c [g/L],head [mbar]\n2,5.2\n",
        ["osmometry.csv:1: column 'head [mbar]': \"mbar\" is a pressure, expected a length"],
    ),
    (
        "c [g/L],head [mm]\n2,5.2,7\n4,11\n",
        ["osmometry.csv:2: found 3 cells, expected 2 as in the headings"],
    ),
    (
        "c [g/L],head [mm]\n2,\n4,11\n",
        ["osmometry.csv:2: found 1 cells, expected 2 as in the headings"],
    ),
    (
        "c [g/L],c [g/L],head [mm]\n2,2,5\n",
        ["osmometry.csv:1: column 'c [g/L]': stands twice"],
    ),
    (
        "c [g/L];head [mm]\n2,0;5.2\n4,0;11\n",
        ["osmometry.csv:2: found '2,0' and '5.2': decimal comma and decimal point"],
    ),
    ("c [g/L],head [mm]\n2,inf\n4,11\n", ["osmometry.csv:2: column 'head': \"inf\" is not a"]),
    ('c [g/L],head [mm]\n2,"5.2\n', ["osmometry.csv:2: has an unfinished quote"]),
]  # fmt: skip


@pytest.mark.parametrize(("table", "expected"), TABLES)
def test_a_broken_table_is_told_in_three_lines(tmp_path, table, expected):
    lines = refused(write(tmp_path, table=table))

    assert len(lines) <= 3, lines
    for line, start in zip(lines, expected, strict=False):
        assert line.startswith(start), lines


def test_every_problem_is_told_at_once(tmp_path):
    bad = GOOD.replace("0.1 mm", "0.1 mbars").replace('"1 %"', '"1"').replace('stock"]', 'x"]')

    lines = refused(write(tmp_path, bad, "c [g/L],head [mm]\n2,x\n"))

    text = "\n".join(lines)
    assert "effects.stock.u" in text
    assert "u_reading" in text
    assert "'x' is not under [effects]" in text
    assert "column 'head'" in text


def test_two_files_with_one_effect(tmp_path):
    case = GOOD.replace("[effects.stock]", 'include = ["shared.toml"]\n\n[effects.stock]')
    case = case.replace('include = ["shared.toml"]\n\n', "").replace(
        "case = 1\n", 'case = 1\ninclude = ["shared.toml"]\n'
    )
    (tmp_path / "shared.toml").write_text('[effects.stock]\ntarget = "dn_dc"\nu = "1 %"\n')

    lines = refused(write(tmp_path, case))

    assert lines[0] == "shared.toml:1: effects.stock: this effect's id is already in case.toml"
    assert len(lines) == 2


def test_included_effects_act(tmp_path):
    case = GOOD.replace('[effects.stock]\ntarget = "concentration"\nu = "1 %"\n', "").replace(
        "case = 1\n", 'case = 1\ninclude = ["shared.toml"]\n'
    )
    (tmp_path / "shared.toml").write_text('[effects.stock]\ntarget = "concentration"\nu = "1 %"\n')

    shared = run_cli("run", write(tmp_path, case), "--json")
    own = run_cli("run", write(tmp_path, GOOD), "--json")

    first, second = json.loads(shared.stdout), json.loads(own.stdout)
    assert first["measurements"] == second["measurements"]
    assert [entry["path"] for entry in first["inputs"]] == [
        "case.toml", "shared.toml", "osmometry.csv",
    ]  # fmt: skip


def test_tables_stay_in_the_case_folder(tmp_path):
    inner = tmp_path / "inner"
    inner.mkdir()
    (tmp_path / "osmometry.csv").write_text(TABLE)
    path = write(inner, GOOD.replace('"osmometry.csv"', '"../osmometry.csv"'), table=None)

    lines = refused(path)

    assert "lies outside the case's folder" in lines[0]
    assert run_cli("run", path, "--allow-outside").exit_code == 0


@pytest.mark.parametrize(
    "make",
    [
        lambda p: p.mkdir(),
        lambda p: p.write_bytes(b"\xff\xfe\x00\x01\x02"),
        lambda p: p.write_bytes(b"\x00" * 100),
        lambda p: p.write_text("a = [" * 3000),
        lambda p: p.write_text(""),
    ],
    ids=["folder", "bytes", "zeros", "deep", "empty"],
)
def test_what_is_no_case(tmp_path, make):
    path = tmp_path / "case.toml"
    make(path)

    assert 1 <= len(refused(path)) <= 4


def test_missing_case():
    result = run_cli("run", "nowhere.toml")

    assert result.exit_code == 3
    assert result.stderr == "nowhere.toml: does not exist\n  check the name and the folder\n"


def test_no_estimate_is_exit_4(tmp_path):
    case = GOOD.split("[[osmometry]]", maxsplit=1)[0] + (
        '[[stated]]\nquantity = "A2"\nvalue = "4e-4 mol mL/g^2"\nu = "5 %"\n'
    )

    result = run_cli("run", write(tmp_path, case))

    assert result.exit_code == 4
    assert "no measurement observes the molar-mass distribution" in result.stderr
    assert run_cli("reduce", tmp_path / "case.toml").exit_code == 0


def test_usage_is_exit_2():
    assert run_cli("run").exit_code == 2
    assert run_cli("rum").exit_code == 2
    assert run_cli("run", DEMO, "--nonsense").exit_code == 2


def test_contradiction_can_be_exit_5(tmp_path):
    stated = "".join(
        f'[[stated]]\nquantity = "{q}"\nvalue = "{v} kg/mol"\nu = "3 %"\n\n'
        for q, v in (("Mn", 200), ("Mw", 100))
    )
    path = write(tmp_path, GOOD.split("[[osmometry]]", maxsplit=1)[0] + stated)

    assert run_cli("run", path).exit_code == 0
    result = run_cli("run", path, "--fail-on-contradiction")
    assert result.exit_code == 5
    text = " ".join(result.stdout.split())
    assert "No molar-mass distribution of any shape has these averages" in text
    assert "not named yet" in text


def test_json_is_one_document_and_obeys_its_schema(demo):
    assert list(validate(demo, "result-1")) == []
    assert demo["consistency"]["p_no_fault"] is None
    assert demo["explanations"] is None


@pytest.mark.parametrize("folder", sorted(p.name for p in CASES.iterdir()))
def test_published_cases_obey_the_schema_reduced_and_run(folder):
    for command in ("reduce", "run"):
        result = run_cli(command, CASES / folder / "case.toml", "--json")
        assert result.exit_code == 0, result.stderr
        assert list(validate(json.loads(result.stdout), "result-1")) == []


def test_a_rerun_gives_the_same_bytes(tmp_path):
    """Two processes, two folders, the same result document to the byte."""
    texts = []
    for name in ("one", "two"):
        folder = tmp_path / name
        shutil.copytree(DEMO.parent, folder)
        done = subprocess.run(
            [sys.executable, "-m", "reconcile", "run", str(folder / "case.toml"), "--json"],
            capture_output=True, check=True, timeout=120,
        )  # fmt: skip
        texts.append(done.stdout)

    assert texts[0] == texts[1]
    assert texts[0].endswith(b"}\n")


def test_report_redraws_the_same_text(tmp_path):
    out = tmp_path / "out"
    first = run_cli("run", DEMO, "--out", out)
    assert first.exit_code == 0

    again = run_cli("report", out / "result.json", "--out", tmp_path / "again")

    assert again.stdout == first.stdout
    names = sorted(p.name for p in out.iterdir())
    assert names == ["distribution.csv", "quantities.csv", "report.txt", "result.json"]
    for name in names:
        assert (out / name).read_bytes() == (tmp_path / "again" / name).read_bytes()


def test_report_refuses_what_is_no_result(tmp_path):
    path = tmp_path / "result.json"
    for text in ("", "{", "[]", '{"result": 1}', '{"result": NaN}'):
        path.write_text(text)
        result = run_cli("report", path)
        assert result.exit_code == 3, text
        assert "Traceback" not in result.stderr


def test_out_never_writes_over_an_input(tmp_path):
    path = write(tmp_path, GOOD.replace('"osmometry.csv"', '"quantities.csv"'), table=None)
    (tmp_path / "quantities.csv").write_text(TABLE)

    result = run_cli("run", path, "--out", tmp_path)

    assert result.exit_code == 3
    assert "is an input of this case" in result.stderr
    assert (tmp_path / "quantities.csv").read_text() == TABLE
    assert not (tmp_path / "result.json").exists()


def test_out_that_is_a_file_is_refused(tmp_path):
    (tmp_path / "out").write_text("mine")
    result = run_cli("run", DEMO, "--out", tmp_path / "out")

    assert result.exit_code == 2
    assert (tmp_path / "out").read_text() == "mine"


def test_terminal_text_fits_80_columns(tmp_path):
    long_name = "Lot <script> " + "x" * 90
    path = write(
        tmp_path, GOOD.replace("Lot 1", long_name).replace('"osmometer"', f'"{long_name}"')
    )

    for arguments in (("run", path), ("run", path, "-v"), ("reduce", path), ("check", path)):
        result = run_cli(*arguments)
        assert result.exit_code == 0, result.stderr
        wide = [line for line in result.stdout.splitlines() if len(line) > 80]
        assert wide == []


def test_ascii_terminals_get_ascii():
    environment = {**os.environ, "PYTHONIOENCODING": "ascii", "NO_COLOR": "1"}
    done = subprocess.run(
        [sys.executable, "-m", "reconcile", "run", str(DEMO)],
        capture_output=True, check=True, timeout=120, env=environment,
    )  # fmt: skip

    text = done.stdout.decode("ascii")
    assert "+/-" in text
    assert "?" not in re.sub(r"\?$", "", text)


def test_check_says_what_will_be_used():
    text = run_cli("check", DEMO).stdout

    assert "osmometry.csv: 12 rows; c [g/L], head [mm]" in text
    assert "effect stock: concentration, u = 0.8 %" in text
    assert "liquid_density = 0.7997 g/mL" in text
    assert "3 measurements can be used." in text


def test_tables_are_safe_to_open_in_a_spreadsheet(tmp_path):
    path = write(tmp_path, GOOD.replace('"osmometer"', '"=cmd()"'))
    run_cli("run", path, "--out", tmp_path / "out")

    text = (tmp_path / "out" / "quantities.csv").read_text(encoding="utf-8")

    assert "\n'=cmd()," in text
    assert "\n=cmd()" not in text


@pytest.mark.parametrize("command", ["run", "check", "reduce", "report"])
def test_every_command_is_in_the_readme(command):
    readme = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")

    assert f"reconcile {command}" in readme
    assert command in run_cli("--help").stdout
    assert run_cli(command, "-h").exit_code == 0


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("consistency",), None),
        (("consistency", "chi2"), None),
        (("consistency", "residuals"), []),
        (("limits", 0, "probability_met"), None),
        (("measurements", 0, "quantities"), {}),
        (("measurements", 0, "readings", 0, "values"), [1, 2]),
        (("estimate", "self_check", "effective_fraction"), None),
        (("estimate", "budget"), []),
        (("estimate", "averages", "Mn", "value"), None),
    ],
)
def test_a_result_that_was_tampered_with_is_refused_or_drawn(tmp_path, demo, path, value):
    document = json.loads(json.dumps(demo))
    parent = document
    for key in path[:-1]:
        parent = parent[key]
    parent[path[-1]] = value
    (tmp_path / "result.json").write_text(json.dumps(document))

    assert run_cli("report", tmp_path / "result.json", "-v").exit_code in {0, 3}
