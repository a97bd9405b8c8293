"""Units: exact factors, the spellings chemists write, a second opinion, and what is refused."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.units import (
    KINDS,
    UnitError,
    express,
    parse_number,
    parse_quantity,
    parse_uncertainty,
    parse_unit,
)

# spelling, kind, what a units library calls it
SPELLINGS = [
    ("g/L", "concentration", "g/L"),
    ("g L-1", "concentration", "g/L"),
    ("g·L⁻¹", "concentration", "g/L"),
    ("g L^-1", "concentration", "g/L"),
    ("g/l", "concentration", "g/L"),
    ("mg/mL", "concentration", "mg/mL"),
    ("mg mL-1", "concentration", "mg/mL"),
    ("g/dL", "concentration", "g/dL"),
    ("g/100 mL", "concentration", "g/dL"),
    ("g/(100 mL)", "concentration", "g/dL"),
    ("kg/m3", "concentration", "kg/m^3"),
    ("g/cm³", "density", "g/cm^3"),
    ("Pa", "pressure", "Pa"),
    ("hPa", "pressure", "hPa"),
    ("kPa", "pressure", "kPa"),
    ("mbar", "pressure", "mbar"),
    ("bar", "pressure", "bar"),
    ("atm", "pressure", "atm"),
    ("torr", "pressure", "torr"),
    ("Torr", "pressure", "torr"),
    ("mmHg", "pressure", "mmHg"),
    ("mm Hg", "pressure", "mmHg"),
    ("cm H2O", "pressure", "cmH2O"),
    ("cmH₂O", "pressure", "cmH2O"),
    ("\u212b", "length", "angstrom"),
    ("g.L-1", "concentration", "g/L"),
    ("mPa.s", "viscosity", "mPa*s"),
    ("cmH2O", "pressure", "cmH2O"),
    ("psi", "pressure", "psi"),
    ("gf/cm2", "pressure", "gram_force/cm^2"),
    ("dyn/cm^2", "pressure", "dyn/cm^2"),
    ("mm", "length", "mm"),
    ("cm", "length", "cm"),
    ("m", "length", "m"),
    ("nm", "length", "nm"),
    ("µm", "length", "um"),
    ("μm", "length", "um"),
    ("Å", "length", "angstrom"),
    ("s", "time", "s"),
    ("min", "time", "min"),
    ("ms", "time", "ms"),
    ("deg", "angle", "deg"),
    ("°", "angle", "deg"),
    ("rad", "angle", "rad"),
    ("g/mol", "molar_mass", "g/mol"),
    ("kg/mol", "molar_mass", "kg/mol"),
    ("kg mol-1", "molar_mass", "kg/mol"),
    ("mol/g", "inverse_molar_mass", "mol/g"),
    ("mL/g", "viscosity_number", "mL/g"),
    ("dL/g", "viscosity_number", "dL/g"),
    ("L/g", "viscosity_number", "L/g"),
    ("m3/kg", "viscosity_number", "m^3/kg"),
    ("mol mL g-2", "second_virial", "mol*mL/g^2"),
    ("mol·cm³/g²", "second_virial", "mol*cm^3/g^2"),
    ("mol*cm^3/g^2", "second_virial", "mol*cm^3/g^2"),
    ("mol m3 kg-2", "second_virial", "mol*m^3/kg^2"),
    ("cm-1", "rayleigh_ratio", "1/cm"),
    ("1/cm", "rayleigh_ratio", "1/cm"),
    ("m^-1", "rayleigh_ratio", "1/m"),
    ("mPa s", "viscosity", "mPa*s"),
    ("mPa·s", "viscosity", "mPa*s"),
    ("cP", "viscosity", "cP"),
    ("P", "viscosity", "poise"),
    ("m/s^2", "acceleration", "m/s^2"),
    ("cm/s2", "acceleration", "cm/s^2"),
    ("cm3/mol", "molar_volume", "cm^3/mol"),
]


@pytest.fixture(scope="module")
def pint_registry():
    pint = pytest.importorskip("pint", reason="pint is a test dependency")
    return pint.UnitRegistry()


@pytest.mark.parametrize(("text", "kind", "theirs"), SPELLINGS)
def test_factor_is_that_of_a_units_library(pint_registry, text, kind, theirs):
    factor, found = parse_unit(text, [kind])

    expected = pint_registry(f"1 {theirs}").to(KINDS[kind].internal).magnitude
    assert found == kind
    assert factor == pytest.approx(expected, rel=1e-12)  # their own rounding of π and gravity


def test_conversions_of_common_practice():
    """Exact by definition: gravity 9.80665 m/s² (CGPM 1901), 1 atm = 101 325 Pa, 1 Da as g/mol."""
    assert parse_unit("cmH2O", ["pressure"])[0] == 98.0665
    assert parse_unit("atm", ["pressure"])[0] == 101325.0
    assert parse_quantity("120 kDa", ["molar_mass"]).value == 120e3
    assert parse_quantity("1 dL/g", ["viscosity_number"]).value == 100.0
    assert parse_quantity("25 °C", ["temperature"]).value == 298.15
    assert parse_quantity("298.15 K", ["temperature"]).value == 298.15


@pytest.mark.parametrize(
    ("text", "kinds", "message"),
    [
        ("0.1 mbar", ["length"], '"mbar" is a pressure, expected a length such as "0.1 mm"'),
        ("25,3 g/L", ["concentration"], 'decimal comma, write 25.3 (in "25,3 g/L")'),
        ("5", ["concentration"], '"5" has no unit, expected a mass concentration'),
        ("5 gg/L", ["concentration"], 'did you mean "g/L"?'),
        ("25", ["temperature"], 'expected a temperature such as "25 degC" or "298.15 K"'),
        ("-300 degC", ["temperature"], "below absolute zero"),
        ("1e400 m", ["length"], "too large"),
        ("1_0 m", ["length"], "is not a unit"),
        ("nan m", ["length"], "does not start with a number"),
        ("9**9**9 m", ["length"], "is not a unit"),
        ("90 deg", ["ratio"], "is an angle"),
        ("1 m^", ["length"], "is not a unit"),
        ("1 m**", ["length"], "is not a unit"),
        ("1 g./L", ["concentration"], "is not a unit"),
    ],
)
def test_what_is_refused_and_why(text, kinds, message):
    with pytest.raises(UnitError) as caught:
        parse_quantity(text, kinds)
    assert message in str(caught.value)


def test_uncertainties():
    assert parse_uncertainty("0.8 %", ["length"]).value == pytest.approx(0.008)
    assert parse_uncertainty("0.1 mm", ["length"]).value == pytest.approx(0.01)
    with pytest.raises(UnitError, match="negative"):
        parse_uncertainty("-1 %", ["length"])
    with pytest.raises(UnitError, match="or a percentage"):
        parse_uncertainty("0.1", ["length"])


@given(st.text(max_size=30), st.sampled_from(sorted(KINDS)))
def test_any_text_is_a_quantity_or_a_unit_error(text, kind):
    try:
        found = parse_quantity(text, [kind])
    except UnitError as error:
        assert str(error)  # noqa: PT017 - a message, whatever it is
    else:
        assert math.isfinite(found.value)


@given(
    st.floats(allow_nan=False, allow_infinity=False, width=32),
    st.sampled_from([(t, k) for t, k, _ in SPELLINGS]),
)
def test_writing_and_reading_is_the_identity(value, spelling):
    unit, kind = spelling
    text = f"{value!r} {unit}"
    assert express(parse_quantity(text, [kind]).value, kind, unit) == pytest.approx(
        value,
        rel=1e-14,
        abs=1e-300,  # one product and one quotient
    )


@given(st.text(alphabet="0123456789+-.,eE_ infa\u2212", max_size=12))
def test_numbers_are_read_strictly(text):
    try:
        value = parse_number(text)
    except UnitError:
        return
    assert math.isfinite(value)
    assert value == float(text.strip().replace("\u2212", "-"))
