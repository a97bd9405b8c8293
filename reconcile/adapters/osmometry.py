"""Membrane osmometry: Mn and A2 from osmotic pressures over concentration."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters.common import (
    GAS_CONSTANT,
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
from reconcile.linalg import least_squares
from reconcile.measurement import ColumnSpec, Effect
from reconcile.observables import inverse_average, osmotic_virial

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.adapters.flask_fit import Model
    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample

    Array = NDArray[np.float64]

__all__ = ["ADAPTER", "prepare", "reduce"]

COLUMNS: dict[str, ColumnSpec] = {
    "c": ColumnSpec(("concentration",), ("conc", "concentration"), required=True),
    "head": ColumnSpec(("length",), ("h", "height")),
    "pi": ColumnSpec(("pressure",), ("π", "p", "pressure", "osmotic pressure")),
}

STANDARD_GRAVITY = 9.80665
VIRIAL_RATIO_PRIOR = (0.25, 0.2)
"""Mean and sd of g = A₃/(A₂² Mn); theory and experiment in good solvents span 0 to 0.5."""

_LOWEST_INTERCEPT = 1e-3
"""Lower bound of 1/Mn over its first guess: the third virial term divides by it."""

_G_PER_CM3 = 1e3  # kg/m³
_CM = 1e-2  # m


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """A checked series: c in g/mL and π in Pa per reading, RT in J/mol · 1e6 (Pa mL/mol).

    ``error`` in Pa.
    """

    name: str
    medium: str | None
    rt: float
    c: Array
    pi: Array
    error: ReadingError
    u_flask: float
    effects: Mapping[str, Effect]
    named: tuple[str, ...]
    own_effects: tuple[Effect, ...]
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]
    constants: tuple[Constant, ...]


def prepare(measurement: Measurement, sample: Sample, effects: Mapping[str, Effect]) -> Series:
    """Check the series and bring heads to pressures.

    Raises
    ------
    InputError
        With every problem found.
    """
    problems = check_columns(measurement, [("head", "pi")])
    raise_problems(problems)
    table = table_of(measurement)
    solution = solutions(measurement, sample, problems, allow_zero=False)
    weight, constants = _specific_weight(measurement, problems)
    error = _reading_error(measurement, weight, problems)
    pi = table.columns["pi"] if "pi" in table.columns else table.columns["head"] * weight
    if not problems and not (pi > 0.0).any():
        problems.append(
            measurement.place.problem(
                "readings", "found no pressure above 0", "is the sign of the readings turned?"
            )
        )
    if not problems:
        unit = np.ones_like(pi) if error.is_relative else pi
        check_reading_error(measurement, error.u, unit, problems)
    n_flasks = len(np.unique(solution.c))
    if n_flasks < 2:
        problems.append(
            measurement.place.problem(
                "readings",
                f"found {n_flasks} concentration, expected at least 2",
                "one concentration cannot separate Mn from A2",
            )
        )
    raise_problems(problems)
    assert measurement.temperature is not None  # noqa: S101 - the schema requires it
    everything = {**effects, **{effect.id: effect for effect in solution.effects}}
    return Series(
        measurement.name,
        medium_of(measurement),
        GAS_CONSTANT * measurement.temperature * 1e6,
        solution.c,
        pi,
        error,
        value_of(measurement.fields, "u_concentration") or 0.0,
        everything,
        (*measurement.effects, *(effect.id for effect in solution.effects)),
        solution.effects,
        solution.assumptions,
        solution.findings,
        constants,
    )


def _specific_weight(
    measurement: Measurement, problems: list[Problem]
) -> tuple[float, tuple[Constant, ...]]:
    """Return the pressure in Pa of 1 cm of the manometer's liquid; 0 where it is not needed."""
    density = value_of(measurement.fields, "liquid_density")
    gravity = value_of(measurement.fields, "gravity")
    listed = [Constant("R", GAS_CONSTANT, "J/(mol K)", "CODATA 2018, exact by the SI", "computed")]
    if density is None:
        if "head" in table_of(measurement).columns:
            problems.append(
                measurement.place.problem(
                    "liquid_density",
                    "is missing, and heads need it",
                    'give the density of the liquid in the manometer: "0.800 g/mL"',
                )
            )
        return 0.0, tuple(listed)
    origin = "standard gravity, CGPM 1901" if gravity is None else "stated"
    g = STANDARD_GRAVITY if gravity is None else gravity
    listed += [
        Constant("g", g, "m/s²", origin, "computed" if gravity is None else "stated"),
        Constant("density of the manometer's liquid", density, "g/mL", "case", "stated"),
    ]
    return density * _G_PER_CM3 * g * _CM, tuple(listed)


