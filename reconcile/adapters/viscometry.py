"""Capillary viscometry: the limiting viscosity number from flow times over concentration."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters.common import (
    Adapter,
    check_columns,
    check_reading_error,
    effect_derivatives,
    medium_of,
    power_quantity,
    raise_problems,
    scatter_finding,
    solutions,
    table_of,
    value_of,
)
from reconcile.adapters.flask_fit import (
    NO_SCATTER,
    FlaskFit,
    Prior,
    ReadingError,
    fit_flasks,
    group_flasks,
    unknown_finding,
)
from reconcile.adapters.mark_houwink import Pair, molar_mass, pair_of, range_finding
from reconcile.evidence import (
    Alternative,
    Evidence,
    Finding,
    QuantityValue,
    Reduction,
    Row,
    frozen_array,
)
from reconcile.linalg import least_squares
from reconcile.measurement import ColumnSpec, Effect

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample

    Array = NDArray[np.float64]

__all__ = ["ADAPTER", "prepare", "reduce"]

COLUMNS: dict[str, ColumnSpec] = {
    "c": ColumnSpec(("concentration",), ("conc", "concentration"), required=True),
    "t": ColumnSpec(("time",), ("time", "flow time")),
    "eta_r": ColumnSpec(("ratio",), ("relative viscosity", "t/t0", "eta_rel", "η_r")),
    "eta": ColumnSpec(("viscosity",), ("viscosity", "η")),
}
_READINGS = ("t", "eta_r", "eta")

CUBIC_PRIOR = (0.5, 0.5)
"""Mean and sd of κ in k₃ = κ k_H²: 0 for Huggins, ½ for Martin, 1 for Schulz-Blaschke series."""

HUGGINS_PRIOR = (0.40, 0.20)
"""Mean and sd of k_H where fewer than three concentrations cannot show it."""


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """A checked series: concentrations in g/mL and readings; relative viscosities have no solvent.

    ``y`` is a flow time in s, a viscosity in Pa s, or η_r; ``solvent`` its readings at c = 0.
    """

    name: str
    medium: str | None
    quantity: str
    c: Array
    y: Array
    solvent: Array
    error: ReadingError
    u_flask: float
    effects: Mapping[str, Effect]
    named: tuple[str, ...]
    own_effects: tuple[Effect, ...]
    pair: Pair | None
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]


def prepare(measurement: Measurement, sample: Sample, effects: Mapping[str, Effect]) -> Series:
    """Check the series.

    Raises
    ------
    InputError
        With every problem found.
    """
    problems = check_columns(measurement, [_READINGS])
    raise_problems(problems)
    table = table_of(measurement)
    quantity = next(key for key in _READINGS if key in table.columns)
    solution = solutions(measurement, sample, problems, allow_zero=True)
    y = table.columns[quantity]
    _check_readings(measurement, quantity, problems)
    pair = pair_of(measurement, effects, problems)
    u_reading = measurement.fields.get("u_reading")
    if u_reading is not None and not problems:
        unit = np.ones_like(y) if u_reading.kind == "ratio" else y
        check_reading_error(measurement, u_reading.value, unit, problems)
    raise_problems(problems)
    is_solvent = solution.c == 0.0
    own = (*solution.effects, *(pair.own_effects if pair is not None else ()))
    return Series(
        measurement.name,
        medium_of(measurement),
        quantity,
        solution.c[~is_solvent],
        y[~is_solvent],
        y[is_solvent] if quantity != "eta_r" else np.empty(0),
        ReadingError(None)
        if u_reading is None
        else ReadingError(u_reading.value, is_relative=u_reading.kind == "ratio"),
        value_of(measurement.fields, "u_concentration") or 0.0,
        {**effects, **{effect.id: effect for effect in own}},
        (*measurement.effects, *(effect.id for effect in solution.effects)),
        own,
        pair,
        (*solution.assumptions, *(pair.assumptions if pair is not None else ())),
        (*solution.findings, *(pair.findings if pair is not None else ())),
    )


def _check_readings(measurement: Measurement, quantity: str, problems: list[Problem]) -> None:
    table = table_of(measurement)
    c, y = table.columns["c"], table.columns[quantity]
    for row in np.flatnonzero(y <= 0.0):
        found = f"found {y[row]:g}, expected more than 0"
        problems.append(table.problem(int(row), quantity, found))
    solvent = c == 0.0
    if not (c > 0.0).any():
        problems.append(
            measurement.place.problem("readings", "found no solution, expected at least one c > 0")
        )
    if quantity == "eta_r":
        for row in np.flatnonzero(solvent & (y != 1.0)):
            found = f"found {y[row]:g} at c = 0, expected 1"
            problems.append(table.problem(int(row), quantity, found))
    elif not solvent.any():
        problems.append(
            measurement.place.problem(
                "readings",
                "found no solvent row (c = 0), expected at least one",
                "add the solvent's own readings at c = 0",
            )
        )
    u = measurement.fields.get("u_reading")
    kinds = {"t": "time", "eta": "viscosity", "eta_r": "ratio"}
    if u is not None and u.kind not in {"ratio", kinds[quantity]}:
        found = f'"{u.text}" is a {u.kind}, the readings are a {kinds[quantity]}'
        problems.append(measurement.place.problem("u_reading", found))


def _model(values: Array, c: Array) -> tuple[Array, Array, Array]:
    """Return y = y₀(1 + x + k_H x² + κ k_H² x³), x = [η]c; parameters (y₀, [η], k_H, κ)."""
    y0, eta, huggins, kappa = values
    x = eta * c
    cubic = kappa * huggins**2
    ratio = 1.0 + x + huggins * x**2 + cubic * x**3
    by_x = 1.0 + 2.0 * huggins * x + 3.0 * cubic * x**2
    columns = [
        ratio,
        y0 * by_x * c,
        y0 * (x**2 + 2.0 * kappa * huggins * x**3),
        y0 * huggins**2 * x**3,
    ]
    return y0 * ratio, np.column_stack(columns), y0 * by_x * x


def _fit(series: Series) -> FlaskFit:
    """Fit the readings themselves, the solvent's among them; relative viscosities start at 1."""
    has_solvent = len(series.solvent) > 0
    flasks = group_flasks(
        np.concatenate([np.zeros_like(series.solvent), series.c]),
        np.concatenate([series.solvent, series.y]),
        series.error,
    )
    y0 = float(series.solvent.mean()) if has_solvent else 1.0
    solved = flasks.c > 0.0
    eta = float(np.median((flasks.mean[solved] / y0 - 1.0) / flasks.c[solved]))
    priors = [Prior(3, *CUBIC_PRIOR)]
    if int(solved.sum()) < 3:
        priors.append(Prior(2, *HUGGINS_PRIOR))
    start = np.array([y0, max(eta, 1e-3), HUGGINS_PRIOR[0], CUBIC_PRIOR[0]])
    return fit_flasks(
        flasks,
        series.error,
        series.u_flask,
        _model,
        start,
        priors,
        fixed=0 if has_solvent else 1,
        lower=1e-3 if has_solvent else -math.inf,
    )


