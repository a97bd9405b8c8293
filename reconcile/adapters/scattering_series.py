"""A light-scattering series as stated, checked and brought to R/K per flask and angle."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from reconcile.adapters import scattering_fit as sf
from reconcile.adapters.common import (
    check_columns,
    check_reading_error,
    medium_of,
    raise_problems,
    size_law_of,
    slug,
    solutions,
    table_of,
    value_of,
)
from reconcile.evidence import (
    Constant,
    Finding,
)
from reconcile.measurement import ColumnSpec, Effect

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.adapters.common import Solutions
    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample, Table
    from reconcile.observables import SizeLaw

    Array = NDArray[np.float64]

__all__ = ["COLUMNS", "Series", "optical_constant", "prepare", "scattering_vector"]

AVOGADRO = 6.02214076e23
"""1/mol, exact by the SI."""

COLUMNS: dict[str, ColumnSpec] = {
    "c": ColumnSpec(("concentration",), ("conc", "concentration"), required=True),
    "angle": ColumnSpec(("angle",), ("theta", "θ"), required=True),
    "R": ColumnSpec(("rayleigh_ratio",), ("excess R", "R_excess")),
    "R_total": ColumnSpec(("rayleigh_ratio",), ("total R",)),
    "Kc_R": ColumnSpec(("inverse_molar_mass",), ("Kc/R", "K c/R")),
}

_CM_TO_NM = 1e7
_READINGS = ("R", "R_total", "Kc_R")


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """A checked light-scattering series; ``lam`` the vacuum wavelength in cm, ``u_*`` relative."""

    name: str
    medium: str | None
    lam: float
    n: float
    optical_constant: float | None
    cells: sf.Cells
    u_reading: float | None
    u_flask: float
    effects: Mapping[str, Effect]
    named: tuple[str, ...]
    own_effects: tuple[Effect, ...]
    same_stock: str | None
    size_law: SizeLaw | None
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]
    constants: tuple[Constant, ...]


def optical_constant(n: float, dn_dc: float, lam: float, *, vertical: bool = True) -> float:
    """Return K in mol cm²/g² for the solvent's index, dn/dc in mL/g and vacuum wavelength in cm.

    Notes
    -----
    4π²n²(dn/dc)²/(N_A λ⁴) for vertically polarised light; half of it for unpolarised light, then
    used with R/(1 + cos²θ).

    Examples
    --------
    Polystyrene in tetrahydrofuran at 632.8 nm:

    >>> f"{optical_constant(1.4025, 0.185, 632.8e-7):.3e}"
    '2.752e-07'
    """
    factor = 4.0 if vertical else 2.0
    return factor * math.pi**2 * n**2 * dn_dc**2 / (AVOGADRO * lam**4)


def scattering_vector(n: float, lam: float, angle: Array) -> Array:
    """Return q = (4πn/λ) sin(θ/2) in 1/cm; ``lam`` in vacuum, cm; ``angle`` in rad."""
    return np.asarray(4.0 * math.pi * n / lam * np.sin(angle / 2.0))


def prepare(measurement: Measurement, sample: Sample, effects: Mapping[str, Effect]) -> Series:
    """Check the series and bring its readings to R/K per flask and angle.

    Raises
    ------
    InputError
        With every problem found.
    """
    problems = check_columns(measurement, [_READINGS])
    raise_problems(problems)
    fields = measurement.fields
    total = "R_total" in table_of(measurement).columns
    solution = solutions(measurement, sample, problems, allow_zero=total)
    lam, n = _optics(measurement, problems)
    u_reading = value_of(fields, "u_reading")
    check_reading_error(measurement, u_reading, np.ones(1), problems)
    same_stock = _same_stock(measurement, effects, problems)
    raise_problems(problems)
    increment, own_effects, constants = _increment(measurement, problems)
    vertical = fields.get("polarisation", "vertical") == "vertical"
    k = None if increment is None else optical_constant(n, increment, lam, vertical=vertical)
    cells = _cells(measurement, solution, (lam, n, k, vertical), problems)
    raise_problems(problems)
    assert cells is not None  # noqa: S101 - no problem, so there are cells
    assumptions = list(solution.assumptions)
    correction = 1.0
    if fields.get("dn_dc", {}).get("from") == "same stock" and sample.solids != 1.0:
        # Δn/c came from the same weighing, so the increment is per gram of undried polymer
        correction = sample.solids**2
        assumptions.append(
            "dn/dc from the same stock: divided by the dry fraction, as the concentrations are"
            " multiplied by it"
        )
    all_effects = {**effects, **{e.id: e for e in (*solution.effects, *own_effects)}}
    own = (*solution.effects, *own_effects)
    return Series(
        measurement.name,
        medium_of(measurement),
        lam,
        n,
        k,
        _scaled(cells, correction),
        u_reading,
        value_of(fields, "u_concentration") or 0.0,
        all_effects,
        (*measurement.effects, *(e.id for e in own)),
        own,
        same_stock,
        size_law_of(fields),
        tuple(assumptions),
        solution.findings,
        tuple(constants),
    )


def _optics(measurement: Measurement, problems: list[Problem]) -> tuple[float, float]:
    fields = measurement.fields
    lam, n = value_of(fields, "wavelength"), value_of(fields, "refractive_index")
    if lam is None:
        problems.append(measurement.place.problem("wavelength", "is missing", "give it in vacuum"))
    elif not 2e-5 <= lam <= 2e-4:
        found = f"found {lam * _CM_TO_NM:.4g} nm, expected 200 to 2000 nm in vacuum"
        problems.append(measurement.place.problem("wavelength", found))
    if n is None:
        problems.append(
            measurement.place.problem("refractive_index", "is missing", "give the solvent's index")
        )
    elif not 1.2 <= n <= 1.9:
        found = f"found {n:g}, expected a solvent's index, 1.2 to 1.9"
        problems.append(measurement.place.problem("refractive_index", found))
    return lam or 1.0, n or 1.0


def _same_stock(
    measurement: Measurement, effects: Mapping[str, Effect], problems: list[Problem]
) -> str | None:
    """Return the concentration effect that dn/dc shares, if it was measured on the same stock."""
    entry = measurement.fields.get("dn_dc", {})
    if entry.get("from") != "same stock":
        return None
    shared = [k for k in measurement.effects if effects[k].target == "concentration"]
    named = entry.get("effect")
    if named is not None and named not in shared:
        problems.append(
            measurement.place.problem(
                "dn_dc.effect",
                f"found {named!r}, expected a concentration effect of this measurement",
                f"one of: {', '.join(shared) or 'none is listed in effects'}",
            )
        )
    elif named is None and len(shared) > 1:
        problems.append(
            measurement.place.problem(
                "dn_dc",
                "comes from the same stock, but which effect is the stock's is open",
                f'add effect = "…" to dn_dc, one of: {", ".join(shared)}',
            )
        )
    return named or (shared[0] if shared else None)


def _increment(
    measurement: Measurement, problems: list[Problem]
) -> tuple[float | None, list[Effect], list[Constant]]:
    entry = measurement.fields.get("dn_dc", {})
    value = value_of(entry, "value")
    if value is None:
        if "Kc_R" not in table_of(measurement).columns:
            problems.append(
                measurement.place.problem(
                    "dn_dc", "is missing", 'give dn_dc = { value = "… mL/g", from = "…" }'
                )
            )
        return None, [], []
    origin = str(entry.get("from", "origin not stated"))
    own = []
    if "u" in entry:
        u = entry["u"].value if entry["u"].kind == "ratio" else entry["u"].value / abs(value)
        own.append(Effect(f"{slug(measurement.name)}_dn_dc", "dn_dc", u, "dn/dc as stated"))
    return value, own, [Constant("dn/dc", value, "mL/g", origin, "stated")]


def _scaled(cells: sf.Cells, factor: float) -> sf.Cells:
    return cells if factor == 1.0 else replace(cells, g=cells.g * factor)


def _cells(
    measurement: Measurement,
    solution: Solutions,
    optics: tuple[float, float, float | None, bool],
    problems: list[Problem],
) -> sf.Cells | None:
    """Return the mean R/K of every flask and angle with its error structure; None with problems."""
    table = table_of(measurement)
    lam, n, k, vertical = optics
    angle = table.columns["angle"]
    key = next(name for name in _READINGS if name in table.columns)
    reading = table.columns[key]
    _check_cells(table, key, problems)
    solvent = solution.c == 0.0
    flasks, flask = np.unique(solution.c[~solvent], return_inverse=True)
    angles, which = np.unique(angle, return_inverse=True)
    if len(flasks) < 2 or len(np.unique(which[~solvent])) < 2:
        found = f"found {len(flasks)} concentration(s) at {len(angles)} angle(s)"
        problems.append(
            measurement.place.problem(
                "readings", f"{found}, expected at least 2 of each", "Mw needs both extrapolations"
            )
        )
    if problems:
        return None
    if key == "Kc_R":
        value = solution.c / solution.factor / reading
    else:
        geometry = 1.0 if vertical else 1.0 + np.cos(angle) ** 2
        value = reading / geometry / (k or 1.0)
    blank = _Blank.of(value, which, solvent, len(angles))
    if blank is not None or key == "R_total":
        problems.extend(
            measurement.place.problem(
                "readings",
                f"no solvent row (c = 0) at {math.degrees(angles[j]):g}°",
                "total Rayleigh ratios need the solvent's at every angle",
            )
            for j in np.unique(which[~solvent])
            if blank is None or blank.count[j] == 0.0
        )
    if problems:
        return None
    q2 = scattering_vector(n, lam, angles) ** 2
    return _mean_cells(value[~solvent], flasks, flask, (q2, which[~solvent]), blank)


def _check_cells(table: Table, key: str, problems: list[Problem]) -> None:
    angle, reading = table.columns["angle"], table.columns[key]
    for row in np.flatnonzero((angle <= 0.0) | (angle > math.pi)):
        found = f"found {math.degrees(angle[row]):g}°, expected more than 0 to 180°"
        problems.append(table.problem(int(row), "angle", found))
    for row in np.flatnonzero(reading <= 0.0):
        found = f"found {reading[row]:g}, expected more than 0"
        problems.append(
            table.problem(int(row), key, found, "a reading below the blank cannot be used yet")
        )


@dataclass(frozen=True, slots=True, eq=False)
class _Blank:
    """The solvent's mean reading per angle and how many readings it rests on."""

    mean: Array
    count: Array

    @classmethod
    def of(
        cls, value: Array, which: NDArray[np.intp], solvent: NDArray[np.bool_], n_angles: int
    ) -> _Blank | None:
        if not solvent.any():
            return None
        count = np.bincount(which[solvent], minlength=n_angles).astype(float)
        mean = np.bincount(which[solvent], value[solvent], n_angles) / np.maximum(count, 1.0)
        return cls(mean, count)


def _mean_cells(
    value: Array,
    flasks: Array,
    flask: NDArray[np.intp],
    angles: tuple[Array, NDArray[np.intp]],
    blank: _Blank | None,
) -> sf.Cells:
    q2, which = angles
    cell = flask * len(q2) + which
    used, first, index = np.unique(cell, return_index=True, return_inverse=True)
    count = np.bincount(index).astype(float)
    mean = np.bincount(index, value) / count
    within = float(np.sum(((value - mean[index]) / mean[index]) ** 2))
    f, j = flask[first], which[first]
    seen, j_dense = np.unique(j, return_inverse=True)
    del seen
    excess, spread, share = mean, 1.0 / np.sqrt(count), np.zeros(len(used))
    if blank is not None:
        excess = mean - blank.mean[j]
        spread = spread * mean / excess
        share = blank.mean[j] / excess / np.sqrt(np.maximum(blank.count[j], 1.0))
    return sf.Cells(
        flasks[f], q2[j], excess, f, j_dense, spread, share, within, len(value) - len(used)
    )