def _reading_error(
    measurement: Measurement, weight: float, problems: list[Problem]
) -> ReadingError:
    entry = measurement.fields.get("u_reading")
    if entry is None:
        return ReadingError(None)
    if entry.kind == "ratio":
        return ReadingError(entry.value, is_relative=True)
    if entry.kind == "length":
        # without the density, heads have already been refused
        if weight == 0.0 and "pi" in table_of(measurement).columns:
            problems.append(
                measurement.place.problem(
                    "u_reading",
                    f'"{entry.text}" is a length, and liquid_density is not given',
                    "state it as a pressure, or give liquid_density",
                )
            )
        return ReadingError(entry.value * weight)
    return ReadingError(entry.value)


def _virial(rt: float) -> Model:
    """Return the model π = RT c (I + A₂c + g A₂²c²/I) in Pa, parameters (I = 1/Mn, A₂, g)."""

    def model(values: Array, c: Array) -> tuple[Array, Array, Array]:
        i, a2, g = values
        square = (a2 * c) ** 2 / i
        pi = rt * c * (i + a2 * c + g * square)
        columns = [1.0 - g * square / i, c + 2.0 * g * a2 * c**2 / i, square]
        by_c = rt * c * (i + 2.0 * a2 * c + 3.0 * g * square)
        return pi, rt * c[:, None] * np.column_stack(columns), by_c

    return model


def _fit(series: Series) -> FlaskFit:
    """Fit (1/Mn, A₂, g), g marginalised by its place in the covariance."""
    flasks = group_flasks(series.c, series.pi, series.error)
    y = flasks.mean / (series.rt * flasks.c)
    design = np.column_stack([np.ones_like(y), flasks.c])
    intercept, slope = least_squares(design, y, 1.0 / flasks.c).coefficients
    if intercept <= 0.0:
        # a noisy line through zero: start from the lowest reading instead
        intercept = max(float(y.min()), 1e-3 * abs(slope) * float(flasks.c[-1]))
    floor = 1e-3 * intercept / float(flasks.c[-1])
    centre, width = VIRIAL_RATIO_PRIOR
    start = np.array([intercept, slope if abs(slope) > floor else floor, centre])
    return fit_flasks(
        flasks,
        series.error,
        series.u_flask,
        _virial(series.rt),
        start,
        [Prior(2, centre, width)],
        lower=_LOWEST_INTERCEPT,
    )


def reduce(series: Series) -> Reduction:
    """Return Mn and A2 with their evidence, alternatives and findings."""
    virial = _fit(series)
    rows = _rows(series, virial)
    quantities = _quantities(series, virial, rows)
    alternatives = _alternatives(series)
    findings = _findings(series, virial, alternatives)
    evidence = None
    if virial.is_known:
        evidence = Evidence(
            series.name,
            rows,
            frozen_array(virial.values[:2]),
            frozen_array(virial.covariance[:2, :2]),
        )
    return Reduction(
        series.name,
        "osmometry",
        "virial series, g by prior",
        quantities,
        evidence,
        alternatives,
        (*series.findings, *findings),
        (),
        _readings(series, virial),
        _fit_summary(series, virial),
        series.constants,
        series.assumptions,
        series.own_effects,
    )


def _rows(series: Series, virial: FlaskFit) -> tuple[Row, ...]:
    nu = virial.scatter.dof
    # I and A2 both scale as π/(RT); I falls with c, A2 with c²
    inverse = {"concentration": -1.0, "pressure": 1.0, "temperature": -1.0}
    slope = {"concentration": -2.0, "pressure": 1.0, "temperature": -1.0}
    mn = effect_derivatives(series.effects, series.named, inverse)
    a2 = effect_derivatives(series.effects, series.named, slope)
    medium = series.medium
    return (
        Row("Mn", inverse_average("Mn"), "1/Mn [mol/g]", nu, mn, medium),
        Row("A2", None, "A2 [mol mL/g²]", nu, a2, medium, osmotic_virial()),
    )


