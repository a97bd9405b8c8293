"""Averages and other quantities worked out elsewhere and stated with their uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from reconcile.adapters.common import (
    Adapter,
    effect_derivatives,
    medium_of,
    power_quantity,
    raise_problems,
    size_law_of,
    slug,
)
from reconcile.adapters.mark_houwink import Pair, molar_mass, pair_of, range_finding
from reconcile.evidence import Evidence, Finding, QuantityValue, Reduction, Row, frozen_array
from reconcile.measurement import Effect, Quantity
from reconcile.observables import (
    Observable,
    average,
    dispersity,
    mean_square_radius,
    viscosity_average,
)

if TYPE_CHECKING:
    from collections.abc import Mapping

    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample

__all__ = ["ADAPTER", "prepare", "reduce"]


@dataclass(frozen=True, slots=True)
class _Form:
    """How a quantity stands in its row: heading, power of the quantity, unit of its value."""

    scale: str
    power: float
    unit: str
    factor: float = 1.0


_FORMS: Mapping[str, _Form] = {
    "Mn": _Form("Mn [g/mol]", 1.0, "g/mol"),
    "Mw": _Form("Mw [g/mol]", 1.0, "g/mol"),
    "Mz": _Form("Mz [g/mol]", 1.0, "g/mol"),
    "Mv": _Form("Mv [g/mol]", 1.0, "g/mol"),
    "limiting_viscosity_number": _Form("[η] [mL/g]", 1.0, "mL/g"),
    "Rg": _Form("Rg² [cm²]", 2.0, "nm", 1e7),
    "A2": _Form("A2 [mol mL/g²]", 1.0, "mol mL/g²"),
    "dispersity": _Form("Mw/Mn", 1.0, "1"),
}


_PLAIN: Mapping[str, Observable] = {
    **{name: average(name) for name in ("Mn", "Mw", "Mz")},
    "dispersity": dispersity(),
}


@dataclass(frozen=True, slots=True, eq=False)
class StatedValue:
    """A checked stated quantity: value in internal units, u relative."""

    name: str
    quantity: str
    value: float
    u: float
    dof: float
    observable: Observable | None
    derivatives: Mapping[str, float]
    effects: Mapping[str, Effect]
    own_effects: tuple[Effect, ...]
    pair: Pair | None
    medium: str | None
    source: str
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]


def prepare(measurement: Measurement, sample: Sample, effects: Mapping[str, Effect]) -> StatedValue:
    """Check a stated quantity.

    Raises
    ------
    InputError
        With every problem found.
    """
    del sample  # a stated value is what its source says: no dry fraction is applied to it
    fields = measurement.fields
    quantity = fields["quantity"]
    stated = fields["value"]
    value = stated.value if isinstance(stated, Quantity) else float(stated)
    u = _relative(fields["u"], value)
    problems = _faults(measurement, quantity, value, u)
    pair = pair_of(measurement, effects, problems)
    raise_problems(problems)
    observable, link, own = _link(measurement, quantity, pair)
    power = _FORMS[quantity].power
    named = effect_derivatives(effects, measurement.effects, {"value": power})
    return StatedValue(
        measurement.name,
        quantity,
        value,
        u,
        float(fields.get("dof", math.inf)),
        observable,
        {**named, **link},
        {**effects, **{effect.id: effect for effect in own}},
        own,
        pair,
        medium_of(measurement),
        str(fields.get("source", "source not stated")),
        () if pair is None else pair.assumptions,
        () if pair is None else pair.findings,
    )


def _relative(u: Any, value: float) -> float:
    if isinstance(u, Quantity):
        return u.value if u.kind == "ratio" else u.value / abs(value) if value else math.inf
    return float(u) / abs(value) if isinstance(u, (int, float)) and value else math.inf


def _faults(measurement: Measurement, quantity: str, value: float, u: float) -> list[Problem]:
    place, found = measurement.place, []
    if quantity != "A2" and value <= 0.0:
        found.append(place.problem("value", f"found {value:g}, expected more than 0"))
    elif quantity == "dispersity" and value < 1.0:
        text = f"found {value:g}, expected 1 or more"
        found.append(place.problem("value", text, "Mw/Mn is at least 1: is it upside down?"))
    if not 0.0 < u < 1.0:
        text = f"found {100.0 * u:.3g} % of the value, expected more than 0 and less than 100 %"
        found.append(place.problem("u", text))
    return found


def _link(
    measurement: Measurement, quantity: str, pair: Pair | None
) -> tuple[Observable | None, dict[str, float], tuple[Effect, ...]]:
    """Return what the row observes, its derivatives by constants, and the effects those bring."""
    if quantity in _PLAIN:
        return _PLAIN[quantity], {}, ()
    if quantity == "Mv":
        return viscosity_average(float(measurement.fields["exponent"])), {}, ()
    if quantity == "limiting_viscosity_number" and pair is not None:
        return pair.observable, dict(pair.derivatives), pair.own_effects
    law = size_law_of(measurement.fields)
    if quantity == "Rg" and law is not None:
        if law.u_K == 0.0:
            return mean_square_radius(law), {}, ()
        key = f"{slug(measurement.name)}_size_law"
        own = Effect(key, "size_law", law.u_K, law.source)
        return mean_square_radius(law), {key: -2.0}, (own,)
    return None, {}, ()


def reduce(series: StatedValue) -> Reduction:
    """Return the stated quantity as evidence on the scale of its errors."""
    form = _FORMS[series.quantity]
    row_value = series.value**form.power
    sd = abs(form.power) * series.u * abs(row_value)
    named = {
        key: d for key, d in series.derivatives.items() if series.effects[key].target == "value"
    }
    shared = math.hypot(*(d / form.power * series.effects[k].u for k, d in named.items()), 0.0)
    value = power_quantity(
        row_value, sd, series.dof, power=1.0 / form.power, factor=form.factor, unit=form.unit,
        u_effects=shared,
    )  # fmt: skip
    quantities: dict[str, QuantityValue] = {series.quantity: value}
    findings = list(series.findings)
    if series.pair is not None:
        quantities["Mv"] = molar_mass(series.pair, value)
        findings += range_finding(series.pair, quantities["Mv"].value, series.name)
    row = Row(
        series.quantity,
        series.observable,
        form.scale,
        series.dof,
        series.derivatives,
        series.medium,
    )
    return Reduction(
        series.name,
        "stated",
        f"as stated ({series.source})",
        quantities,
        Evidence(series.name, (row,), frozen_array([row_value]), frozen_array([[sd**2]])),
        findings=tuple(findings),
        constants=() if series.pair is None else series.pair.listed,
        assumptions=series.assumptions,
        effects=series.own_effects,
    )


ADAPTER = Adapter("stated", {}, prepare, reduce)
