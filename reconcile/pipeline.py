"""The path from a case document to a result document; the only place where the stages meet."""

from __future__ import annotations

import platform
from dataclasses import asdict, dataclass
from importlib.metadata import version
from typing import TYPE_CHECKING, Any

from reconcile import __version__
from reconcile.adapters.registry import ADAPTERS
from reconcile.applicability import applicability
from reconcile.bounds import family_free
from reconcile.case import load_case
from reconcile.errors import EstimateError, InputError, Problem
from reconcile.estimate.joint import Target, estimate
from reconcile.estimate.selfcheck import draw
from reconcile.estimate.system import build_system
from reconcile.estimate.virial_link import link_virial
from reconcile.evidence import Finding
from reconcile.judge.consistency import assess
from reconcile.measurement import Quantity
from reconcile.result import canonical, estimate_part, judgement_part, reductions_part
from reconcile.schema import load_schema

if TYPE_CHECKING:
    from pathlib import Path

    from reconcile.estimate.system import System
    from reconcile.evidence import Reduction
    from reconcile.measurement import Case, Effect, Measurement

__all__ = ["Prepared", "describe", "load", "prepare", "reduce_case", "run_case"]

_PACKAGES = ("numpy", "scipy", "lmfit")


@dataclass(frozen=True, slots=True, eq=False)
class Prepared:
    """A case whose every measurement has passed its adapter's checks, with the checked series."""

    case: Case
    series: tuple[Any, ...]


def load(path: Path, *, allow_outside: bool = False) -> Case:
    """Read a case document and its tables.

    Raises
    ------
    InputError
        With every problem of form found.
    """
    tables = {name: adapter.columns for name, adapter in ADAPTERS.items() if adapter.columns}
    return load_case(path, tables, allow_outside=allow_outside)


def prepare(case: Case) -> Prepared:
    """Check the meaning of every measurement.

    Raises
    ------
    InputError
        With every problem of meaning found, over all measurements.
    """
    problems: list[Problem] = []
    series = []
    for measurement in case.measurements:
        adapter = ADAPTERS[measurement.technique]
        try:
            series.append(adapter.prepare(measurement, case.sample, case.effects))
        except InputError as error:
            problems.extend(error.problems)
    if problems:
        raise InputError(problems)
    return Prepared(case, tuple(series))


def _reduce(prepared: Prepared) -> tuple[tuple[Reduction, ...], dict[str, Effect]]:
    reductions = tuple(
        ADAPTERS[measurement.technique].reduce(series)
        for measurement, series in zip(prepared.case.measurements, prepared.series, strict=True)
    )
    effects = dict(prepared.case.effects)
    for reduction in reductions:
        effects.update({effect.id: effect for effect in reduction.effects})
    return reductions, effects


def _software() -> dict[str, Any]:
    return {
        "reconcile": __version__,
        "python": platform.python_version(),
        "packages": {name: version(name) for name in _PACKAGES},
    }


def reduce_case(prepared: Prepared) -> dict[str, Any]:
    """Return the result document of the reductions alone (``estimate`` is null)."""
    reductions, effects = _reduce(prepared)
    return canonical(reductions_part(prepared.case, reductions, effects, _software()))


def run_case(prepared: Prepared) -> dict[str, Any]:
    """Return the whole result document.

    Raises
    ------
    EstimateError
        If the evidence carries no estimate; the text names the reason.
    """
    case = prepared.case
    reductions, effects = _reduce(prepared)
    evidence = [r.evidence for r in reductions if r.evidence is not None]
    if not evidence:
        raise EstimateError(_why_none(case, reductions))
    linked: list[str] = []
    if case.link_virial:
        evidence, links, linked = link_virial(evidence)
        effects.update({effect.id: effect for effect in links})
    system = build_system(evidence, effects)
    targets = _targets(system)
    seed = int(case.digest[:16], 16)
    result = estimate(system, targets)
    draws = draw(result, seed)
    free = family_free(system, seed)
    consistency = assess(result, free)
    return canonical(
        {
            **reductions_part(case, reductions, effects, _software()),
            "estimate": estimate_part(result, targets, draws),
            **judgement_part(consistency, free, case.limits, result, draws),
            "findings": applicability(case, reductions, result, draws) + _links(case, linked),
        }
    )


