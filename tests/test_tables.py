"""Tables: what is read, what is refused and how it is said, and any bytes at all."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from reconcile import tables
from reconcile.errors import InputError
from reconcile.measurement import ColumnSpec
from reconcile.tables import read_table

COLUMNS = {
    "c": ColumnSpec(("concentration",), ("conc", "concentration"), required=True),
    "t": ColumnSpec(("time",), ("time",)),
    "angle": ColumnSpec(("angle",), ("theta", "θ")),
    "R": ColumnSpec(("rayleigh_ratio",)),
    "Kc_R": ColumnSpec(("inverse_molar_mass",), ("Kc/R",)),
    "eta_r": ColumnSpec(("ratio",)),
}


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("tables")


@pytest.fixture
def read(tmp_path):
    def reader(content):
        path = tmp_path / "t.csv"
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return read_table(path, "t.csv", COLUMNS)[0]

    return reader


@pytest.fixture
def refused(read):
    """Return a function: content → the problems, as the lines a user sees."""

    def reader(content):
        with pytest.raises(InputError) as refusal:
            read(content)
        assert all(str(problem).count("\n") < 3 for problem in refusal.value.problems)
        return str(refusal.value).split("\n")

    return reader


@pytest.mark.parametrize(
    ("heading", "key", "factor"),
    [
        ("c [g/L]", "c", 1e-3),
        ("c (g/L)", "c", 1e-3),
        ("c / g L-1", "c", 1e-3),
        ("c/(g/L)", "c", 1e-3),
        ("c, g/L", "c", 1e-3),
        ("c in g/L", "c", 1e-3),
        ("C [g/100 mL]", "c", 1e-2),
        ("Concentration [mg/mL]", "c", 1e-3),
        ("t/s", "t", 1.0),
        ("Time [min]", "t", 60.0),
        ("Θ [°]", "angle", np.pi / 180.0),
        ("Kc/R [mol/g]", "Kc_R", 1.0),
        ("eta_r", "eta_r", 1.0),
        ("eta_r [-]", "eta_r", 1.0),
        ("eta_r [%]", "eta_r", 0.01),
    ],
)
def test_headings(read, heading, key, factor):
    table = read(f"note;c [g/L];{heading}\nx;1;3\n" if key != "c" else f"note;{heading}\nx;3\n")

    assert table.columns[key].tolist() == [pytest.approx(3.0 * factor, rel=1e-15)]


@pytest.mark.parametrize(
    "content",
    [
        "c [g/L],t [s]\n1.5,100\n2.5,110\n",
        "c [g/L];t [s]\n1.5;100\n2.5;110\n",
        "c [g/L]\tt [s]\n1.5\t100\n2.5\t110\n",
        "c [g/L];t [s]\n1,5;100\n2,5;110\n",
        "c, g/L;t, s\n1,5;100\n2,5;110\n",
        "c [g/L],t [s],comment\n1.5,100,\n2.5,110,shaken; twice\n",
        "# by hand\n\nc [g/L],t [s]\n\n1.5,100\n#1.7,99\n2.5,110\n,\n",
        "c [g/L],t [s],,\r\n1.5,100,,\r\n2.5,110,,\r\n,,,\r\n",
        '"c [g/L]","t [s]"\n"1.5","100"\n 2.5 , 110 ',
        "t [s],c [g/L]\n100,1.5\n+110.,25e-1\n",
        "c [g/L];t [s];remarks, if any\n1,5;100;ok, fine\n2,5;110;\n",
    ],
)
def test_layouts_that_mean_the_same(read, content):
    table = read(content)

    assert table.columns["c"].tolist() == [0.0015, 0.0025]
    assert table.columns["t"].tolist() == [100.0, 110.0]


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "cp1252"])
def test_encodings(read, encoding):
    table = read("c [g/L],angle [°],comment\n1,90,Größe\n".encode(encoding))

    assert table.columns["angle"].tolist() == [pytest.approx(np.pi / 2.0, rel=1e-15)]
    assert table.units == {"c": "g/L", "angle": "°"}


def test_columns_are_read_only_and_lines_are_those_of_the_file(read):
    table = read("# head\nc [g/L]\n1\n\n2\n")

    assert (len(table), table.lines, table.file) == (2, (3, 5), "t.csv")
    with pytest.raises(ValueError, match="read-only"):
        table.columns["c"][0] = 0.0


# what is wrong: content, and the message to the letter
REFUSED = {
    "text in a cell": (
        "c [g/L],t [s]\n1,100\n2,n.d.\n",
        [
            "t.csv:3: column 't': \"n.d.\" is not a number, expected a number",
        ],
    ),
    "blank cell": (
        "c [g/L],t [s]\n,100\n2,3\n",
        [
            "t.csv:2: column 'c': is blank, expected a number",
        ],
    ),
    "not a number": (
        "c [g/L],t [s]\nnan,inf\n",
        [
            "t.csv:2: column 'c': \"nan\" is not a number, expected a number",
            "t.csv:2: column 't': \"inf\" is not a number, expected a number",
        ],
    ),
    "too large": (
        "c [g/L],t [h]\n1,1e308\n",
        [
            "t.csv:2: column 't': \"1e308\" is too large, expected a number",
        ],
    ),
    "decimal comma is the separator": (
        "c [g/L],t [s]\n1,5,100\n",
        [
            "t.csv:2: found 3 cells, expected 2 as in the headings",
        ],
    ),
    "comma and point": (
        "c [g/L];t [s]\n1,5;100.2\n",
        [
            "t.csv:2: found '1,5' and '100.2': decimal comma and decimal point",
            "  use one of the two, and no thousands marks",
        ],
    ),
    "perhaps thousands": (
        "c [g/L];t [s]\n1;1,250\n2;1,300\n",
        [
            "t.csv:2: found '1,250': a decimal comma or a thousands mark?",
            "  write a decimal point",
        ],
    ),
    "unknown heading": (
        "c [g/L],tine [s]\n1,100\n",
        [
            (
                "t.csv:1: column 'tine [s]': unknown heading, "
                "expected one of c, t, angle, R, Kc_R, eta_r; did you mean 't'?"
            ),
        ],
    ),
    "unknown heading, nothing near": (
        "c [g/L],operator\n1,2\n",
        [
            (
                "t.csv:1: column 'operator': unknown heading, "
                "expected one of c, t, angle, R, Kc_R, eta_r"
            ),
        ],
    ),
    "heading twice": (
        "c [g/L],conc [g/mL]\n1,100\n",
        [
            "t.csv:1: column 'conc [g/mL]': stands twice",
        ],
    ),
    "column missing": (
        "t [s]\n100\n",
        [
            "t.csv:1: has no column 'c'",
            "  found: t [s]",
        ],
    ),
    "no unit": (
        "c,t [s]\n1,100\n",
        [
            "t.csv:1: column 'c': has no unit; expected a mass concentration such as \"5 g/L\"",
            "  write the unit in brackets: c [unit]",
        ],
    ),
    "unit of something else": (
        "c [mbar]\n1\n",
        [
            (
                "t.csv:1: column 'c [mbar]': \"mbar\" is a pressure, "
                'expected a mass concentration such as "5 g/L"'
            ),
            "  write the unit in brackets: c [unit]",
        ],
    ),
    "unit mistyped": (
        "c [g/LL]\n1\n",
        [
            (
                "t.csv:1: column 'c [g/LL]': \"LL\" is not a unit, "
                'expected a mass concentration such as "5 g/L"; did you mean "g/L"?'
            ),
            "  write the unit in brackets: c [unit]",
        ],
    ),
    "no headings": (
        "1,100\n2,110\n",
        [
            ("t.csv:1: column '1': unknown heading, expected one of c, t, angle, R, Kc_R, eta_r"),
            ("t.csv:1: column '100': unknown heading, expected one of c, t, angle, R, Kc_R, eta_r"),
        ],
    ),
    "ragged": (
        "c [g/L],t [s]\n1\n2,3,4\n5,x\n",
        [
            "t.csv:2: found 1 cells, expected 2 as in the headings",
            "t.csv:3: found 3 cells, expected 2 as in the headings",
        ],
    ),
    "empty": (
        "\n# nothing\n",
        [
            "t.csv: is empty",
            "  expected headings and readings",
        ],
    ),
    "headings only": (
        "c [g/L],t [s]\n",
        [
            "t.csv:1: holds headings but no readings",
        ],
    ),
    "open quote": (
        'c [g/L],t [s]\n"1,2\n',
        [
            "t.csv:2: has an unfinished quote",
        ],
    ),
    "a picture": (
        b"\x89PNG\r\n\x1a\n\x00\x00",
        [
            "t.csv: is not a text table",
            "  save it as CSV in UTF-8",
        ],
    ),
}


@pytest.mark.parametrize("what", REFUSED)
def test_refusal_to_the_letter(refused, what):
    content, expected = REFUSED[what]

    assert refused(content) == expected


def test_files_that_cannot_be_read(tmp_path, monkeypatch):
    def said(name):
        with pytest.raises(InputError) as refusal:
            read_table(tmp_path / name, name[:10], COLUMNS)
        return str(refusal.value).split("\n")[0]

    (tmp_path / "large.csv").write_text("c [g/L]\n1\n")
    (tmp_path / "folder").mkdir()
    monkeypatch.setattr(tables, "MAX_BYTES", 5)

    assert said("missing.csv") == "missing.cs: does not exist"
    assert said("folder") == "folder: is not a file"
    assert said("a\x00b") == "a\x00b: does not exist"
    assert said("x" * 5000) == "xxxxxxxxxx: file name too long"
    assert said("large.csv").startswith("large.csv: has 0 MB, expected at most")


def test_too_many_rows(refused, monkeypatch):
    monkeypatch.setattr(tables, "MAX_ROWS", 2)

    assert refused("c [g/L]\n1\n2\n") == [
        "t.csv: has 3 rows, expected at most 2",
        "  average the scans first",
    ]


CELLS = st.sampled_from(
    ["c [g/L]", "t [s]", "note", "1", "2.5", "2,5", "1,234", "", "x", '"', "#", ";", ",", "\t",
     "\n", "\r\n", "\x00", "é", "\x85", "\u2028", "1e400", "[", "]", "(", "/"]
)  # fmt: skip


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.one_of(st.binary(max_size=200), st.lists(CELLS, max_size=40).map("".join).map(str.encode))
)
def test_any_bytes_are_read_or_refused(folder, content):
    path = folder / "any.csv"
    path.write_bytes(content)
    said = ()
    try:
        table, _ = read_table(path, "any.csv", COLUMNS)
    except InputError as refusal:
        said = refusal.problems
    else:
        assert {len(column) for column in table.columns.values()} == {len(table)}
        assert all(np.isfinite(column).all() for column in table.columns.values())

    assert all(len(str(problem).splitlines()) <= 3 for problem in said)


@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.lists(st.tuples(st.floats(0, 1e6), st.floats(-1e6, 1e6)), min_size=1, max_size=20),
    st.sampled_from([(",", "."), (";", "."), ("\t", "."), (";", ","), ("\t", ",")]),
)
def test_numbers_survive_any_layout(folder, rows, marks):
    separator, decimal = marks
    path = folder / "numbers.csv"
    # 17 digits name a float exactly, and leave nothing that looks like thousands
    lines = [separator.join(f"{x:.17e}".replace(".", decimal) for x in row) for row in rows]
    path.write_text("\n".join([separator.join(["c [g/mL]", "t [s]"]), *lines]))

    table, _ = read_table(path, "numbers.csv", COLUMNS)

    assert list(zip(*(table.columns[key].tolist() for key in ("c", "t")), strict=True)) == rows
