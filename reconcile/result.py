"""The result document: everything a report shows, as plain JSON values.

Built from value objects only; holds no NaN (an absent number is null) and nothing that changes from
run to run. Its authority is ``schemas/result-1.schema.json``.
"""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from reconcile.distribution import FAMILIES

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from reconcile.bounds import FamilyFree
    from reconcile.estimate.intervals import Statement
    from reconcile.estimate.joint import FamilyFit, JointEstimate, Target
    from reconcile.estimate.selfcheck import Draws
    from reconcile.evidence import Evidence, Finding, QuantityValue, Reduction
    from reconcile.judge.consistency import Consistency
    from reconcile.measurement import Case, Effect, Measurement

__all__ = ["canonical", "estimate_part", "judgement_part", "reductions_part", "to_json"]

_CURVE_POINTS = 161


def to_json(document: Mapping[str, Any]) -> str:
    """Return the document as JSON text: sorted keys, no NaN, ending in a newline.

    Examples
    --------
    >>> print(to_json({"b": 1, "a": None}), end="")
    {
      "a": null,
      "b": 1
    }
    """
    return (
        json.dumps(document, indent=2, sort_keys=True, ensure_ascii=False, allow_nan=False) + "\n"
    )


def canonical(document: Mapping[str, Any]) -> dict[str, Any]:
    """Return the document as reading its JSON text gives it, so that both show the same order."""
    plain: dict[str, Any] = json.loads(to_json(document))
    return plain


def _number(value: Any) -> float | None:
    """Return a finite float, or None for what JSON cannot say."""
    if value is None:
        return None
    number = float(value)
    return number if math.isfinite(number) else None


def _plain(value: Any) -> Any:
    """Return nested containers of numbers and texts as JSON values."""
    if isinstance(value, dict):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, (list, tuple, np.ndarray)):
        return [_plain(entry) for entry in value]
    if isinstance(value, (bool, str)) or value is None:
        return value
    if isinstance(value, (int, np.integer)):
        return int(value)
    return _number(value)


def _ends(interval: tuple[float | None, float | None]) -> list[float | None]:
    return [_number(interval[0]), _number(interval[1])]


def _quantity(value: QuantityValue) -> dict[str, Any]:
    return {
        "value": _number(value.value),
        "unit": value.unit,
        "u": _number(value.u),
        "u_with_effects": _number(value.u_total),
        "interval95": _ends(value.interval95),
        "reading": value.reading,
        "why": value.why,
    }


def _quantities(values: Mapping[str, QuantityValue]) -> dict[str, Any]:
    return {name: _quantity(value) for name, value in values.items()}


def _evidence(evidence: Evidence | None) -> dict[str, Any] | None:
    if evidence is None:
        return None
    return {
        "rows": [
            {
                "quantity": row.quantity,
                "scale": row.scale,
                "observes": None if row.observable is None else row.observable.label,
                "dof": _number(row.dof),
                "derivatives": _plain(dict(row.derivatives)),
                "medium": row.medium,
            }
            for row in evidence.rows
        ],
        "diagnostics": [asdict(entry) for entry in evidence.diagnostics],
        "values": _plain(evidence.values),
        "covariance": _plain(evidence.covariance),
    }


def _finding(finding: Finding) -> dict[str, str]:
    return asdict(finding)


def _measurement(stated: Measurement, reduction: Reduction) -> dict[str, Any]:
    return {
        "name": reduction.name,
        "technique": reduction.technique,
        "date": stated.date,
        "solvent": stated.solvent,
        "temperature_K": _number(stated.temperature),
        "table": None if stated.table is None else stated.table.file,
        "form": reduction.form,
        "quantities": _quantities(reduction.quantities),
        "alternatives": [
            {"form": other.form, "quantities": _quantities(other.quantities)}
            for other in reduction.alternatives
        ],
        "findings": [_finding(finding) for finding in reduction.findings],
        "excluded": _plain([dict(entry) for entry in reduction.excluded]),
        "assumptions": list(reduction.assumptions),
        "readings": [
            {"heading": name, "values": _plain(column)}
            for name, column in reduction.readings.items()
        ],
        "fit": _plain(dict(reduction.fit)),
        "evidence": _evidence(reduction.evidence),
        "effects": list(stated.effects) + [effect.id for effect in reduction.effects],
    }


def reductions_part(
    case: Case, reductions: Sequence[Reduction], effects: Mapping[str, Effect], software: Any
) -> dict[str, Any]:
    """Return the part of the document that exists without a joint estimate."""
    return {
        "result": 1,
        "case": {
            "name": case.sample.name,
            "polymer": case.sample.polymer,
            "architecture": case.sample.architecture,
            "composition": case.sample.composition,
            "charged": case.sample.charged,
            "solids": {"value": case.sample.solids, "u": case.sample.u_solids},
            "file": case.file,
            "digest": case.digest,
        },
        "inputs": [{"path": path, "sha256": digest} for path, digest in case.inputs],
        "software": software,
        "effects": {
            key: {"target": effect.target, "u": effect.u, "description": effect.description}
            for key, effect in sorted(effects.items())
        },
        "constants": [
            {"measurement": reduction.name, **asdict(constant)}
            for reduction in reductions
            for constant in reduction.constants
        ],
        "measurements": [
            _measurement(stated, reduction)
            for stated, reduction in zip(case.measurements, reductions, strict=True)
        ],
        "estimate": None,
        "family_free": None,
        "consistency": None,
        "explanations": None,
        "blind_spots": None,
        "limits": [],
        "findings": [],
    }


