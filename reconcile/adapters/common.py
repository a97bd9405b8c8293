"""What every adapter does the same way: concentrations, effects, scatter, reciprocal quantities."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from scipy.special import stdtrit

from reconcile.errors import InputError, Problem
from reconcile.evidence import Finding, QuantityValue
from reconcile.measurement import Effect, Quantity
from reconcile.observables import SizeLaw

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping, Sequence

    import numpy as np
    from numpy.typing import NDArray

    from reconcile.evidence import Reduction
    from reconcile.measurement import ColumnSpec, Measurement, Sample, Table

    Array = NDArray[np.float64]

__all__ = [
    "GAS_CONSTANT",
    "PRIOR_DOF",
    "SOLIDS_EFFECT",
    "Adapter",
    "Scatter",
    "Solutions",
    "check_columns",
    "check_reading_error",
    "effect_derivatives",
    "medium_of",
    "power_quantity",
    "raise_problems",
    "scatter_finding",
    "size_law_of",
    "slug",
    "solutions",
    "table_of",
    "value_of",
]

GAS_CONSTANT = 8.314462618
"""R in J/(mol K): CODATA 2018, exact by the SI (8.31446261815324)."""

_MOST_CONCENTRATED, _MOST_DILUTE = 1.0, 1e-8
"""g/mL; beyond them a concentration is a slip of a power of ten."""

PRIOR_DOF = 3.0
"""ν₀ of the scaled-inverse-χ² prior on the scatter, centred on the stated reading error."""

SOLIDS_EFFECT = "sample_solids"


@dataclass(frozen=True, slots=True)
class Adapter:
    """A technique: its table columns, and the two steps from what was stated to its reduction.

    ``prepare`` checks meaning and raises `InputError` with every problem; ``reduce`` cannot fail on
    what ``prepare`` returned, except for data that carry no answer (`EstimateError`).
    """

    technique: str
    columns: Mapping[str, ColumnSpec]
    prepare: Callable[[Measurement, Sample, Mapping[str, Effect]], Any]
    reduce: Callable[[Any], Reduction]


@dataclass(frozen=True, slots=True, eq=False)
class Solutions:
    """True concentrations at the temperature of the run, and how they came about.

    ``c`` in g/mL, one per table row; ``factor`` is c over what the table says.
    """

    c: Array
    factor: float
    assumptions: tuple[str, ...]
    findings: tuple[Finding, ...]
    effects: tuple[Effect, ...]


@dataclass(frozen=True, slots=True)
class Scatter:
    """The error scale learnt from residuals: ``scale2`` multiplies the variances, ``dof`` is its ν.

    ``ratio`` is χ²/dof of the residuals alone (NaN without dof), ``p_value`` its upper tail against
    the stated error (NaN where none was stated).
    """

    scale2: float
    dof: float
    ratio: float
    p_value: float

    @classmethod
    def of(cls, chi2: float, dof: float, *, stated: bool) -> Scatter:
        """Return the posterior scale: ν₀ = 3 at the stated error, or the pure scatter without one.

        Notes
        -----
        Scaled-inverse-χ² update: s² = (ν₀ + χ²)/(ν₀ + dof), ν = ν₀ + dof, in units of the stated
        variance; s² = χ²/dof, ν = dof when nothing was stated.

        Examples
        --------
        >>> Scatter.of(3.0, 3, stated=True)
        Scatter(scale2=1.0, dof=6.0, ratio=1.0, p_value=0.39162517627108...)
        """
        ratio = chi2 / dof if dof > 0 else math.nan
        if not stated:
            return cls(ratio, float(dof), ratio, math.nan)
        from scipy.special import chdtrc  # noqa: PLC0415 - not needed without a stated error

        tail = float(chdtrc(dof, chi2)) if dof > 0 else math.nan
        return cls((PRIOR_DOF + chi2) / (PRIOR_DOF + dof), PRIOR_DOF + dof, ratio, tail)


def raise_problems(problems: Sequence[Problem]) -> None:
    """Raise `InputError` if there are any problems."""
    if problems:
        raise InputError(problems)


def slug(name: str) -> str:
    """Return a measurement's name as the head of an effect id.

    Examples
    --------
    >>> slug("Capillary 2, butanone")
    'capillary_2_butanone'
    """
    return re.sub(r"[^a-z0-9]+", "_", name.lower()).strip("_") or "measurement"


def value_of(fields: Mapping[str, Any], key: str) -> float | None:
    """Return the internal value of a field, or None where it was not given."""
    entry = fields.get(key)
    if entry is None:
        return None
    return entry.value if isinstance(entry, Quantity) else float(entry)


def size_law_of(fields: Mapping[str, Any]) -> SizeLaw | None:
    """Return the stated law Rg = K M^nu; None where there is none."""
    entry = fields.get("size_law")
    if entry is None:
        return None
    return SizeLaw(
        entry["K"].value,
        float(entry["nu"]),
        value_of(entry, "u_K") or 0.0,
        value_of(entry, "M_ref") or 1e5,
        str(entry.get("source", "")),
    )


def medium_of(measurement: Measurement) -> str | None:
    """Return solvent and temperature as one text; None where the solvent was not named."""
    if measurement.solvent is None:
        return None
    if measurement.temperature is None:
        return measurement.solvent
    return f"{measurement.solvent}, {measurement.temperature - 273.15:.4g} °C"


def check_columns(measurement: Measurement, groups: Iterable[Sequence[str]]) -> list[Problem]:
    """Return a problem for every group of alternative columns of which not exactly one is there."""
    table = measurement.table
    if table is None:
        return [measurement.place.problem("readings", "no table of readings was given")]
    problems = []
    for group in groups:
        present = [key for key in group if key in table.columns]
        if len(present) != 1:
            found = " and ".join(present) if present else "none of them"
            problems.append(
                Problem(
                    table.file,
                    0,
                    "",
                    f"found {found}, expected exactly one column of {', '.join(group)}",
                )
            )
    return problems


def table_of(measurement: Measurement) -> Table:
    """Return the table of a measurement that has passed `check_columns`."""
    assert measurement.table is not None  # noqa: S101 - check_columns came first
    return measurement.table


def scatter_finding(
    name: str, scatter: Scatter, look_for: str, *, stated: bool
) -> tuple[Finding, ...]:
    """Return what the scatter says against a stated reading error; nothing where it agrees."""
    if not stated:
        text = "no reading error was stated: the scatter of the readings sets the scale"
        remedy = "state u_reading, from repeated readings"
        return (Finding("no-stated-error", "note", text, remedy, name),)
    # without degrees of freedom there is no p-value, and nothing to say
    if not scatter.p_value < 0.01:
        return ()
    text = (
        f"readings scatter {math.sqrt(scatter.ratio):.2g} times as much as stated"
        f" (p {'< 1e-12' if scatter.p_value < 1e-12 else f'= {scatter.p_value:.1g}'})"
    )
    return (Finding("scatter-exceeds-stated", "warning", text, look_for, name),)


def check_reading_error(
    measurement: Measurement, u: float | None, readings: Array, problems: list[Problem]
) -> None:
    """Append a problem where a stated reading error cannot be one of these readings.

    ``u`` is in the unit of ``readings``; a relative one comes with readings of 1.
    """
    largest = float(max(abs(readings).max(), 1e-300)) if len(readings) else 1.0
    if u is None or 1e-13 <= u / largest <= 1e2:
        return
    text = measurement.fields["u_reading"].text
    size = "smaller" if u < largest else "larger"
    problems.append(
        measurement.place.problem(
            "u_reading",
            f'found "{text}", absurdly {size} than the readings',
            "check its unit, or leave it out: the scatter then sets the scale",
        )
    )


def solutions(
    measurement: Measurement, sample: Sample, problems: list[Problem], *, allow_zero: bool
) -> Solutions:
    """Return the true concentrations at the temperature of the run; append what is wrong with them.

    Notes
    -----
    c = c_table · solids · ρ_run/ρ_prepared: the volume expands, the mass does not.
    """
    table = table_of(measurement)
    nominal = table.columns["c"]
    for row, value in enumerate(nominal):
        if value < 0.0 or (value == 0.0 and not allow_zero):
            expected = "0 (solvent) or more" if allow_zero else "more than 0"
            problems.append(table.problem(row, "c", f"found {value:g}, expected {expected}"))
    largest = float(nominal.max()) if len(nominal) else 0.0
    if largest > _MOST_CONCENTRATED:
        row = int(nominal.argmax())
        found = f"found {largest:g} g/mL, more than any solution holds"
        problems.append(table.problem(row, "c", found, "is the heading's unit right?"))
    elif 0.0 < largest < _MOST_DILUTE:
        found = f"found at most {largest:g} g/mL, too little for any of these methods"
        problems.append(table.problem(0, "c", found, "is the heading's unit right?"))
    factor, assumptions = sample.solids, []
    if sample.solids != 1.0:
        assumptions.append(f"concentrations multiplied by the dry fraction {sample.solids:g}")
    expansion, findings = _expansion(measurement, problems)
    if expansion != 1.0:
        assumptions.append(
            f"concentrations multiplied by {expansion:.5g} for the density at the run temperature"
        )
    effects = []
    if sample.u_solids > 0.0:
        relative = sample.u_solids / sample.solids
        effects.append(
            Effect(SOLIDS_EFFECT, "concentration", relative, "dry fraction of the sample")
        )
    factor *= expansion
    return Solutions(nominal * factor, factor, tuple(assumptions), tuple(findings), tuple(effects))


def _expansion(measurement: Measurement, problems: list[Problem]) -> tuple[float, list[Finding]]:
    fields = measurement.fields
    run, prepared = value_of(fields, "density_run"), value_of(fields, "density_prepared")
    if (run is None) != (prepared is None):
        missing = "density_run" if run is None else "density_prepared"
        problems.append(
            measurement.place.problem(
                "", f"{missing} is missing", "give both densities, or neither"
            )
        )
        return 1.0, []
    if run is not None and prepared is not None:
        return run / prepared, []
    prepared_at = value_of(fields, "prepared_at")
    if prepared_at is None or measurement.temperature is None:
        return 1.0, []
    gap = measurement.temperature - prepared_at
    if abs(gap) <= 2.0:
        return 1.0, []
    text = (
        f"solutions made up at {prepared_at - 273.15:.4g} °C were run {gap:+.3g} K away and the"
        " concentrations are not corrected for expansion"
    )
    remedy = "give density_prepared and density_run"
    return 1.0, [Finding("no-expansion-correction", "caution", text, remedy, measurement.name)]


def effect_derivatives(
    effects: Mapping[str, Effect], named: Iterable[str], by_target: Mapping[str, float]
) -> dict[str, float]:
    """Return effect id → derivative for the named effects whose target acts on this row."""
    return {
        key: by_target[effects[key].target]
        for key in named
        if by_target.get(effects[key].target, 0.0) != 0.0
    }


def power_quantity(  # noqa: PLR0913 - one call states one quantity in full
    row: float, sd: float, dof: float, *, power: float, factor: float, unit: str, u_effects: float
) -> QuantityValue:
    """Return the quantity factor·row^power with u and 95 % interval from a row of scaled-t law.

    Parameters
    ----------
    row, sd, dof : float
        Value, t-scale and ν of the row, on the scale where its errors are Gaussian.
    power, factor : float
        E.g. −1 and 1 for Mn from 1/Mn; ½ and 1e7 for Rg in nm from Rg² in cm².
    u_effects : float
        Relative standard uncertainty of the quantity by shared effects.

    Notes
    -----
    The interval is the row's own, carried over; it opens where it reaches zero.
    """
    row, sd = float(row), float(sd)
    half = float(stdtrit(dof, 0.975)) * sd if math.isfinite(dof) else 1.959963984540054 * sd

    def carry(x: float) -> float | None:
        if power == 1.0:
            return factor * x
        return factor * x**power if x > 0.0 else None

    low, value, high = carry(row - half), carry(row), carry(row + half)
    if power != 1.0 and power > 0.0 and low is None and high is not None:
        return QuantityValue(value, unit, None, (None, high), "upper limit", None, "not resolved")
    if power < 0.0:
        low, high = high, low
    if value is None:
        return QuantityValue(
            None,
            unit,
            None,
            (low, high),
            "lower limit" if low else "undetermined",
            None,
            "the extrapolated value is not positive",
        )
    u = abs(power * value / row) * sd if power != 1.0 else factor * sd
    reading = "interval" if high is not None else "lower limit"
    total = math.hypot(u, u_effects * value)
    return QuantityValue(value, unit, u, (low, high), reading, total)