def reduce(series: Series) -> Reduction:
    """Return [η], the Huggins constant and Mv with evidence, alternatives and findings."""
    curve = _fit(series)
    derivatives = effect_derivatives(series.effects, series.named, {"concentration": -1.0})
    pair = series.pair
    own = math.hypot(*(d * series.effects[k].u for k, d in derivatives.items()), 0.0)
    row = Row(
        "limiting_viscosity_number",
        None if pair is None else pair.observable,
        "[η] [mL/g]",
        curve.scatter.dof,
        {**derivatives, **(pair.derivatives if pair is not None else {})},
        series.medium,
    )
    quantities = _quantities(curve, pair, own)
    alternatives = _alternatives(series)
    findings = [*series.findings, *_findings(series, curve, quantities, alternatives)]
    evidence = None
    if curve.is_known:
        evidence = Evidence(
            series.name,
            (row,),
            frozen_array(curve.values[1:2]),
            frozen_array(curve.covariance[1:2, 1:2]),
        )
    return Reduction(
        series.name,
        "viscometry",
        "η_r series in [η]c, cubic term by prior",
        quantities,
        evidence,
        alternatives,
        tuple(findings),
        (),
        _readings(series, curve),
        _fit_summary(series, curve),
        () if pair is None else pair.listed,
        series.assumptions,
        series.own_effects,
    )