def _statement(statement: Statement, unit: str) -> dict[str, Any]:
    return {
        "value": _number(statement.value),
        "unit": unit,
        "interval68": _ends(statement.interval68),
        "interval95": _ends(statement.interval95),
        "reading": statement.reading,
        "dof": _number(statement.dof),
        "expected_limit95": _number(statement.expected_limit95),
    }


def _averages(
    dispersity: Statement, averages: Mapping[str, Statement], targets: Sequence[Target]
) -> dict[str, Any]:
    plain = {t.name: averages[t.name] for t in targets if t.kind != "Mv"}
    return {
        "dispersity": _statement(dispersity, "1"),
        **{name: _statement(statement, "g/mol") for name, statement in plain.items()},
    }


def _family(fit: FamilyFit, targets: Sequence[Target]) -> dict[str, Any]:
    return {
        "weight": _number(fit.weight),
        "chi2": _number(fit.chi2),
        "averages": _averages(fit.dispersity, fit.averages, targets),
    }


def estimate_part(result: JointEstimate, targets: Sequence[Target], draws: Draws) -> dict[str, Any]:
    """Return the ``estimate`` of the document."""
    return {
        "families": {name: _family(fit, targets) for name, fit in result.families.items()},
        "averages": _averages(result.dispersity, result.averages, targets),
        "viscosity_averages": [
            {
                "measurement": target.measurement,
                "exponent": target.order,
                **_statement(result.averages[target.name], "g/mol"),
            }
            for target in targets
            if target.kind == "Mv"
        ],
        "ln_likelihood_ratio_uniform": _number(result.ln_likelihood_ratio_uniform),
        "budget": _budget(result) if result.dispersity.reading == "interval" else [],
        "self_check": {
            "effective_fraction": _number(draws.effective_fraction),
            "pareto_k": _number(draws.pareto_k),
            "passed": draws.passed,
            "draws": len(draws.weight),
        },
        "curves": _curves(result),
    }


def _budget(result: JointEstimate) -> list[dict[str, Any]]:
    """Return the shares of the variance of ln Đ, at the best family's mode; they add up to 1."""
    fit = result.best.linearised
    gradient = np.zeros(fit.covariance.shape[0])
    gradient[0] = 1.0
    parts = fit.variance_parts(gradient)
    total = sum(part.variance for part in parts)
    return [
        {"source": part.source, "kind": part.kind, "share": _number(part.variance / total)}
        for part in parts
        if total > 0.0
    ]


def _curves(result: JointEstimate) -> dict[str, Any]:
    """Return w(ln M) of both families at their modes on one grid of molar mass in g/mol."""
    modes = [(FAMILIES[name], fit) for name, fit in result.families.items()]
    ln_mw = [float(fit.z_mode[0]) for _, fit in modes]
    # five widths on either side, at least a factor of two, at most five decades
    widths = [math.sqrt(math.log1p(math.exp(fit.t_mode))) for _, fit in modes]
    reach = min(max(5.0 * max(widths), math.log(2.0)), math.log(1e5))
    ln_m = np.linspace(min(ln_mw) - reach, max(ln_mw) + reach, _CURVE_POINTS)
    return {
        "M [g/mol]": _plain(np.exp(ln_m)),
        **{
            f"w(ln M), {family.name}": _plain(family.mass_density(ln_m, mu, fit.t_mode))
            for (family, fit), mu in zip(modes, ln_mw, strict=True)
        },
    }


def judgement_part(
    consistency: Consistency,
    free: FamilyFree,
    limits: Mapping[str, tuple[float | None, float | None]],
    result: JointEstimate,
    draws: Draws,
) -> dict[str, Any]:
    """Return the parts of the document that judge: consistency, family-free bounds, limits.

    A limit on a side where the data have no end is not decided by them: its probability is null.
    ``p_no_fault``, ``explanations`` and ``blind_spots`` are null: not assessed.
    """
    return {
        "consistency": {
            "verdict": consistency.verdict,
            "statement": consistency.statement,
            "chi2": _number(consistency.chi2),
            "dof": consistency.dof,
            "p_value": _number(consistency.p_value),
            "p_no_fault": None,
            "residuals": [asdict(residual) for residual in consistency.residuals],
            "left_out": None,
            "cross_checks": None,
        },
        "family_free": {
            "dispersity": {"lower": _number(free.lower), "upper": _number(free.upper)},
            "Mz": {"lower": None, "upper": None},
            "possible": free.possible,
            "p_value": _number(free.p_value),
        },
        "explanations": None,
        "blind_spots": None,
        "limits": [
            {
                "quantity": name,
                "limit": _ends(limit),
                "probability_met": _number(draws.probability(name, *limit))
                if _decided(result, name, limit)
                else None,
            }
            for name, limit in limits.items()
        ],
    }


def _decided(result: JointEstimate, name: str, limit: tuple[float | None, float | None]) -> bool:
    """Return whether the data bound the quantity on every side that the limit asks about."""
    statement = result.dispersity if name == "dispersity" else result.averages[name]
    low, high = statement.interval95
    # a dispersity has 1 as its lower end, whatever the data say
    open_low = low is None and name != "dispersity"
    return not (limit[0] is not None and open_low) and not (limit[1] is not None and high is None)
