"""The global test of whether the measurements tell one story.

χ² of the joint fit against its degrees of freedom, with Student's correction where scatter of few
readings sets a scale. The fault library is not part of this test: no culprit is named here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from scipy.special import chdtrc, fdtrc

if TYPE_CHECKING:
    from reconcile.bounds import FamilyFree
    from reconcile.estimate.joint import JointEstimate

__all__ = ["Consistency", "Residual", "assess"]

_TINY = 1e-12
"""Below this a p-value is a statement about the tail of a law nobody has seen."""

_NOTICEABLE = 1.0
"""χ² without degrees of freedom from which a misfit at the edge of the families is mentioned."""


@dataclass(frozen=True, slots=True)
class Residual:
    """Observed against fitted on a row's own scale; ``z`` is None where the fit must meet it."""

    measurement: str
    quantity: str
    z: float | None


@dataclass(frozen=True, slots=True)
class Consistency:
    """The verdict with its evidence; ``statement`` is one sentence for people."""

    verdict: str
    chi2: float
    dof: int
    p_value: float | None
    residuals: tuple[Residual, ...]
    statement: str


def assess(result: JointEstimate, free: FamilyFree) -> Consistency:
    """Return the verdict on a joint estimate.

    Notes
    -----
    ``consistent`` from p = 0.05 up, ``doubtful`` from 0.01, below that ``contradiction``; also
    ``contradiction`` where no distribution of any shape can have these averages (p < 0.01).
    Without degrees of freedom only the latter can speak, else ``not testable``.
    """
    fit = result.best
    dof = result.system.n_rows - result.system.n_unknown
    pulls = fit.linearised.pulls()
    residuals = tuple(
        Residual(name, row.quantity, None if math.isnan(z) else float(z))
        for name, row, z in zip(result.system.measurements, result.system.rows, pulls, strict=True)
    )
    p_value = None
    if dof > 0:
        nu = fit.linearised.residual_dof()
        heavy = math.isfinite(nu) and nu < 1e6
        p_value = float(fdtrc(dof, nu, fit.chi2 / dof) if heavy else chdtrc(dof, fit.chi2))
    verdict = _verdict(p_value, free)
    return Consistency(
        verdict,
        fit.chi2,
        max(dof, 0),
        p_value,
        residuals,
        _statement(verdict, p_value, fit.chi2, free),
    )


def _verdict(p_value: float | None, free: FamilyFree) -> str:
    if not free.possible:
        return "contradiction"
    if p_value is None:
        return "not testable"
    if p_value < 0.01:
        return "contradiction"
    return "doubtful" if p_value < 0.05 else "consistent"


def _statement(verdict: str, p_value: float | None, chi2: float, free: FamilyFree) -> str:
    if not free.possible:
        return (
            "No molar-mass distribution of any shape has these averages"
            f" (p {_p_text(free.p_value or 0.0)}); which measurement is wrong is not named yet."
        )
    if p_value is None:
        text = "There are no more measurements than unknowns: whether they agree cannot be tested."
        if chi2 > _NOTICEABLE:
            text += f" Yet neither family meets them all (χ² = {chi2:.2g})."
        return text
    p = _p_text(p_value)
    if verdict == "consistent":
        return f"The measurements tell one story (p {p})."
    if verdict == "doubtful":
        return f"The measurements agree poorly (p {p}); no culprit is named yet."
    return f"The measurements contradict each other (p {p}); no culprit is named yet."


def _p_text(p_value: float) -> str:
    if p_value < _TINY:
        return f"< {_TINY:g}"
    return f"= {p_value:.1g}" if p_value < 0.1 else f"= {p_value:.2f}"
