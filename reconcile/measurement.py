"""The case as value objects: what the user stated, in internal units, before any reduction.

Nothing here reads files. Internal units everywhere: g/mL, g/mol, mL/g, mol mL/g², cm, Pa, K, s,
rad; relative uncertainties are fractions.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

from reconcile.errors import Problem

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

__all__ = [
    "EFFECT_TARGETS",
    "Case",
    "ColumnSpec",
    "Effect",
    "Measurement",
    "Place",
    "Quantity",
    "Sample",
    "Table",
]

EFFECT_TARGETS: Mapping[str, str] = MappingProxyType(
    {
        "concentration": "mass concentration of the solutions (stock, solids)",
        "dn_dc": "refractive index increment",
        "rayleigh_ratio": "Rayleigh-ratio calibration of the photometer",
        "refractive_index": "refractive index of the solvent",
        "pressure": "scale of the osmotic pressure or head",
        "temperature": "thermodynamic temperature in RT",
        "mark_houwink_K": "Mark-Houwink K at the reference molar mass",
        "mark_houwink_a": "Mark-Houwink exponent (absolute)",
        "size_law": "Rg = K M^nu at its reference molar mass",
        "value": "a stated value as a whole",
        "virial_scale": "A2 of a medium at 100 kg/mol, an unknown without prior",
        "virial_model": "ratio of the A2 of two techniques beyond the mixing rule",
    }
)
"""What a systematic effect can act on; the sign is e = ln(used/true) for all but the exponent."""


@dataclass(frozen=True, slots=True)
class Quantity:
    """A number with its kind of quantity, converted to the internal unit of that kind.

    ``kind`` is a key of ``units.KINDS``; ``"ratio"`` marks a relative uncertainty. ``text`` is what
    the user wrote.
    """

    value: float
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class Place:
    """Where in which document something was said, so that an adapter can name it in a problem."""

    file: str
    path: str
    lines: Mapping[str, int] = field(default_factory=dict)

    def problem(self, key: str, text: str, remedy: str = "") -> Problem:
        """Return the problem ``text`` of ``key`` (relative to this place; ``""`` is the place)."""
        line = self.lines.get(key) or self.lines.get("", 0)
        path = f"{self.path}.{key}" if key and self.path else key or self.path
        return Problem(self.file, line, path, text, remedy)


@dataclass(frozen=True, slots=True)
class ColumnSpec:
    """A column an adapter reads: accepted kinds of quantity, other headings, whether it must be."""

    kinds: tuple[str, ...]
    aliases: tuple[str, ...] = ()
    required: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Table:
    """A table of readings: read-only float columns in internal units.

    ``columns`` maps the adapter's column keys to arrays of one length; ``units`` holds the unit the
    user wrote for each; ``lines`` the 1-based file line of each row.
    """

    file: str
    columns: Mapping[str, NDArray[Any]]
    units: Mapping[str, str]
    lines: tuple[int, ...]

    def __len__(self) -> int:
        return len(self.lines)

    def problem(self, row: int, column: str, text: str, remedy: str = "") -> Problem:
        """Return a problem of one cell (``row`` counts from 0 in this table)."""
        return Problem(self.file, self.lines[row], f"column {column!r}", text, remedy)


@dataclass(frozen=True, slots=True)
class Effect:
    """A systematic effect with a standard uncertainty, shared by every measurement that names it.

    ``u`` is relative, except for ``mark_houwink_a``, where it is absolute.
    """

    id: str
    target: str
    u: float
    description: str = ""


@dataclass(frozen=True, slots=True)
class Sample:
    """What the measurements have in common.

    ``solids`` is the mass fraction of dry polymer in what was weighed, ``u_solids`` its standard
    uncertainty (both absolute); 1 and 0 where the user said nothing.
    """

    name: str
    polymer: str
    architecture: str = "unknown"
    composition: str = "homopolymer"
    charged: bool = False
    solids: float = 1.0
    u_solids: float = 0.0
    fields: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Measurement:
    """One series by one technique, as stated: ``fields`` holds the technique's own keys.

    In ``fields``, texts with a unit have become `Quantity`; nested tables are mappings of the same.
    """

    technique: str
    name: str
    fields: Mapping[str, Any]
    table: Table | None
    effects: tuple[str, ...]
    place: Place
    date: str | None = None
    solvent: str | None = None
    temperature: float | None = None


@dataclass(frozen=True, slots=True)
class Case:
    """One sample with all its measurements; ``inputs`` lists (path, SHA-256) of every file read."""

    file: str
    sample: Sample
    effects: Mapping[str, Effect]
    measurements: tuple[Measurement, ...]
    limits: Mapping[str, tuple[float | None, float | None]]
    inputs: tuple[tuple[str, str], ...]
    digest: str
    link_virial: bool = False
