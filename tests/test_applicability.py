"""Findings that need the distribution or the flags; concentrations in every technique."""

import json

import pytest
from conftest import DEMO, run_cli


def demo_with(tmp_path, *changes):
    """Return the result of the example with texts replaced, and its text."""
    for path in DEMO.parent.iterdir():
        text = path.read_text(encoding="utf-8")
        if path.name == "case.toml":
            for old, new in changes:
                assert old in text, old
                text = text.replace(old, new, 1)
        (tmp_path / path.name).write_text(text, encoding="utf-8")
    result = run_cli("run", tmp_path / "case.toml", "--json")
    assert result.exit_code == 0, result.stderr
    return json.loads(result.stdout)


def codes(document):
    own = [f["code"] for m in document["measurements"] for f in m["findings"]]
    return {*own, *(f["code"] for f in document["findings"])}


def test_chains_under_the_cutoff_are_found_with_their_share(tmp_path):
    """Schulz–Zimm at Đ = 2.1 holds 17 % of its chains (by number) under 20 kg/mol; log-normal few.

    The number below twice the cut-off is what may permeate as a coil.
    """
    change = ('u_reading = "0.1 mm"', 'u_reading = "0.1 mm"\ncutoff = "10 kg/mol"')
    document = demo_with(tmp_path, change)

    found = next(f for f in document["findings"] if f["code"] == "sample-under-cutoff")
    share = float(found["text"].split(" %")[0])
    # incomplete gamma function at k = 1/1.17, x = k·20/123.6
    assert share == pytest.approx(17.5, abs=2.0)


@pytest.mark.parametrize(
    ("old", "new", "code"),
    [
        ('composition = "homopolymer"', 'composition = "copolymer"', "copolymer"),
        ('composition = "homopolymer"', "charged = true", "charged"),
        ('architecture = "linear"', 'architecture = "branched"', "branched"),
    ],
)
def test_flags_of_the_sample_raise_findings(tmp_path, old, new, code):
    assert code in codes(demo_with(tmp_path, (old, new)))


@pytest.mark.parametrize(
    ("technique", "readings", "quantity", "power"),
    [
        ("osmometry", 'readings = "osmometry.csv"', "Mn", 1.0),
        ("light_scattering", 'readings = "scattering.csv"', "Mw", -1.0),
        ("viscometry", 'readings = "viscometry.csv"', "limiting_viscosity_number", -1.0),
    ],
)
def test_expansion_is_corrected_in_every_technique(
    tmp_path, demo, technique, readings, quantity, power
):
    """c at the run is c as made up times the ratio of densities; each quantity follows its law."""
    ratio = 0.78 / 0.80
    densities = '\ndensity_prepared = "0.80 g/mL"\ndensity_run = "0.78 g/mL"'
    document = demo_with(tmp_path, (readings, readings + densities))

    def value(result):
        entry = next(m for m in result["measurements"] if m["technique"] == technique)
        return entry["quantities"][quantity]["value"]

    assert value(document) == pytest.approx(value(demo) * ratio**power, rel=1e-6)
    assert any(
        "density" in text
        for m in document["measurements"]
        if m["technique"] == technique
        for text in m["assumptions"]
    )


def test_expansion_left_uncorrected_is_a_finding(tmp_path):
    change = ('temperature = "25 degC"', 'temperature = "25 degC"\nprepared_at = "20 degC"')

    assert "no-expansion-correction" in codes(demo_with(tmp_path, change))


def test_linking_a2_on_request(tmp_path, demo):
    """The example's A2 are drawn with a ratio of 0.875, as good solvents have it at this Đ."""
    linked = demo_with(tmp_path, ("[limits]", "[estimate]\nlink_A2 = true\n\n[limits]"))

    assert "virial-link" in codes(linked)
    assert "virial-link" not in codes(demo)
    assert linked["consistency"]["dof"] == demo["consistency"]["dof"] + 1
    assert linked["consistency"]["verdict"] == "consistent"
    low, high = linked["estimate"]["averages"]["Mn"]["interval95"]
    assert low <= 262e3 / 2.1 <= high


def test_increment_from_the_same_stock_turns_the_sign(tmp_path, demo):
    """With dn/dc from tables a stock error moves Mn and Mw apart, from the same stock together."""
    change = ('from = "literature"', 'from = "same stock", effect = "stock"')
    document = demo_with(tmp_path, change)

    def row(result):
        entry = next(m for m in result["measurements"] if m["technique"] == "light_scattering")
        return entry["evidence"]["rows"][0]["derivatives"]

    assert row(demo)["stock"] == 1.0
    assert row(document)["stock"] == -1.0
    assert row(document)["sample_solids"] == -1.0
