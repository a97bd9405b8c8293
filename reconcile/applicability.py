"""Findings that need the distribution: methods outside the range where they can be trusted."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.distribution import FAMILIES
from reconcile.evidence import Finding
from reconcile.measurement import Quantity

if TYPE_CHECKING:
    from collections.abc import Sequence

    from reconcile.estimate.joint import JointEstimate
    from reconcile.estimate.selfcheck import Draws
    from reconcile.evidence import Reduction
    from reconcile.measurement import Case, Measurement

__all__ = ["applicability"]

OSMOMETRY_RANGE = (2e4, 5e5)
"""Mn in g/mol for which membrane osmometry is usually trusted (ASTM D3750, since withdrawn)."""

_PERMEATING = 0.05


def applicability(
    case: Case, reductions: Sequence[Reduction], result: JointEstimate, draws: Draws
) -> list[dict[str, Any]]:
    """Return the findings after the estimate, as plain values."""
    found = [*_sample(case), *_unused(case), *_self_check(draws)]
    for measurement, reduction in zip(case.measurements, reductions, strict=True):
        if measurement.technique == "osmometry":
            found += _osmometry(measurement, reduction, result)
    return [asdict(finding) for finding in found]


def _sample(case: Case) -> list[Finding]:
    found = []
    if case.sample.charged:
        found.append(
            Finding(
                "charged",
                "warning",
                "the polymer is charged: without enough salt osmometry counts the counter-ions and"
                " [η] has no neutral limit",
                "measure in at least 0.1 mol/L salt, dialysed; read the averages as apparent",
            )
        )
    if case.sample.composition == "copolymer":
        found.append(
            Finding(
                "copolymer",
                "warning",
                "for a copolymer the Mw of light scattering is apparent: dn/dc varies with"
                " composition",
                "measure in three solvents of different refractive index",
            )
        )
    if case.sample.architecture == "branched":
        found.append(
            Finding(
                "branched",
                "warning",
                "Mark-Houwink constants of linear chains underrate branched ones: Mv comes out low",
                "compare with [η] of a linear standard of the same Mw",
            )
        )
    return found


def _unused(case: Case) -> list[Finding]:
    """Return a finding for effects that no measurement lists: they widen nothing."""
    used = {key for measurement in case.measurements for key in measurement.effects}
    idle = sorted(set(case.effects) - used)
    if not idle:
        return []
    text = f"no measurement lists the effect{'s' if len(idle) > 1 else ''} {', '.join(idle)}"
    return [Finding("unused-effect", "caution", text, "add to effects = […] where it acts")]


def _self_check(draws: Draws) -> list[Finding]:
    if draws.passed:
        return []
    return [
        Finding(
            "self-check",
            "caution",
            "the importance draws spread more than the normal law they check"
            f" (effective fraction {draws.effective_fraction:.2g}): intervals of molar masses may"
            " be off by a few per cent of their width",
            "more precise readings remove it; the dispersity's interval does not rest on it",
        )
    ]


def _osmometry(
    measurement: Measurement, reduction: Reduction, result: JointEstimate
) -> list[Finding]:
    found = []
    mn = reduction.quantities["Mn"].value
    if mn is not None and not OSMOMETRY_RANGE[0] <= mn <= OSMOMETRY_RANGE[1]:
        found.append(
            Finding(
                "outside-method-range",
                "caution",
                f"Mn of {mn / 1e3:.3g} kg/mol is outside the 20 to 500 kg/mol in which membrane"
                " osmometry is usually trusted",
                "confirm Mn by another method",
                measurement.name,
            )
        )
    cutoff = measurement.fields.get("cutoff")
    if isinstance(cutoff, Quantity):
        share = max(_number_below(result, 2.0 * cutoff.value).values())
        if share > _PERMEATING:
            found.append(
                Finding(
                    "sample-under-cutoff",
                    "warning",
                    f"{100 * share:.2g} % of the chains (by number) are lighter than twice the"
                    " membrane's cut-off: they may permeate, and Mn then reads high",
                    "a tighter membrane, or readings over time extrapolated to their start",
                    measurement.name,
                )
            )
    return found


def _number_below(result: JointEstimate, mass: float) -> dict[str, float]:
    """Return for each family the number fraction of chains lighter than ``mass`` at its mode."""
    shares = {}
    for name, fit in result.families.items():
        mu = float(fit.z_mode[0])
        # number density per ln M is the mass density over M/Mn
        ln_m = np.linspace(mu - 25.0, mu + 12.0, 8001)
        density = FAMILIES[name].mass_density(ln_m, mu, fit.t_mode) * np.exp(mu - ln_m)
        below = np.trapezoid(np.where(ln_m <= np.log(mass), density, 0.0), ln_m)
        shares[name] = float(below / np.trapezoid(density, ln_m))
    return shares
