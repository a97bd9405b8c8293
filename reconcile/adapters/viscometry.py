"""Capillary viscometry: the limiting viscosity number from flow times over concentration."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters.common import (
    Adapter,
    Flasks,
    Scatter,
    check_columns,
    effect_derivatives,
    group_flasks,
    medium_of,
    power_quantity,
    raise_problems,
    solutions,
    value_of,
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
from reconcile.nonlinear import fit

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample, Table

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
"""Mean and sd of κ in k₃ = κ k_H²: 0 for a Huggins series, ½ for Martin's, 1 for Schulz-Blaschke's."""

HUGGINS_PRIOR = (0.40, 0.20)
"""Mean and sd of k_H where fewer than three concentrations cannot show it."""

_UNKNOWN = "no reading error was stated and there is no scatter to learn it from"


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """A checked series: concentrations in g/mL and readings; relative viscosities have no solvent.

    ``y`` is a flow time in s, a viscosity in Pa s, or η_r; ``solvent`` its readings at c = 0.
    ``u_reading`` is absolute, or relative where ``is_relative``.
    """

    name: str
    medium: str | None
    quantity: str
    c: Array
    y: Array
    solvent: Array
    u_reading: float | None
    is_relative: bool
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
    table = _table(measurement)
    quantity = next(key for key in _READINGS if key in table.columns)
    solution = solutions(measurement, sample, problems, allow_zero=True)
    y = table.columns[quantity]
    _check_readings(measurement, quantity, problems)
    pair = pair_of(measurement, effects, problems)
    raise_problems(problems)
    is_solvent = solution.c == 0.0
    own = (*solution.effects, *(pair.own_effects if pair is not None else ()))
    u_reading = measurement.fields.get("u_reading")
    return Series(
        measurement.name,
        medium_of(measurement),
        quantity,
        solution.c[~is_solvent],
        y[~is_solvent],
        y[is_solvent] if quantity != "eta_r" else np.empty(0),
        None if u_reading is None else u_reading.value,
        u_reading is not None and u_reading.kind == "ratio",
        value_of(measurement.fields, "u_concentration") or 0.0,
        {**effects, **{effect.id: effect for effect in own}},
        (*measurement.effects, *(effect.id for effect in solution.effects)),
        own,
        pair,
        (*solution.assumptions, *(pair.assumptions if pair is not None else ())),
        (*solution.findings, *(pair.findings if pair is not None else ())),
    )


def _table(measurement: Measurement) -> Table:
    assert measurement.table is not None  # noqa: S101 - check_columns came first
    return measurement.table


def _check_readings(measurement: Measurement, quantity: str, problems: list[Problem]) -> None:
    table = _table(measurement)
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


@dataclass(frozen=True, slots=True, eq=False)
class _Curve:
    """The default fit: (y₀, [η], k_H, κ) with covariance, and what the scatter said."""

    values: Array
    covariance: Array
    scatter: Scatter

    @property
    def is_known(self) -> bool:
        """Whether there is an uncertainty."""
        return bool(np.isfinite(self.covariance).all())


def _relative_viscosity(values: Array, c: Array) -> Array:
    """Return η_r = 1 + x + k_H x² + κ k_H² x³, x = [η]c."""
    _, eta, huggins, kappa = values
    x = eta * c
    return np.asarray(1.0 + x + huggins * x**2 + kappa * huggins**2 * x**3)


def _slopes(values: Array, c: Array) -> tuple[Array, Array]:
    """Return ∂y/∂(y₀, [η], k_H, κ), shape (k, 4), and ∂y/∂ ln c."""
    y0, eta, huggins, kappa = values
    x = eta * c
    cubic = kappa * huggins**2
    by_x = 1.0 + 2.0 * huggins * x + 3.0 * cubic * x**2
    columns = [
        _relative_viscosity(values, c),
        y0 * by_x * c,
        y0 * (x**2 + 2.0 * kappa * huggins * x**3),
        y0 * huggins**2 * x**3,
    ]
    return np.column_stack(columns), y0 * by_x * x


@dataclass(frozen=True, slots=True, eq=False)
class _Data:
    """Means per flask with the solvent first; relative viscosities have a solvent of 1, exactly."""

    c: Array
    mean: Array
    count: Array
    within: float
    within_dof: int
    has_solvent: bool


def _data(series: Series) -> _Data:
    flasks = group_flasks(series.c, series.y)
    within, within_dof = _within(series, flasks)
    if series.quantity == "eta_r":
        return _Data(flasks.c, flasks.mean, flasks.count, within, within_dof, has_solvent=False)
    solvent = series.solvent
    unit = _unit_error(series, np.array([solvent.mean()]))[0]
    within += float(np.sum(((solvent - solvent.mean()) / unit) ** 2))
    return _Data(
        np.concatenate([[0.0], flasks.c]),
        np.concatenate([[solvent.mean()], flasks.mean]),
        np.concatenate([[float(len(solvent))], flasks.count]),
        within,
        within_dof + len(solvent) - 1,
        has_solvent=True,
    )


def _unit_error(series: Series, mean: Array) -> Array:
    """Return the error of one reading; without a stated one only its constancy matters."""
    if series.u_reading is None:
        return np.full_like(mean, 0.01 * float(np.mean(series.y)))
    return mean * series.u_reading if series.is_relative else np.full_like(mean, series.u_reading)


def _within(series: Series, flasks: Flasks) -> tuple[float, int]:
    unit = _unit_error(series, flasks.mean)[flasks.index]
    return float(np.sum(((series.y - flasks.mean[flasks.index]) / unit) ** 2)), flasks.within_dof


def _fit_curve(series: Series, data: _Data) -> _Curve:
    """Fit the readings themselves, the solvent's among them.

    Notes
    -----
    As for osmotic pressures: a flask's concentration error enters as u_c ∂y/∂ ln c, the scatter
    multiplies the readings' part of the covariance and no prior's.
    """
    y0 = data.mean[0] if data.has_solvent else 1.0
    solved = data.c > 0.0
    eta = float(np.median((data.mean[solved] / y0 - 1.0) / data.c[solved]))
    values = np.array([y0, max(eta, 1e-3), HUGGINS_PRIOR[0], CUBIC_PRIOR[0]])
    few = int(solved.sum()) < 3
    dof = len(data.c) - (1 if data.has_solvent else 0) - (1 if few else 2) + data.within_dof
    scale2 = 1.0
    for _ in range(3):
        sd = _flask_sd(series, data, values)
        values, covariance = _solve(data, values, sd * math.sqrt(scale2), few=few)
        sd = _flask_sd(series, data, values)
        misfit = (data.mean - values[0] * _relative_viscosity(values, data.c)) / sd
        scatter = Scatter.of(
            float(misfit @ misfit) + data.within, dof, stated=series.u_reading is not None
        )
        if not math.isfinite(scatter.scale2):
            break
        scale2 = max(scatter.scale2, 1e-20)
    if not math.isfinite(scatter.scale2):
        covariance = np.full((4, 4), np.nan)
    return _Curve(values, covariance, scatter)


def _flask_sd(series: Series, data: _Data, values: Array) -> Array:
    _, by_c = _slopes(values, data.c)
    reading = _unit_error(series, data.mean) / np.sqrt(data.count)
    return np.asarray(np.hypot(reading, series.u_flask * by_c))


def _solve(data: _Data, start: Array, sd: Array, *, few: bool) -> tuple[Array, Array]:
    """Return (y₀, [η], k_H, κ) and their covariance; y₀ is held at 1 for relative viscosities."""
    scale = np.array([start[0], start[1], 1.0, 1.0])
    priors = [(3, *CUBIC_PRIOR)] + ([(2, *HUGGINS_PRIOR)] if few else [])
    free = slice(0 if data.has_solvent else 1, 4)

    def complete(p: Array) -> Array:
        return np.concatenate([[1.0], p]) if not data.has_solvent else p

    def residual(p: Array) -> Array:
        values = complete(p) * scale
        misfit = (values[0] * _relative_viscosity(values, data.c) - data.mean) / sd
        return np.append(misfit, [(values[k] - m) / s for k, m, s in priors])

    def jacobian(p: Array) -> Array:
        slopes, _ = _slopes(complete(p) * scale, data.c)
        rows = [np.eye(4)[k] / s for k, _, s in priors]
        return (np.vstack([slopes / sd[:, None], rows]) * scale)[:, free]

    found = fit(residual, jacobian, (start / scale)[free])
    covariance = np.zeros((4, 4))
    covariance[free, free] = found.covariance
    return complete(found.values) * scale, covariance * np.outer(scale, scale)


def reduce(series: Series) -> Reduction:
    """Return [η], the Huggins constant and Mv with evidence, alternatives and findings."""
    data = _data(series)
    curve = _fit_curve(series, data)
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
    findings = [*series.findings, *_findings(series, data, curve, quantities, alternatives)]
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


def _quantities(curve: _Curve, pair: Pair | None, u_shared: float) -> dict[str, QuantityValue]:
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
        number = QuantityValue(eta, "mL/g", why=_UNKNOWN)
        constant = QuantityValue(huggins, "1", why=_UNKNOWN)
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
    data: _Data,
    curve: _Curve,
    quantities: Mapping[str, QuantityValue],
    alternatives: tuple[Alternative, ...],
) -> list[Finding]:
    found: list[Finding] = []

    def add(code: str, severity: str, text: str, remedy: str) -> None:
        found.append(Finding(code, severity, text, remedy, series.name))

    n_flasks = int((data.c > 0.0).sum())
    if not curve.is_known:
        text = f"{_UNKNOWN}: the numbers stand without uncertainty and stay out of the estimate"
        add("no-uncertainty", "warning", text, "state u_reading")
    elif series.u_reading is None:
        text = "no reading error was stated: the scatter of the readings sets the scale"
        add("no-stated-error", "note", text, "state u_reading, from repeated timings")
    elif curve.scatter.p_value < 0.01:
        text = (
            f"readings scatter {math.sqrt(curve.scatter.ratio):.2g} times as much as stated"
            f" (p = {curve.scatter.p_value:.1g})"
        )
        add("scatter-exceeds-stated", "warning", text, "look for dust, temperature, a bad flask")
    if n_flasks < 3:
        text = (
            f"{n_flasks} concentration(s) cannot show the Huggins constant: it is taken as"
            f" {HUGGINS_PRIOR[0]:g} ± {HUGGINS_PRIOR[1]:g}"
        )
        add("few-concentrations", "caution", text, "measure at least four concentrations")
    _window_findings(series, data, quantities, add)
    _intercept_finding(alternatives, add)
    if series.pair is not None:
        found += range_finding(series.pair, quantities["Mv"].value, series.name)
    return found


def _window_findings(
    series: Series, data: _Data, quantities: Mapping[str, QuantityValue], add: Any
) -> None:
    y0 = data.mean[0] if data.has_solvent else 1.0
    ratio = data.mean[data.c > 0.0] / y0
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
    if gap > max(0.02, 0.0) or (joint > 0.0 and gap > max(joint, 0.005)):
        text = (
            f"Huggins and Kraemer lines meet the axis {100 * gap:.2g} % apart"
            f" ({huggins.value:.4g} and {kraemer.value:.4g} mL/g)"
        )
        add("intercepts-differ", "warning", text, "dilute until they meet; see the alternatives")


def _readings(series: Series, curve: _Curve) -> dict[str, tuple[float, ...]]:
    y0 = float(curve.values[0])
    ratio = series.y / y0
    heading = {"t": "t [s]", "eta": "viscosity [Pa s]", "eta_r": "eta_r [1]"}[series.quantity]
    return {
        "c [g/dL]": tuple((1e2 * series.c).tolist()),
        heading: tuple(series.y.tolist()),
        f"fitted {heading}": tuple((y0 * _relative_viscosity(curve.values, series.c)).tolist()),
        "(eta_r - 1)/c [mL/g]": tuple(((ratio - 1.0) / series.c).tolist()),
        "ln(eta_r)/c [mL/g]": tuple((np.log(ratio) / series.c).tolist()),
    }


def _fit_summary(series: Series, curve: _Curve) -> dict[str, Any]:
    y0, eta, huggins, kappa = (float(x) for x in curve.values)
    grid = np.linspace(0.0, float(series.c.max()), 41)[1:]
    ratio = _relative_viscosity(curve.values, grid)
    return {
        "solvent": y0,
        "[η] [mL/g]": eta,
        "k_H": huggins,
        "kappa, k3 over k_H squared": kappa,
        "scatter over stated": math.sqrt(max(curve.scatter.scale2, 0.0)) if curve.is_known else None,
        "dof": curve.scatter.dof,
        "curve c [g/dL]": (1e2 * grid).tolist(),
        "curve (eta_r - 1)/c [mL/g]": ((ratio - 1.0) / grid).tolist(),
    }


ADAPTER = Adapter("viscometry", COLUMNS, prepare, reduce)