def _why_none(case: Case, reductions: tuple[Reduction, ...]) -> str:
    """Return why no measurement can enter the estimate: the first reason, and what to do."""
    reasons = [
        f"{reduction.name}: {finding.text}"
        for reduction in reductions
        for finding in reduction.findings
        if finding.code in {"no-uncertainty", "no-intercept"}
    ]
    more = f" (and {len(reasons) - 1} more)" if len(reasons) > 1 else ""
    return (
        f"{case.file}: no measurement can enter a joint estimate\n"
        f"  {reasons[0]}{more}\n  `reconcile reduce` shows the reductions alone"
    )


def _links(case: Case, linked: list[str]) -> list[dict[str, Any]]:
    """Return what came of the wish to link A2, as a finding."""
    if not case.link_virial:
        return []
    text = f"A2 of {' and '.join(linked)} linked through the distribution"
    remedy = "compare Mn and the verdict with a run without link_A2"
    if not linked:
        text = "no two positive A2 share a solvent and temperature: nothing was linked"
        remedy = "name solvent and temperature in both measurements"
    return [asdict(Finding("virial-link", "note", text, remedy))]


def _targets(system: System) -> tuple[Target, ...]:
    """Return the averages to report: Mn, Mw, Mz, and the Mv of every viscosity row."""
    targets = [Target(name, name) for name in ("Mn", "Mw", "Mz")]
    for i, observable in enumerate(system.observables):
        if observable.constants is not None:
            name = system.measurements[i]
            targets.append(
                Target(f"Mv, {name}", "Mv", observable.constants.a, system.exponent_of[i], name)
            )
    return tuple(targets)


def _stated(entry: Any) -> str:
    """Return a stated field as the user wrote it, nested tables on one line."""
    if isinstance(entry, Quantity):
        return entry.text
    if isinstance(entry, dict):
        return ", ".join(f"{key} {_stated(value)}" for key, value in entry.items())
    if isinstance(entry, list):
        return " to ".join(_stated(value) for value in entry)
    return f"{entry:g}" if isinstance(entry, float) else str(entry)


def _defaults(measurement: Measurement) -> list[str]:
    """Return the schema's defaults that stand in for what was not stated."""
    known = load_schema("case-1")["$defs"][measurement.technique]["properties"]
    return [
        f"{key} = {entry['default']} (default)"
        for key, entry in known.items()
        if "default" in entry and key not in measurement.fields
    ]


def describe(prepared: Prepared) -> tuple[str, list[dict[str, Any]]]:
    """Return what `check` prints: a head line, and per measurement what will be used."""
    case = prepared.case
    head = (
        f"{case.sample.name} – {case.sample.polymer} ({case.file}, {len(case.inputs)} files read)"
    )
    summary = []
    for measurement, series in zip(case.measurements, prepared.series, strict=True):
        lines = []
        if measurement.solvent or measurement.temperature is not None:
            parts = [measurement.solvent or "solvent not named"]
            if measurement.temperature is not None:
                parts.append(f"{measurement.temperature - 273.15:.4g} °C")
            lines.append(", ".join(parts))
        table = measurement.table
        if table is not None:
            columns = ", ".join(f"{key} [{unit or '1'}]" for key, unit in table.units.items())
            lines.append(f"{table.file}: {len(table)} rows; {columns}")
        lines += [f"{key} = {_stated(entry)}" for key, entry in sorted(measurement.fields.items())]
        lines += _defaults(measurement)
        if "u_reading" not in measurement.fields and table is not None:
            lines.append("no u_reading: the scatter of the readings will set the scale")
        for key in measurement.effects:
            effect = case.effects[key]
            lines.append(f"effect {key}: {effect.target}, u = {100.0 * effect.u:.3g} %")
        lines += [f"assumed: {text}" for text in series.assumptions]
        title = f"{measurement.name} ({measurement.technique.replace('_', ' ')})"
        summary.append({"title": title, "lines": lines})
    return head, summary
