"""Static light scattering: Mw, A2 and Rg from Rayleigh ratios over concentration and angle."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters import scattering_fit as sf
from reconcile.adapters.common import (
    SOLIDS_EFFECT,
    Adapter,
    check_columns,
    effect_derivatives,
    medium_of,
    power_quantity,
    raise_problems,
    size_law_of,
    slug,
    solutions,
    value_of,
)
from reconcile.evidence import (
    Alternative,
    Constant,
    Evidence,
    Finding,
    QuantityValue,
    Reduction,
    Row,
    frozen_array,
)
from reconcile.measurement import ColumnSpec, Effect
from reconcile.observables import inverse_average, mean_square_radius

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.adapters.common import Solutions
    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample, Table
    from reconcile.observables import SizeLaw

    Array = NDArray[np.float64]

__all__ = ["ADAPTER", "AVOGADRO", "optical_constant", "prepare", "reduce", "scattering_vector"]

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
    total = "R_total" in _table(measurement).columns
    solution = solutions(measurement, sample, problems, allow_zero=total)
    lam, n = _optics(measurement, problems)
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
        value_of(fields, "u_reading"),
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
        if "Kc_R" not in _table(measurement).columns:
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
    table = _table(measurement)
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


def _table(measurement: Measurement) -> Table:
    assert measurement.table is not None  # noqa: S101 - check_columns came first
    return measurement.table


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


def reduce(series: Series) -> Reduction:
    """Return Mw, A2 and Rg with their evidence, alternatives and findings."""
    fit = sf.fit_surface(series.cells, series.u_reading, series.u_flask)
    rows, values, covariance, dof = _rows(series, fit)
    quantities = _quantities(series, rows, values, covariance, dof)
    alternatives = _alternatives(series.cells)
    findings = [*series.findings, *_findings(series, fit, quantities, alternatives)]
    law = series.size_law
    own = list(series.own_effects)
    if law is not None and law.u_K > 0.0:
        own.append(Effect(f"{slug(series.name)}_size_law", "size_law", law.u_K, law.source))
    return Reduction(
        series.name,
        "light_scattering",
        "Zimm surface, shared errors averaged, third virial term by prior",
        quantities,
        Evidence(series.name, rows, frozen_array(values), frozen_array(covariance)),
        alternatives,
        tuple(findings),
        (),
        _readings(series, fit),
        _fit_summary(fit),
        series.constants
        if series.optical_constant is None
        else (
            *series.constants,
            Constant(
                "K*",
                series.optical_constant,
                "mol cm²/g²",
                "4π²n²(dn/dc)²/(N_A λ⁴)",
                "computed",
            ),
        ),
        series.assumptions,
        tuple(own),
    )


def _rows(series: Series, fit: sf.SurfaceFit) -> tuple[tuple[Row, ...], Array, Array, Array]:
    b0, b1, a2, _ = fit.parameters
    radius2 = 3.0 * b1 / b0
    values = np.array([b0, a2, radius2])
    carry = np.array([[1.0, 0, 0, 0], [0, 0, 1.0, 0], [-radius2 / b0, 3.0 / b0, 0, 0]])
    covariance = carry @ fit.covariance @ carry.T
    dof = np.array([fit.dof[0], fit.dof[2], fit.dof[1]])
    base = {"dn_dc": 2.0, "rayleigh_ratio": -1.0, "refractive_index": 2.0}
    by_target = {
        "Mw": {**base, "concentration": 1.0},
        "A2": {**base, "concentration": 0.0},
        "Rg": {"refractive_index": -2.0},
    }
    turned = {"Mw": -1.0, "A2": -2.0}
    derivatives = {}
    for name, targets in by_target.items():
        found = effect_derivatives(series.effects, series.named, targets)
        for key in series.named:
            # an increment from the same weighing follows the concentration, and turns the sign
            follows = series.same_stock is not None and key in {series.same_stock, SOLIDS_EFFECT}
            if follows and series.effects[key].target == "concentration" and name in turned:
                found[key] = turned[name]
        derivatives[name] = found
    law = series.size_law
    if law is not None and law.u_K > 0.0:
        derivatives["Rg"][f"{slug(series.name)}_size_law"] = -2.0
    rows = (
        Row("Mw", inverse_average("Mw"), "1/Mw [mol/g]", dof[0], derivatives["Mw"], series.medium),
        Row("A2", None, "A2 [mol mL/g²]", dof[1], derivatives["A2"], series.medium),
        Row(
            "Rg",
            None if law is None else mean_square_radius(law),
            "Rg² [cm²]",
            dof[2],
            derivatives["Rg"],
            series.medium,
        ),
    )
    return rows, values, covariance, dof


def _quantities(
    series: Series, rows: tuple[Row, ...], values: Array, covariance: Array, dof: Array
) -> dict[str, QuantityValue]:
    sd = np.sqrt(np.diag(covariance))
    law_id = f"{slug(series.name)}_size_law"

    def shared(row: Row) -> float:
        parts = [d * series.effects[k].u for k, d in row.derivatives.items() if k != law_id]
        return math.hypot(*parts) if parts else 0.0

    forms = {"Mw": (-1.0, 1.0, "g/mol"), "A2": (1.0, 1.0, "mol mL/g²"), "Rg": (0.5, 1e7, "nm")}
    result = {}
    for i, row in enumerate(rows):
        power, factor, unit = forms[row.quantity]
        result[row.quantity] = power_quantity(
            values[i],
            sd[i],
            dof[i],
            power=power,
            factor=factor,
            unit=unit,
            u_effects=abs(power) * shared(row),
        )
    return result


def _alternatives(cells: sf.Cells) -> tuple[Alternative, ...]:
    found = []
    for form, label in (
        ("zimm", "Zimm plane, equal weights"),
        ("zimm-c2", "Zimm plane with c², equal weights"),
        ("berry", "Berry plane, equal weights"),
    ):
        if form == "zimm-c2" and cells.flask.max() < 2:
            continue
        found.append(Alternative(label, _plane_quantities(sf.plane(cells, form), form)))
    lines = sf.double_extrapolation(cells)
    if lines is not None:
        inverse, a2, radius2 = lines
        why = "two sets of lines give no joint covariance"
        found.append(
            Alternative(
                "double extrapolation, equal weights",
                {
                    "Mw": QuantityValue(1.0 / inverse if inverse > 0 else None, "g/mol", why=why),
                    "A2": QuantityValue(a2, "mol mL/g²", why=why),
                    "Rg": QuantityValue(
                        math.sqrt(radius2) * _CM_TO_NM if radius2 > 0 else None, "nm", why=why
                    ),
                },
            )
        )
    return tuple(found)


def _plane_quantities(fit: Any, form: str) -> dict[str, QuantityValue]:
    """Return Mw, A2, Rg of a plane with standard errors from its scatter, by linear propagation."""
    root, slope_c, slope_q = fit.coefficients[:3]
    power = 2.0 if form == "berry" else 1.0
    radius_factor = 6.0 if form == "berry" else 3.0
    a2 = slope_c * root if form == "berry" else slope_c / 2.0
    gradient = np.zeros((3, len(fit.coefficients)))
    inverse = root**power
    gradient[0, 0] = power * root ** (power - 1.0)
    gradient[1, :2] = (slope_c, root) if form == "berry" else (0.0, 0.5)
    radius2 = radius_factor * slope_q / root
    gradient[2, 0], gradient[2, 2] = -radius2 / root, radius_factor / root
    covariance = gradient @ fit.scatter_covariance() @ gradient.T
    sd = np.sqrt(np.diag(covariance))
    dof = float(fit.dof)
    forms = (
        ("Mw", inverse, -1.0, 1.0, "g/mol"),
        ("A2", a2, 1.0, 1.0, "mol mL/g²"),
        ("Rg", radius2, 0.5, 1e7, "nm"),
    )
    result = {}
    for i, (name, value, exponent, factor, unit) in enumerate(forms):
        if fit.dof == 0 or root <= 0.0:
            x = factor * value**exponent if value > 0 and root > 0 else None
            result[name] = QuantityValue(x, unit, why="as many readings as unknowns")
        else:
            result[name] = power_quantity(
                value, sd[i], dof, power=exponent, factor=factor, unit=unit, u_effects=0.0
            )
    return result


def _findings(
    series: Series,
    fit: sf.SurfaceFit,
    quantities: Mapping[str, QuantityValue],
    alternatives: tuple[Alternative, ...],
) -> list[Finding]:
    found = []

    def add(code: str, severity: str, text: str, remedy: str) -> None:
        found.append(Finding(code, severity, text, remedy, series.name))

    if series.u_reading is None:
        add(
            "no-stated-error",
            "note",
            "no reading error was stated: the scatter of the readings sets the scale",
            "state u_reading, from repeated readings of one solution",
        )
    elif fit.scatter.p_value < 0.01:
        add(
            "scatter-exceeds-stated",
            "warning",
            f"readings scatter {math.sqrt(fit.scatter.ratio):.2g} times as much as stated"
            f" (p = {fit.scatter.p_value:.1g})",
            "look for dust, a bad cell or a wrong u_reading",
        )
    by_form = {a.form: a.quantities["Mw"] for a in alternatives}
    zimm, berry = by_form["Zimm plane, equal weights"], by_form["Berry plane, equal weights"]
    if zimm.value and berry.value and zimm.u and berry.u:
        gap = abs(math.log(zimm.value / berry.value))
        if gap > 2.0 * math.hypot(zimm.u / zimm.value, berry.u / berry.value):
            add(
                "forms-differ",
                "warning",
                f"Zimm and Berry planes differ by {100 * gap:.2g} % in Mw, more than their errors",
                "measure lower concentrations and smaller angles; see the alternatives",
            )
    _range_findings(series, quantities, add)
    return found


def _range_findings(series: Series, quantities: Mapping[str, QuantityValue], add: Any) -> None:
    cells, radius, mass = series.cells, quantities["Rg"], quantities["Mw"]
    a2 = quantities["A2"].value
    if radius.value is not None:
        reach = radius.value / _CM_TO_NM * math.sqrt(float(cells.q2.max()))
        if reach > 1.3:
            add(
                "q-range-wide",
                "caution",
                f"q·Rg reaches {reach:.2g}: a straight line in q² biases Mw and Rg by per cents"
                " unless the dispersity is near 2",
                "compare the forms; use angles with q·Rg under 1.3",
            )
        limit = series.lam / series.n / 20.0 * _CM_TO_NM
        if radius.value < limit:
            add(
                "radius-below-limit",
                "note",
                f"Rg of {radius.value:.2g} nm is below λ/20 = {limit:.2g} nm in the medium: read it"
                " as a limit",
                "shorter wavelength, or no statement on Rg",
            )
    if mass.value is not None and a2 is not None:
        top = a2 * mass.value * float(cells.c.max())
        if top > 1.0:
            add(
                "concentrations-too-high",
                "warning",
                f"A2·Mw·c reaches {top:.2g}; higher virial terms than the third matter beyond 1",
                "measure lower concentrations",
            )


def _readings(series: Series, fit: sf.SurfaceFit) -> dict[str, tuple[float, ...]]:
    cells = series.cells
    angle = 2.0 * np.arcsin(np.sqrt(cells.q2) * series.lam / (4.0 * math.pi * series.n))
    residual = cells.g / fit.fitted - 1.0
    return {
        "c [g/L]": tuple((1e3 * cells.c).tolist()),
        "angle [deg]": tuple(np.degrees(angle).tolist()),
        "Kc/R [mol/g]": tuple((cells.c / cells.g).tolist()),
        "fitted Kc/R [mol/g]": tuple((cells.c / fit.fitted).tolist()),
        "R over fitted, less 1": tuple(residual.tolist()),
    }


def _fit_summary(fit: sf.SurfaceFit) -> dict[str, Any]:
    b0, b1, a2, g = (float(x) for x in fit.parameters)
    return {
        "intercept [mol/g]": b0,
        "slope in q² [mol cm²/g]": b1,
        "A2 [mol mL/g²]": a2,
        "third virial ratio g": g,
        "shared error per flask": fit.shared[0],
        "shared error per angle": fit.shared[1],
        "reading scatter over stated": math.sqrt(fit.scatter.scale2),
        "dof": [float(x) for x in fit.dof],
    }


ADAPTER = Adapter("light_scattering", COLUMNS, prepare, reduce)