def _quantities(
    series: Series, virial: FlaskFit, rows: tuple[Row, ...]
) -> dict[str, QuantityValue]:
    i, a2, g = (float(x) for x in virial.values)
    if not virial.is_known:
        return {
            "Mn": QuantityValue(1.0 / i, "g/mol", why=NO_SCATTER),
            "A2": QuantityValue(a2, "mol mL/g²", why=NO_SCATTER),
        }
    sd = np.sqrt(np.diag(virial.covariance))

    def shared(row: Row) -> float:
        parts = [d * series.effects[key].u for key, d in row.derivatives.items()]
        return math.hypot(*parts) if parts else 0.0

    nu = virial.scatter.dof
    return {
        "Mn": power_quantity(
            i, sd[0], nu, power=-1.0, factor=1.0, unit="g/mol", u_effects=shared(rows[0])
        ),
        "A2": power_quantity(
            a2, sd[1], nu, power=1.0, factor=1.0, unit="mol mL/g²", u_effects=shared(rows[1])
        ),
        "third_virial_ratio": power_quantity(
            g, sd[2], math.inf, power=1.0, factor=1.0, unit="1", u_effects=0.0
        ),
    }


def _alternatives(series: Series) -> tuple[Alternative, ...]:
    c, y = series.c, series.pi / (series.rt * series.c)
    n_flasks = len(np.unique(c))
    found = [Alternative("straight line, equal weights", _polynomial(c, y, 1, 1.0))]
    found.append(Alternative("straight line, weighted", _polynomial(c, y, 1, 1.0 / c)))
    if (y > 0.0).all():
        found.append(Alternative("square root, equal weights", _square_root(c, y)))
    if n_flasks >= 3:
        found.append(Alternative("quadratic, equal weights", _polynomial(c, y, 2, 1.0)))
    return tuple(found)


def _polynomial(c: Array, y: Array, degree: int, sd: Array | float) -> dict[str, QuantityValue]:
    fitted = least_squares(np.vander(c, degree + 1, increasing=True), y, sd)
    return _from_line(
        fitted.coefficients[:2], fitted.scatter_covariance()[:2, :2], fitted.dof, np.eye(2)
    )


def _square_root(c: Array, y: Array) -> dict[str, QuantityValue]:
    """√(π/cRT) on a line: 1/Mn is its intercept squared, A2 twice intercept times slope."""
    fitted = least_squares(np.column_stack([np.ones_like(c), c]), np.sqrt(y))
    root, slope = fitted.coefficients
    carry = np.array([[2.0 * root, 0.0], [2.0 * slope, 2.0 * root]])
    values = np.array([root**2, 2.0 * root * slope])
    return _from_line(values, fitted.scatter_covariance(), fitted.dof, carry)


def _from_line(
    values: Array, covariance: Array, dof: int, carry: Array
) -> dict[str, QuantityValue]:
    inverse, a2 = (float(x) for x in values)
    if dof < 1:
        why = "as many readings as unknowns"
        mn = 1.0 / inverse if inverse > 0.0 else None
        return {
            "Mn": QuantityValue(mn, "g/mol", why=why),
            "A2": QuantityValue(a2, "mol mL/g²", why=why),
        }
    sd = np.sqrt(np.diag(carry @ covariance @ carry.T))
    return {
        "Mn": power_quantity(
            inverse, sd[0], dof, power=-1.0, factor=1.0, unit="g/mol", u_effects=0.0
        ),
        "A2": power_quantity(
            a2, sd[1], dof, power=1.0, factor=1.0, unit="mol mL/g²", u_effects=0.0
        ),
    }


