"""What an adapter hands to the joint estimate, and what it shows beside it.

The estimator reads `Evidence` only, and never learns which technique it came from. A row's value is
on the scale where the errors of its readings are Gaussian (1/Mn, 1/Mw, [η], Rg², A2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from reconcile.measurement import Effect
    from reconcile.observables import Observable

    Array = NDArray[np.float64]

__all__ = [
    "Alternative",
    "Constant",
    "Diagnostic",
    "Evidence",
    "Finding",
    "QuantityValue",
    "Reduction",
    "Row",
    "Tabulated",
    "frozen_array",
]


def frozen_array(values: Any) -> Array:
    """Return a read-only float copy of ``values``."""
    array = np.array(values, dtype=float)
    array.setflags(write=False)
    return array


@dataclass(frozen=True, slots=True)
class Row:
    """One row of evidence.

    Parameters
    ----------
    quantity : str
        The reduced quantity behind the row (``Mn``, ``Mw``, ``A2``, ``Rg``, …).
    observable : Observable or None
        What it observes of the distribution; None where this case gives no law that links it.
    scale : str
        The scale of the value, as a text for people, e.g. ``1/Mn [mol/g]``.
    dof : float
        Degrees of freedom ν behind the scatter; infinite for a stated error.
    derivatives : mapping
        Effect id → ∂ ln(value on its scale)/∂e, with e = ln(used/true).
    medium : str or None
        Solvent and temperature, for quantities that depend on them.
    link : Observable or None
        What the row observes up to a factor common to its medium; used only where the user asks
        for rows of one medium to be linked.
    """

    quantity: str
    observable: Observable | None
    scale: str
    dof: float = math.inf
    derivatives: Mapping[str, float] = field(default_factory=dict)
    medium: str | None = None
    link: Observable | None = None


@dataclass(frozen=True, slots=True)
class Diagnostic:
    """A further contrast of the same readings whose expectation is zero; the judge uses its key."""

    key: str
    text: str


@dataclass(frozen=True, slots=True, eq=False)
class Tabulated:
    """Evidence that depends on the distribution's shape: one entry per node of t = ln(Đ − 1).

    ``values`` (T, n), ``covariance`` (T, n, n), ``ln_weight`` (T,) the log of the readings'
    marginal likelihood at each node.
    """

    t: Array
    values: Array
    covariance: Array
    ln_weight: Array


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """Rows of one measurement with their shared covariance.

    ``values`` and ``covariance`` run over the rows, then the diagnostics. The covariance is that of
    the scaled-t law with each row's ν: its variance is larger by ν/(ν − 2). ``tabulated`` maps a
    family to values that replace the constant ones.
    """

    measurement: str
    rows: tuple[Row, ...]
    values: Array
    covariance: Array
    diagnostics: tuple[Diagnostic, ...] = ()
    tabulated: Mapping[str, Tabulated] = field(default_factory=dict)
    fault_derivatives: Mapping[str, Array] = field(default_factory=dict)

    def __post_init__(self) -> None:
        n = len(self.rows) + len(self.diagnostics)
        if self.values.shape != (n,) or self.covariance.shape != (n, n):
            raise ValueError(f"{self.measurement}: {n} rows need values ({n},) and covariance")


@dataclass(frozen=True, slots=True)
class Finding:
    """A doubt with a code, a size in its text and a remedy. Severity: note, caution or warning."""

    code: str
    severity: str
    text: str
    remedy: str
    measurement: str = ""


@dataclass(frozen=True, slots=True)
class QuantityValue:
    """A reduced quantity in internal units with its standard uncertainty and 95 % interval.

    ``u`` covers the readings of this measurement alone; shared effects act in the joint estimate
    and are added in ``u_total``. ``reading`` is ``interval``, ``upper limit``, ``lower limit`` or
    ``undetermined``; an open end is None. ``why`` says why there is no uncertainty, if so.
    """

    value: float | None
    unit: str
    u: float | None = None
    interval95: tuple[float | None, float | None] = (None, None)
    reading: str = "interval"
    u_total: float | None = None
    why: str = ""


@dataclass(frozen=True, slots=True)
class Alternative:
    """Another published way to reduce the same readings, named by its form and its weights."""

    form: str
    quantities: Mapping[str, QuantityValue]


@dataclass(frozen=True, slots=True)
class Constant:
    """A constant that entered a reduction; ``status``: stated, computed or from memory, verify."""

    name: str
    value: float
    unit: str
    source: str
    status: str


@dataclass(frozen=True, slots=True, eq=False)
class Reduction:
    """Everything one measurement yields.

    ``readings`` are the columns a report tabulates (heading with unit → values), ``fit`` the fitted
    parameters and curves as plain JSON values, ``effects`` those that the adapter added itself.
    """

    name: str
    technique: str
    form: str
    quantities: Mapping[str, QuantityValue]
    evidence: Evidence | None
    alternatives: tuple[Alternative, ...] = ()
    findings: tuple[Finding, ...] = ()
    excluded: tuple[Mapping[str, Any], ...] = ()
    readings: Mapping[str, tuple[float, ...]] = field(default_factory=dict)
    fit: Mapping[str, Any] = field(default_factory=dict)
    constants: tuple[Constant, ...] = ()
    assumptions: tuple[str, ...] = ()
    effects: tuple[Effect, ...] = ()