def _quantities(curve: FlaskFit, pair: Pair | None, u_shared: float) -> dict[str, QuantityValue]:
    _, eta, huggins, _ = (float(x) for x in curve.values)
    if curve.is_known:
        sd = np.sqrt(np.diag(curve.covariance))
        nu = curve.scatter.dof
        number = power_quantity(
            eta, sd[1], nu, power=1.0, factor=1.0, unit="mL/g", u_effects=u_shared
        )
        constant = power_quantity(
            huggins, sd[2], nu, power=1.0, factor=1.0, unit="1", u_effects=0.0
        )
    else:
        number = QuantityValue(eta, "mL/g", why=NO_SCATTER)
        constant = QuantityValue(huggins, "1", why=NO_SCATTER)
    found = {"limiting_viscosity_number": number, "huggins_constant": constant}
    if pair is not None:
        found["Mv"] = molar_mass(pair, number)
    return found


def _alternatives(series: Series) -> tuple[Alternative, ...]:
    y0 = float(series.solvent.mean()) if len(series.solvent) else 1.0
    c, ratio = series.c, series.y / y0
    if len(np.unique(c)) < 2:
        return _single_point(series, float(c[0]), float(ratio.mean()))
    found = []
    reduced, inherent = (ratio - 1.0) / c, np.log(ratio) / c
    for form, label, y, sign in (
        ("Huggins line", "huggins_constant", reduced, 1.0),
        ("Kraemer line", "kraemer_constant", inherent, -1.0),
    ):
        quantities = _line(c, y, label, sign)
        if series.pair is not None:
            quantities["Mv"] = molar_mass(series.pair, quantities["limiting_viscosity_number"])
        found.append(Alternative(f"{form}, equal weights", quantities))
    return tuple(found)


def _line(c: Array, y: Array, label: str, sign: float) -> dict[str, QuantityValue]:
    """Return [η] and the slope's constant of y = [η] ± k[η]²c by equal weights."""
    fitted = least_squares(np.column_stack([np.ones_like(c), c]), y)
    eta, slope = (float(x) for x in fitted.coefficients)
    if eta == 0.0:
        why = "the line meets the axis at 0"
        return {
            "limiting_viscosity_number": QuantityValue(eta, "mL/g", why=why),
            label: QuantityValue(None, "1", why=why),
        }
    constant = sign * slope / eta**2
    if fitted.dof < 1:
        why = "as many readings as unknowns"
        return {
            "limiting_viscosity_number": QuantityValue(eta, "mL/g", why=why),
            label: QuantityValue(constant, "1", why=why),
        }
    carry = np.array([[1.0, 0.0], [-2.0 * constant / eta, sign / eta**2]])
    sd = np.sqrt(np.diag(carry @ fitted.scatter_covariance() @ carry.T))
    return {
        "limiting_viscosity_number": power_quantity(
            eta, sd[0], fitted.dof, power=1.0, factor=1.0, unit="mL/g", u_effects=0.0
        ),
        label: power_quantity(
            constant, sd[1], fitted.dof, power=1.0, factor=1.0, unit="1", u_effects=0.0
        ),
    }


def _single_point(series: Series, c: float, ratio: float) -> tuple[Alternative, ...]:
    """Return the one-point forms: reduced viscosity, Solomon-Ciuta (k_H = ⅓), Billmeyer (⅜)."""
    increment = ratio - 1.0
    forms = {
        "reduced viscosity": increment / c,
        "Solomon–Ciuta": math.sqrt(max(2.0 * (increment - math.log(ratio)), 0.0)) / c,
        "Billmeyer": (increment + 3.0 * math.log(ratio)) / (4.0 * c),
    }
    found = []
    for form, eta in forms.items():
        number = QuantityValue(eta, "mL/g", why="a single point has no line to err about")
        quantities = {"limiting_viscosity_number": number}
        if series.pair is not None:
            quantities["Mv"] = molar_mass(series.pair, number)
        found.append(Alternative(f"single point, {form}", quantities))
    return tuple(found)


def _findings(
    series: Series,
    curve: FlaskFit,
    quantities: Mapping[str, QuantityValue],
    alternatives: tuple[Alternative, ...],
) -> list[Finding]:
    look_for = "look for dust, temperature, a bad flask"
    stated = series.error.u is not None
    found = list(scatter_finding(series.name, curve.scatter, look_for, stated=stated))
    found += unknown_finding(series.name, curve)

    def add(code: str, severity: str, text: str, remedy: str) -> None:
        found.append(Finding(code, severity, text, remedy, series.name))

    n_flasks = len(np.unique(series.c))
    if n_flasks < 3:
        text = (
            f"{n_flasks} concentration(s) cannot show the Huggins constant: it is taken as"
            f" {HUGGINS_PRIOR[0]:g} ± {HUGGINS_PRIOR[1]:g}"
        )
        add("few-concentrations", "caution", text, "measure at least four concentrations")
    _window_findings(series, quantities, add)
    _intercept_finding(alternatives, add)
    if series.pair is not None:
        found += range_finding(series.pair, quantities["Mv"].value, series.name)
    return found


