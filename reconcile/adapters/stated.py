"""Averages and other quantities worked out elsewhere and stated with their uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.adapters.common import (
    Adapter,
    effect_derivatives,
    medium_of,
    power_quantity,
    raise_problems,
    size_law_of,
    slug,
)
from reconcile.adapters.mark_houwink import constants_of
from reconcile.evidence import Constant, Evidence, Finding, QuantityValue, Reduction, Row, frozen_array
from reconcile.measurement import Effect, Quantity
from reconcile.observables import (
    MarkHouwink,
    Observable,
    dispersity,
    inverse_average,
    limiting_viscosity_number,
    mean_square_radius,
    viscosity_average,
)

if TYPE_CHECKING:
    from collections.abc import Mapping

    from reconcile.errors import Problem
    from reconcile.measurement import Measurement, Sample

__all__ = ["ADAPTER", "prepare", "reduce"]

_FORMS: Mapping[str, tuple[str, float, str, str]] = {
    # quantity: scale of its errors, power of the quantity on that scale, unit, scale's heading
    "Mn": ("1/Mn [mol/g]", -1.0, "g/mol", "Mn"),
    "Mw": ("1/Mw [mol/g]", -1.0, "g/mol", "Mw"),
    "Mz": ("1/Mz [mol/g]", -1.0, "g/mol", "Mz"),
    "Mv": ("Mv [g/mol]", 1.0, "g/mol", "Mv"),
    "limiting_viscosity_number": ("[η] [mL/g]", 1.0, "mL/g", "[η]"),
    "Rg": ("Rg² [cm²]", 2.0, "nm", "Rg"),
    "A2": ("A2 [mol mL/g²]", 1.0, "mol mL/g²", "A2"),
    "dispersity": ("Mw/Mn", 1.0, "1", "Mw/Mn"),
}

_CM_TO_NM = 1e7


@dataclass(frozen=True, slots=True, eq=False)
class StatedValue:
    """A checked stated quantity; ``value`` internal, ``u`` its relative standard uncertainty."""

    name: str
    quantity: str
    value: float
    u: float
    dof: float
    observable: Observable | None
    derivatives: Mapping[str, float]
    medium: str | None
    constants: tuple[Constant, ...]
    pair: MarkHouwink | None
    own_effects: tuple[Effect, ...]
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]
    source: str
    u_effects: float


def prepare(measurement: Measurement, sample: Sample, effects: Mapping[str, Effect]) -> StatedValue:
    """Check a stated quantity.

    Raises
    ------
    InputError
        With every problem found.
    """
    del sample  # a stated value is what its source says it is: no dry fraction is applied
    fields, problems = measurement.fields, []
    quantity = fields["quantity"]
    stated = fields["value"]
    value = stated.value if isinstance(stated, Quantity) else float(stated)
    u = _relative(fields["u"], value)
    if quantity != "A2" and value <= 0.0:
        problems.append(
            measurement.place.problem("value", f"found {value:g}, expected more than 0")
        )
    if quantity == "dispersity" and value < 1.0:
        found = f"found {value:g}, expected 1 or more"
        problems.append(
            measurement.place.problem("value", found, "Mw/Mn is at least 1: are they swapped?")
        )
    if not 0.0 < u < 1.0:
        problems.append(
            measurement.place.problem(
                "u", f"found {100 * u:.3g} %, expected more than 0 and less than 100 %"
            )
        )
    observable, extra = _observable(measurement, effects, quantity, problems)
    raise_problems(problems)
    pair, own, assumptions, findings, constants, derivatives = extra
    everything = {**effects, **{effect.id: effect for effect in own}}
    power = _FORMS[quantity][1]
    derivatives = {
        **{
            key: power * d
            for key, d in effect_derivatives(effects, measurement.effects, {"value": 1.0}).items()
        },
        **derivatives,
    }
    parts = [d / power * everything[key].u for key, d in derivatives.items()]
    return StatedValue(
        measurement.name,
        quantity,
        value,
        u,
        float(fields.get("dof", math.inf)),
        observable,
        derivatives,
        medium_of(measurement),
        constants,
        pair,
        own,
        assumptions,
        findings,
        str(fields.get("source", "not stated")),
        math.hypot(*parts) if parts else 0.0,
    )


def _relative(u: Any, value: float) -> float:
    if isinstance(u, Quantity):
        return u.value if u.kind == "ratio" else u.value / abs(value)
    return float(u) / abs(value)
