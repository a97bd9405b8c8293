"""Mark-Houwink constants as stated: checked, converted, with the effects that their errors are."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from reconcile.adapters.common import slug, value_of
from reconcile.distribution import FAMILIES
from reconcile.evidence import Constant, Finding, QuantityValue
from reconcile.measurement import Effect
from reconcile.observables import MarkHouwink, limiting_viscosity_number

if TYPE_CHECKING:
    from collections.abc import Mapping

    from reconcile.errors import Problem
    from reconcile.measurement import Measurement
    from reconcile.observables import Observable

__all__ = ["Pair", "molar_mass", "pair_of"]

_DEFAULT_REFERENCE = 1e5
"""Molar mass in g/mol at which u_K is taken to hold where neither M_ref nor M_range is given."""


@dataclass(frozen=True, slots=True, eq=False)
class Pair:
    """A measurement's constants, ready for its evidence.

    ``derivatives`` are those of ln [η] by the effects on K, ``own_effects`` those that stand for
    the stated errors, ``m_range`` in g/mol or None.
    """

    constants: MarkHouwink
    observable: Observable
    derivatives: Mapping[str, float]
    own_effects: tuple[Effect, ...]
    u_K: float
    m_range: tuple[float, float] | None
    findings: tuple[Finding, ...]
    assumptions: tuple[str, ...]
    listed: tuple[Constant, ...]


def pair_of(
    measurement: Measurement, effects: Mapping[str, Effect], problems: list[Problem]
) -> Pair | None:
    """Return the constants of a measurement; None where it states none.

    Problems are appended. A named effect of target ``mark_houwink_K`` stands in place of ``u_K``.
    """
    entry = measurement.fields.get("mark_houwink")
    if entry is None:
        return None
    m_range = None
    if "M_range" in entry:
        low, high = (end.value for end in entry["M_range"])
        m_range = (low, high)
        if not low < high:
            problems.append(
                measurement.place.problem(
                    "mark_houwink.M_range",
                    f"found {low:g} to {high:g} g/mol, expected the lower one first",
                )
            )
            return None
    calibrated_on = entry.get("calibrated_on", "uniform")
    if calibrated_on in {"Mn", "Mw"} and "calibration_dispersity" not in entry:
        problems.append(
            measurement.place.problem(
                "mark_houwink",
                f"calibrated on {calibrated_on}, but calibration_dispersity is missing",
                "give Mw/Mn of the calibrating samples; 2 is usual for unfractionated polymer",
            )
        )
        return None
    constants = MarkHouwink(
        entry["K"].value,
        float(entry["a"]),
        value_of(entry, "u_K") or 0.0,
        float(entry.get("u_a", 0.0)),
        value_of(entry, "M_ref")
        or (math.sqrt(m_range[0] * m_range[1]) if m_range else _DEFAULT_REFERENCE),
        calibrated_on,
        float(entry.get("calibration_dispersity", 1.0)),
        str(entry.get("source", "source not stated")),
    )
    return _assembled(measurement, effects, constants, m_range)


def _assembled(
    measurement: Measurement,
    effects: Mapping[str, Effect],
    constants: MarkHouwink,
    m_range: tuple[float, float] | None,
) -> Pair:
    head = slug(measurement.name)
    named = [key for key in measurement.effects if effects[key].target == "mark_houwink_K"]
    own = []
    # K used too large makes the model expect more, as if [η] had been read too low
    derivatives = dict.fromkeys(named, -1.0)
    if not named and constants.u_K > 0.0:
        key = f"{head}_mark_houwink_K"
        own.append(Effect(key, "mark_houwink_K", constants.u_K, constants.source))
        derivatives[key] = -1.0
    exponent = None
    if constants.u_a > 0.0:
        exponent = f"{head}_mark_houwink_a"
        own.append(Effect(exponent, "mark_houwink_a", constants.u_a, constants.source))
    u_K = math.hypot(*(effects[key].u for key in named)) if named else constants.u_K
    findings = _findings(measurement, u_K)
    assumptions, listed = _listed(constants)
    return Pair(
        constants,
        limiting_viscosity_number(constants, exponent),
        derivatives,
        tuple(own),
        u_K,
        m_range,
        findings,
        assumptions,
        listed,
    )


def _findings(measurement: Measurement, u_K: float) -> tuple[Finding, ...]:
    entry = measurement.fields["mark_houwink"]
    found = []
    if u_K == 0.0:
        found.append(
            Finding(
                "constants-without-error",
                "caution",
                "the Mark-Houwink constants are taken as exact",
                "state u_K; published pairs for one system commonly differ by 3 to 10 % in [η]",
                measurement.name,
            )
        )
    solvent, temperature = entry.get("solvent"), value_of(entry, "temperature")
    elsewhere = []
    if solvent is not None and solvent.casefold() != (measurement.solvent or "").casefold():
        elsewhere.append(f"in {solvent}")
    run = measurement.temperature
    if temperature is not None and run is not None and abs(temperature - run) > 2.0:
        elsewhere.append(f"at {temperature - 273.15:.4g} °C")
    if elsewhere:
        found.append(
            Finding(
                "constants-elsewhere",
                "warning",
                f"the Mark-Houwink constants hold {' and '.join(elsewhere)}, the measurement was"
                " made elsewhere",
                "use a pair for this solvent and temperature",
                measurement.name,
            )
        )
    return tuple(found)


def _listed(constants: MarkHouwink) -> tuple[tuple[str, ...], tuple[Constant, ...]]:
    listed = [
        Constant("K", constants.K, "mL/g", constants.source, "stated"),
        Constant("a", constants.a, "1", constants.source, "stated"),
    ]
    if constants.calibrated_on not in {"Mn", "Mw"}:
        text = "Mark-Houwink constants taken as those of uniform chains"
        return (text,) if constants.calibrated_on == "uniform" else (), tuple(listed)
    listed += [
        Constant(
            f"K, uniform chains, {family.label}",
            constants.uniform_K(family),
            "mL/g",
            f"converted from {constants.calibrated_on} at Đ = {constants.calibration_dispersity:g}",
            "computed",
        )
        for family in FAMILIES.values()
    ]
    text = (
        f"constants calibrated on {constants.calibrated_on} at Đ ="
        f" {constants.calibration_dispersity:g}: the joint estimate converts them to uniform"
        " chains; Mv here takes them as entered, quote the joint one"
    )
    return (text,), tuple(listed)


def molar_mass(pair: Pair, eta: QuantityValue) -> QuantityValue:
    """Return Mv = ([η]/K)^{1/a} in g/mol by the constants as entered.

    Notes
    -----
    ln Mv = (ln [η] − ln K)/a; u from [η] alone, u_total with u_K and with u_a about m_ref:
    ∂ ln Mv/∂a = −ln(Mv/m_ref)/a when K·m_ref^a is held.
    """
    constants = pair.constants
    if eta.value is None or eta.value <= 0.0:
        return QuantityValue(None, "g/mol", why="[η] is not positive")

    def mass(x: float | None) -> float | None:
        return (x / constants.K) ** (1.0 / constants.a) if x is not None and x > 0.0 else None

    value = mass(eta.value)
    assert value is not None  # noqa: S101 - [η] is positive
    if eta.u is None:
        return QuantityValue(value, "g/mol", why=eta.why)
    relative = eta.u / eta.value / constants.a
    total = math.hypot(
        (eta.u_total or eta.u) / eta.value / constants.a,
        pair.u_K / constants.a,
        constants.u_a * math.log(value / constants.m_ref) / constants.a,
    )
    low, high = eta.interval95
    return QuantityValue(
        value, "g/mol", relative * value, (mass(low), mass(high)), eta.reading, total * value
    )


def range_finding(pair: Pair, mass: Any, name: str) -> tuple[Finding, ...]:
    """Return a finding where Mv lies outside the range in which the pair was fitted."""
    if pair.m_range is None or mass is None or pair.m_range[0] <= mass <= pair.m_range[1]:
        return ()
    low, high = pair.m_range
    text = (
        f"Mv of {mass / 1e3:.3g} kg/mol is outside the {low / 1e3:g} to {high / 1e3:g} kg/mol in"
        " which the Mark-Houwink pair was fitted"
    )
    return (Finding("outside-constants-range", "warning", text, "use a pair fitted there", name),)