def _findings(
    series: Series, virial: FlaskFit, alternatives: tuple[Alternative, ...]
) -> list[Finding]:
    look_for = "look for drift, leaks, a bad flask"
    stated = series.error.u is not None
    found = list(scatter_finding(series.name, virial.scatter, look_for, stated=stated))
    found += unknown_finding(series.name, virial)

    def add(code: str, severity: str, text: str, remedy: str) -> None:
        found.append(Finding(code, severity, text, remedy, series.name))

    if virial.at_bound:
        text = "the ordinate intercept is not positive: Mn is beyond what these readings resolve"
        add("no-intercept", "warning", text, "more concentrated solutions, or another method")
    reach = abs(float(virial.values[1] / virial.values[0]))
    top = reach * float(series.c.max())
    if top > 1.0:
        text = f"A2·Mn·c reaches {top:.2g}; terms beyond the third virial one matter there"
        add("concentrations-too-high", "warning", text, "measure lower concentrations")
    a2, u_a2 = float(virial.values[1]), math.sqrt(virial.covariance[1, 1])
    if a2 < -2.0 * u_a2:
        text = "A2 is negative: a poor solvent, association, or drift over the series"
        add("negative-a2", "caution", text, "change temperature or solvent; read in reverse order")
    ratio = float(virial.values[2])
    if abs(ratio - VIRIAL_RATIO_PRIOR[0]) > 1.5 * VIRIAL_RATIO_PRIOR[1]:
        text = f"the third virial ratio comes out as {ratio:.2g}; 0 to 0.5 is usual"
        add("third-virial-unusual", "caution", text, "the highest or lowest flasks bend the curve")
    below = int((series.pi <= 0.0).sum())
    if below:
        text = f"{below} reading(s) at or below zero pressure"
        add("no-pressure", "warning", text, "check zero and sign of those readings")
    _form_finding(series, alternatives, reach, add)
    return found


def _form_finding(
    series: Series, alternatives: tuple[Alternative, ...], reach: float, add: Any
) -> None:
    n_flasks = len(np.unique(series.c))
    if n_flasks < 4:
        text = f"{n_flasks} concentrations leave little to check the extrapolation with"
        add("few-concentrations", "caution", text, "measure at least four")
    by_form = {a.form: a.quantities["Mn"] for a in alternatives}
    line = by_form["straight line, equal weights"]
    root = by_form.get("square root, equal weights")
    if root is not None and line.value and root.value and line.u and root.u:
        gap = abs(math.log(line.value / root.value))
        if gap > 2.0 * math.hypot(line.u / line.value, root.u / root.value):
            low = 1e3 * min(0.15 / max(reach, 1e-30), float(series.c.max()))
            text = (
                f"straight and square-root lines differ by {100 * gap:.2g} % in Mn, beyond errors"
            )
            add(
                "forms-differ",
                "warning",
                text,
                f"concentrations up to {low:.2g} g/L would settle it",
            )


def _readings(series: Series, virial: FlaskFit) -> dict[str, tuple[float, ...]]:
    fitted, _, _ = _virial(series.rt)(virial.mode, series.c)
    # the plot's ordinate in mol/kg, so that 1/Mn in mol/g is not lost in zeros
    ordinate = 1e3 / (series.rt * series.c)
    return {
        "c [g/L]": tuple((1e3 * series.c).tolist()),
        "pi [Pa]": tuple(series.pi.tolist()),
        "fitted pi [Pa]": tuple(fitted.tolist()),
        "pi/(cRT) [mol/kg]": tuple((ordinate * series.pi).tolist()),
        "fitted pi/(cRT) [mol/kg]": tuple((ordinate * fitted).tolist()),
    }


def _fit_summary(series: Series, virial: FlaskFit) -> dict[str, Any]:
    i, a2, g = (float(x) for x in virial.mode)
    grid = np.linspace(0.0, float(series.c.max()), 41)
    curve = i + a2 * grid + g * (a2 * grid) ** 2 / i
    return {
        "1/Mn [mol/g]": i,
        "A2 [mol mL/g²]": a2,
        "third virial ratio g": g,
        "scatter over stated": math.sqrt(virial.scatter.scale2) if virial.is_known else None,
        "dof": virial.scatter.dof,
        "curve c [g/L]": (1e3 * grid).tolist(),
        "curve pi/(cRT) [mol/kg]": (1e3 * curve).tolist(),
    }


ADAPTER = Adapter("osmometry", COLUMNS, prepare, reduce)
