"""Units at the edge: a closed vocabulary per kind of quantity, read strictly or not at all.

Everything inside the program is in the internal unit of its kind; only this module converts. A text
is a number, a space, and a unit; a decimal comma, a missing unit, or a unit of another kind is an
error that says what was expected.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from difflib import get_close_matches
from types import MappingProxyType
from typing import TYPE_CHECKING

from reconcile.measurement import Quantity

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

__all__ = [
    "KINDS",
    "Kind",
    "UnitError",
    "express",
    "parse_number",
    "parse_quantity",
    "parse_uncertainty",
    "parse_unit",
]


class UnitError(ValueError):
    """A text is not a quantity of the kind expected; the message says what was and what is."""


@dataclass(frozen=True, slots=True)
class Kind:
    """A kind of quantity: its internal unit, an example, and the units people write.

    ``dimensions`` are the exponents of (mass, length, time, temperature, amount) that a unit of
    this kind must have.
    """

    title: str
    internal: str
    example: str
    dimensions: tuple[int, ...]


# symbol → (factor to kg, m, s, K, mol; exponents of those)
_MASS, _LENGTH, _TIME, _KELVIN, _AMOUNT = (tuple(int(i == j) for j in range(5)) for i in range(5))
_PRESSURE = (1, -1, -2, 0, 0)
_NONE = (0, 0, 0, 0, 0)
_ATOMS: Mapping[str, tuple[float, tuple[int, ...]]] = MappingProxyType(
    {
        "g": (1e-3, _MASS),
        "m": (1.0, _LENGTH),
        "s": (1.0, _TIME),
        "min": (60.0, _TIME),
        "h": (3600.0, _TIME),
        "K": (1.0, _KELVIN),
        "mol": (1.0, _AMOUNT),
        "L": (1e-3, (0, 3, 0, 0, 0)),
        "Da": (1e-3, (1, 0, 0, 0, -1)),
        "Pa": (1.0, _PRESSURE),
        "bar": (1e5, _PRESSURE),
        "atm": (101325.0, _PRESSURE),
        "torr": (101325.0 / 760.0, _PRESSURE),
        "mmHg": (133.322387415, _PRESSURE),
        "cmH2O": (98.0665, _PRESSURE),
        "mmH2O": (9.80665, _PRESSURE),
        "psi": (6894.757293168361, _PRESSURE),
        "gf": (9.80665e-3, (1, 1, -2, 0, 0)),
        "N": (1.0, (1, 1, -2, 0, 0)),
        "dyn": (1e-5, (1, 1, -2, 0, 0)),
        "P": (0.1, (1, -1, -1, 0, 0)),
        "Å": (1e-10, _LENGTH),
        "deg": (math.pi / 180.0, _NONE),
        "rad": (1.0, _NONE),
        "%": (1e-2, _NONE),
        "1": (1.0, _NONE),
    }
)
_ALIASES = {
    "l": "L", "Torr": "torr", "sec": "s", "°": "deg", "degrees": "deg", "Angstrom": "Å",
    "ml": "mL", "dl": "dL", "ul": "uL", "cc": "mL", "gram": "g", "kDalton": "kDa",
}  # fmt: skip
_PREFIXES = {"n": 1e-9, "u": 1e-6, "m": 1e-3, "c": 1e-2, "d": 0.1, "h": 1e2, "k": 1e3, "M": 1e6}
_PREFIXED = {"g", "m", "s", "mol", "L", "Pa", "P", "bar", "N", "Da"}

KINDS: Mapping[str, Kind] = MappingProxyType(
    {
        "concentration": Kind("mass concentration", "g/mL", "5 g/L", (1, -3, 0, 0, 0)),
        "density": Kind("density", "g/mL", "0.80 g/mL", (1, -3, 0, 0, 0)),
        "pressure": Kind("pressure", "Pa", "250 Pa", _PRESSURE),
        "length": Kind("length", "cm", "0.1 mm", _LENGTH),
        "time": Kind("time", "s", "0.05 s", _TIME),
        "angle": Kind("angle", "rad", "90 deg", _NONE),
        "temperature": Kind("temperature", "K", "25 degC", _KELVIN),
        "molar_mass": Kind("molar mass", "g/mol", "120 kg/mol", (1, 0, 0, 0, -1)),
        "inverse_molar_mass": Kind(
            "reciprocal molar mass", "mol/g", "4e-6 mol/g", (-1, 0, 0, 0, 1)
        ),
        "viscosity_number": Kind("viscosity number", "mL/g", "75 mL/g", (-1, 3, 0, 0, 0)),
        "specific_volume": Kind("specific volume", "mL/g", "0.84 mL/g", (-1, 3, 0, 0, 0)),
        "dn_dc": Kind("refractive index increment", "mL/g", "0.080 mL/g", (-1, 3, 0, 0, 0)),
        "second_virial": Kind(
            "second virial coefficient", "mol mL/g^2", "4e-4 mol mL/g^2", (-2, 3, 0, 0, 1)
        ),
        "rayleigh_ratio": Kind("Rayleigh ratio", "1/cm", "4e-5 1/cm", (0, -1, 0, 0, 0)),
        "molar_volume": Kind("molar volume", "mL/mol", "90 mL/mol", (0, 3, 0, 0, -1)),
        "viscosity": Kind("viscosity", "Pa s", "0.4 mPa s", (1, -1, -1, 0, 0)),
        "acceleration": Kind("acceleration", "m/s^2", "9.81 m/s^2", (0, 1, -2, 0, 0)),
        "ratio": Kind("ratio", "1", "1 %", _NONE),
    }
)
"""Kind → what it is; the key is what schemas and columns say."""

_CELSIUS = {"°C", "degC", "deg C", "C", "℃"}
_ANGLE_UNITS = {"deg", "rad"}
_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_SUPERSCRIPT = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
_HUNDRED = re.compile(r"/\s*\(?\s*100\s*(?:mL|ml|cm\^?3)\s*\)?(?!\w)")
_BRACKETS = re.compile(r"/\s*\(([^()/]+)\)")
_FACTOR = re.compile(
    r"(?P<op>\s*[*·⋅×/.]\s*|\s+|)"
    r"(?P<symbol>cmH2O|mmH2O|1|[A-Za-zÅ°%]+)"
    r"(?:(?:\^|\*\*)?(?P<power>-?[1-6]))?(?![A-Za-z0-9^])(?!\*\*)"
)


def parse_number(text: str) -> float:
    """Return a finite decimal number; refuse anything that needs guessing.

    Raises
    ------
    UnitError
        For decimal commas, names of numbers, underscores, infinities.

    Examples
    --------
    >>> parse_number("−1.5e-3")
    -0.0015
    """
    plain = text.strip().replace("−", "-").replace("\u00a0", "")
    if _NUMBER.fullmatch(plain):
        value = float(plain)
        if math.isfinite(value):
            return value
        raise UnitError(f'"{text}" is too large for a number')
    if re.fullmatch(r"[+-]?\d+,\d+(?:[eE][+-]?\d+)?", plain):
        raise UnitError(f'"{text}" has a decimal comma, write {plain.replace(",", ".")}')
    raise UnitError(f'"{text}" is not a number')


def _canonical(text: str) -> str:
    text = re.sub("[⁰¹²³⁴⁵⁶⁷⁸⁹⁻]+", lambda m: "^" + m[0].translate(_SUPERSCRIPT), text.strip())
    text = text.replace("₂", "2").replace("\u212b", "Å")
    text = re.sub(r"\b(mm Hg|[cm]m H2O)\b", lambda m: m[0].replace(" ", ""), text)
    return text.replace("µ", "u").replace("μ", "u").replace("−", "-").replace("℃", "°C")


def _atom(symbol: str) -> tuple[float, tuple[int, ...]]:
    symbol = _ALIASES.get(symbol, symbol)
    if symbol in _ATOMS:
        return _ATOMS[symbol]
    base = _ALIASES.get(symbol[1:], symbol[1:])
    if symbol[0] in _PREFIXES and base in _PREFIXED:
        factor, dimensions = _ATOMS[base]
        return factor * _PREFIXES[symbol[0]], dimensions
    raise UnitError(f'"{symbol}" is not a unit')


def _product(text: str) -> tuple[float, tuple[int, ...]]:
    """Return the SI factor and the dimensions of a product of units such as ``g L-1``.

    A slash turns the next factor only, or a bracket; ``g/100 mL`` is read as ``g/(100 mL)``, the
    one number people put inside a unit.
    """
    rest = _HUNDRED.sub("/dL", _canonical(text))
    rest = _BRACKETS.sub(lambda m: f"/{m[1].replace(' ', '/').replace('*', '/')}", rest)
    factor, position = 1.0, 0
    dimensions: tuple[int, ...] = (0,) * 5
    while position < len(rest):
        match = _FACTOR.match(rest, position)
        # an operator or a space stands between two factors, and nothing before the first
        if match is None or (position == 0) == bool(match["op"]):
            raise UnitError(f'"{text}" is not a unit')
        atom = _atom(match["symbol"])
        power = int(match["power"] or 1) * (-1 if "/" in match["op"] else 1)
        factor *= atom[0] ** power
        dimensions = tuple(d + power * a for d, a in zip(dimensions, atom[1], strict=True))
        position = match.end()
    if position == 0:
        raise UnitError(f'"{text}" is not a unit')
    return factor, dimensions


def _internal_factor(kind: str) -> float:
    return _product(KINDS[kind].internal)[0]


def parse_unit(text: str, kinds: Sequence[str]) -> tuple[float, str]:
    """Return the factor to the internal unit and the kind of ``kinds`` that a unit belongs to.

    Raises
    ------
    UnitError
        If the unit is unknown or of none of these kinds.

    Examples
    --------
    >>> parse_unit("g/dL", ["concentration"])
    (0.01, 'concentration')
    >>> parse_unit("mol cm³ g⁻²", ["second_virial"])[1]
    'second_virial'
    """
    stripped = text.strip()
    if stripped in {"", "1", "-"} and "ratio" in kinds:
        return 1.0, "ratio"
    try:
        factor, dimensions = _product(stripped)
    except UnitError as error:
        near = get_close_matches(stripped, _spellings(kinds), 1, 0.6)
        hint = f'; did you mean "{near[0]}"?' if near else ""
        raise UnitError(f"{error}, expected {_expected(kinds)}{hint}") from None
    for kind in kinds:
        if dimensions != KINDS[kind].dimensions:
            continue
        is_angle = _canonical(stripped).replace("°", "deg") in _ANGLE_UNITS
        if dimensions == _NONE and is_angle != (kind == "angle"):
            continue
        # one rounding of the quotient, so that powers of ten stay exact
        return float(f"{factor / _internal_factor(kind):.15g}"), kind
    raise UnitError(f'"{text}" is {_what(dimensions)}, expected {_expected(kinds)}')


def _spellings(kinds: Sequence[str]) -> list[str]:
    return [KINDS[kind].internal for kind in kinds] + [
        KINDS[kind].example.split(" ", 1)[1] for kind in kinds
    ]


def _expected(kinds: Sequence[str]) -> str:
    return " or ".join(f'{_a(KINDS[kind].title)} such as "{KINDS[kind].example}"' for kind in kinds)


def _a(title: str) -> str:
    return f"an {title}" if title[0] in "aeiou" else f"a {title}"


def _what(dimensions: tuple[int, ...]) -> str:
    titles = [kind.title for kind in KINDS.values() if kind.dimensions == dimensions]
    return _a(titles[0]) if titles else "a unit of something else"


def _split(text: str) -> tuple[str, str]:
    match = re.match(r"\s*([+\-−]?[\d.,]+(?:[eE][+\-−]?\d+)?)\s*(.*?)\s*$", text, re.DOTALL)
    if match is None:
        raise UnitError(f'"{text}" does not start with a number')
    return match[1], match[2]


def parse_quantity(text: str, kinds: Sequence[str]) -> Quantity:
    """Return a quantity in the internal unit of whichever of ``kinds`` its unit belongs to.

    Raises
    ------
    UnitError
        With what was found and what was expected.

    Examples
    --------
    >>> parse_quantity("25 degC", ["temperature"]).value
    298.15
    >>> parse_quantity("120 kg/mol", ["molar_mass"]).value
    120000.0
    """
    number, unit = _split(text)
    try:
        value = parse_number(number)
    except UnitError as error:
        raise UnitError(f'{error} (in "{text}")') from None
    if kinds == ["temperature"] or tuple(kinds) == ("temperature",):
        return Quantity(_kelvin(value, unit, text), "temperature", text)
    if not unit and "ratio" not in kinds:
        raise UnitError(f'"{text}" has no unit, expected {_expected(kinds)}')
    try:
        factor, kind = parse_unit(unit, kinds)
    except UnitError as error:
        raise UnitError(f"{error}" if unit != text else str(error)) from None
    return Quantity(value * factor, kind, text)


def _kelvin(value: float, unit: str, text: str) -> float:
    if unit in _CELSIUS:
        # decimal degrees are exact to more places than a sum of floats keeps
        kelvin = round(value + 273.15, 9)
    elif unit == "K":
        kelvin = value
    else:
        found = f'"{unit}" is not a temperature' if unit else f'"{text}" has no unit'
        raise UnitError(f'{found}, expected a temperature such as "25 degC" or "298.15 K"')
    if kelvin <= 0.0:
        raise UnitError(f'"{text}" is below absolute zero')
    return kelvin


def parse_uncertainty(text: str, kinds: Sequence[str]) -> Quantity:
    """Return a standard uncertainty: in % (kind ``ratio``) or in a unit of one of ``kinds``.

    Raises
    ------
    UnitError
        Also if it is negative.

    Examples
    --------
    >>> parse_uncertainty("0.8 %", ["length"])
    Quantity(value=0.008, kind='ratio', text='0.8 %')
    """
    number, unit = _split(text)
    if unit == "%":
        found = Quantity(parse_number(number) / 100.0, "ratio", text)
    else:
        if not unit:
            raise UnitError(f'"{text}" has no unit, expected {_expected(kinds)}, or a percentage')
        found = parse_quantity(text, kinds)
    if found.value < 0.0:
        raise UnitError(f'"{text}" is negative, expected a standard uncertainty')
    return found


def express(value: float, kind: str, unit: str) -> float:
    """Return an internal value in another unit of its kind.

    Examples
    --------
    >>> express(298.15, "temperature", "degC"), express(0.005, "concentration", "g/L")
    (25.0, 5.0)
    """
    if kind == "temperature" and unit in _CELSIUS:
        return round(value - 273.15, 9)
    return value / parse_unit(unit, [kind])[0]
