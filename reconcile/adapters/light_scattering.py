"""Static light scattering: Mw, A2 and Rg from Rayleigh ratios over concentration and angle."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters import scattering_fit as sf
from reconcile.adapters.common import (
    SOLIDS_EFFECT,
    Adapter,
    effect_derivatives,
    power_quantity,
    scatter_finding,
    slug,
)
from reconcile.adapters.scattering_series import COLUMNS, Series, prepare
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
from reconcile.measurement import Effect
from reconcile.observables import inverse_average, mean_square_radius, scattering_virial

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.linalg import LinearFit

    Array = NDArray[np.float64]

__all__ = ["ADAPTER", "reduce"]

_CM_TO_NM = 1e7


def reduce(series: Series) -> Reduction:
    """Return Mw, A2 and Rg with their evidence, alternatives and findings."""
    fit = sf.fit_surface(series.cells, series.u_reading, series.u_flask)
    alternatives = _alternatives(series.cells)
    common: dict[str, Any] = {
        "name": series.name,
        "technique": "light_scattering",
        "form": "Zimm surface, shared errors averaged, third virial term by prior",
        "alternatives": alternatives,
        "constants": _constants(series),
        "assumptions": series.assumptions,
    }
    if fit is None:
        why = "the readings have no positive intercept at c = 0 and zero angle"
        remedy = "check blank, dust and angles; see the other forms"
        found = Finding("no-intercept", "warning", why, remedy, series.name)
        return Reduction(
            **common,
            quantities={"Mw": QuantityValue(None, "g/mol", why=why)},
            evidence=None,
            findings=(*series.findings, found),
        )
    rows, values, covariance, dof = _rows(series, fit)
    quantities = _quantities(series, rows, values, covariance, dof)
    law = series.size_law
    own = list(series.own_effects)
    if law is not None and law.u_K > 0.0:
        own.append(Effect(f"{slug(series.name)}_size_law", "size_law", law.u_K, law.source))
    return Reduction(
        **common,
        quantities=quantities,
        evidence=Evidence(series.name, rows, frozen_array(values), frozen_array(covariance)),
        findings=(*series.findings, *_findings(series, fit, quantities, alternatives)),
        readings=_readings(series, fit),
        fit=_fit_summary(fit),
        effects=tuple(own),
    )


def _constants(series: Series) -> tuple[Constant, ...]:
    if series.optical_constant is None:
        return series.constants
    formula = "4π²n²(dn/dc)²/(N_A λ⁴), half of it for unpolarised light"
    computed = Constant("K*", series.optical_constant, "mol cm²/g²", formula, "computed")
    return (*series.constants, computed)


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
        Row(
            "A2",
            None,
            "A2 [mol mL/g²]",
            dof[1],
            derivatives["A2"],
            series.medium,
            scattering_virial(),
        ),
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


def _plane_quantities(fit: LinearFit, form: str) -> dict[str, QuantityValue]:
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
    look_for = "look for dust, a bad cell or a wrong u_reading"
    found = list(
        scatter_finding(series.name, fit.scatter, look_for, stated=series.u_reading is not None)
    )

    def add(code: str, severity: str, text: str, remedy: str) -> None:
        found.append(Finding(code, severity, text, remedy, series.name))

    scale = {series.effects[key].target for key in series.named}
    if not scale & {"dn_dc", "rayleigh_ratio"}:
        add(
            "scale-without-error",
            "caution",
            "dn/dc and the Rayleigh calibration are taken as exact",
            "name effects with these targets; 1 to 2 % of dn/dc count twice in Mw",
        )
    by_form = {a.form: a.quantities["Mw"] for a in alternatives}
    zimm, berry = by_form["Zimm plane, equal weights"], by_form["Berry plane, equal weights"]
    if zimm.value and berry.value and zimm.u and berry.u:
        gap = abs(math.log(zimm.value / berry.value))
        if gap > 2.0 * math.hypot(zimm.u / zimm.value, berry.u / berry.value):
            add(
                "forms-differ",
                "warning" if gap > 0.1 else "caution",
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