def _window_findings(series: Series, quantities: Mapping[str, QuantityValue], add: Any) -> None:
    y0 = float(series.solvent.mean()) if len(series.solvent) else 1.0
    ratio = series.y / y0
    low, high = float(ratio.min()), float(ratio.max())
    if high > 2.0 or low < 1.1:
        text = f"relative viscosity runs from {low:.2f} to {high:.2f}; 1.2 to 2.0 is usual"
        remedy = "dilute" if high > 2.0 else "more concentrated solutions"
        add("relative-viscosity-range", "caution" if high < 2.5 else "warning", text, remedy)
    if series.quantity == "t" and y0 < 200.0:
        severity = "caution" if y0 < 100.0 else "note"
        text = f"the solvent runs in {y0:.4g} s; under 200 s the kinetic-energy term matters"
        add("short-flow-time", severity, text, "a capillary with longer flow times")
    constant = quantities["huggins_constant"]
    if constant.value is not None and not 0.2 <= constant.value <= 1.0:
        text = f"the Huggins constant is {constant.value:.2g}; 0.3 to 0.8 is usual"
        add("huggins-constant-unusual", "caution", text,
            "check the solvent's time, adsorption and association")  # fmt: skip


def _intercept_finding(alternatives: tuple[Alternative, ...], add: Any) -> None:
    by_form = {a.form: a.quantities["limiting_viscosity_number"] for a in alternatives}
    huggins = by_form.get("Huggins line, equal weights")
    kraemer = by_form.get("Kraemer line, equal weights")
    if huggins is None or kraemer is None or not (huggins.value and kraemer.value):
        return
    gap = abs(huggins.value / kraemer.value - 1.0)
    joint = 2.0 * math.hypot(huggins.u or 0.0, kraemer.u or 0.0) / kraemer.value
    if gap > 0.02 or (0.0 < joint < gap and gap > 0.005):
        text = (
            f"Huggins and Kraemer lines meet the axis {100 * gap:.2g} % apart"
            f" ({huggins.value:.4g} and {kraemer.value:.4g} mL/g)"
        )
        add(
            "intercepts-differ",
            "warning" if gap > 0.02 else "note",
            text,
            "dilute until they meet; see the alternatives",
        )


def _readings(series: Series, curve: FlaskFit) -> dict[str, tuple[float, ...]]:
    y0 = float(curve.mode[0])
    ratio = series.y / y0
    heading = {"t": "t [s]", "eta": "viscosity [Pa s]", "eta_r": "eta_r [1]"}[series.quantity]
    return {
        "c [g/dL]": tuple((1e2 * series.c).tolist()),
        heading: tuple(series.y.tolist()),
        f"fitted {heading}": tuple(_model(curve.mode, series.c)[0].tolist()),
        "(eta_r - 1)/c [mL/g]": tuple(((ratio - 1.0) / series.c).tolist()),
        "ln(eta_r)/c [mL/g]": tuple((np.log(ratio) / series.c).tolist()),
    }


def _fit_summary(series: Series, curve: FlaskFit) -> dict[str, Any]:
    y0, eta, huggins, kappa = (float(x) for x in curve.mode)
    grid = np.linspace(0.0, float(series.c.max()), 41)[1:]
    ratio = _model(curve.mode, grid)[0] / y0
    return {
        "solvent": y0,
        "[η] [mL/g]": eta,
        "k_H": huggins,
        "kappa, k3 over k_H squared": kappa,
        "scatter over stated": math.sqrt(curve.scatter.scale2) if curve.is_known else None,
        "dof": curve.scatter.dof,
        "curve c [g/dL]": (1e2 * grid).tolist(),
        "curve (eta_r - 1)/c [mL/g]": ((ratio - 1.0) / grid).tolist(),
    }


ADAPTER = Adapter("viscometry", COLUMNS, prepare, reduce)
