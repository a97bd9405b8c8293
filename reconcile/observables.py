"""What a row of evidence observes of the distribution: a power law of mass moments.

Every observable this program knows has the form

    ln F = constant + Σ_j c_j [ p_j μ + λ(p_j; t) ],      μ = ln Mw,

with orders p_j: 1/Mn is ⟨M^−1⟩_w, Mz is ⟨M²⟩_w/⟨M⟩_w, [η] is K⟨M^a⟩_w. A Mark-Houwink exponent with
an error shifts the order of the first term by δ about a pivot molar mass.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.distribution import shape_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.distribution import Family

    Array = NDArray[np.float64]

__all__ = [
    "LnPrediction",
    "MarkHouwink",
    "Observable",
    "SizeLaw",
    "average",
    "dispersity",
    "inverse_average",
    "limiting_viscosity_number",
    "mean_square_radius",
    "osmotic_virial",
    "scattering_virial",
    "viscosity_average",
]

VIRIAL_EXPONENT = 0.22
"""γ in A₂ ∝ M^−γ of uniform chains in a good solvent; theory 2 − 3ν, experiment 0.20 to 0.25."""

_ORDERS: dict[str, tuple[tuple[float, float], ...]] = {
    "Mn": ((-1.0, -1.0),),  # Mn = 1/⟨M^−1⟩_w
    "Mw": ((1.0, 1.0),),
    "Mz": ((1.0, 2.0), (-1.0, 1.0)),
}


@dataclass(frozen=True, slots=True)
class MarkHouwink:
    """Constants of [η] = K M^a with their errors about a reference molar mass.

    ``K`` in mL/g, ``m_ref`` in g/mol; ``u_K`` is the relative standard uncertainty of K·m_ref^a,
    uncorrelated with that of ``a`` (absolute). ``calibrated_on`` names the average of the samples
    the pair was fitted to: ``uniform`` or ``Mv`` needs no conversion, ``Mw`` and ``Mn`` are
    converted with ``calibration_dispersity``.
    """

    K: float
    a: float
    u_K: float
    u_a: float
    m_ref: float
    calibrated_on: str = "uniform"
    calibration_dispersity: float = 1.0
    source: str = ""

    def log_calibration(self, family: Family, a: float | Array) -> tuple[Array, Array, Array]:
        """Return ln(K as entered / K of uniform chains) and its derivatives in ``a``.

        Notes
        -----
        K_entered · Mx^a = K ⟨M^a⟩_w for the calibrating samples, so the ratio is exp(λ(a)) for
        Mx = Mw and Đ^a exp(λ(a)) for Mx = Mn.

        Examples
        --------
        The poly(vinyl acetate) pair 1.02e-2 mL/g, 0.72 of whole polymers with Đ = 2:

        >>> from reconcile.distribution import FAMILIES
        >>> pair = MarkHouwink(1.02e-2, 0.72, 0.0, 0.0, 1e5, "Mw", 2.0)
        >>> round(pair.uniform_K(FAMILIES["schulz-zimm"]), 5)
        0.0107
        """
        moment = family.log_moment(a, shape_of(self.calibration_dispersity))
        if self.calibrated_on == "Mw":
            return moment.value, moment.slope, moment.curvature
        if self.calibrated_on == "Mn":
            ln_d = math.log(self.calibration_dispersity)
            return moment.value + np.asarray(a) * ln_d, moment.slope + ln_d, moment.curvature
        zero = np.zeros_like(moment.value)
        return zero, zero, zero

    def uniform_K(self, family: Family) -> float:  # noqa: N802 - K is the symbol
        """Return K in mL/g for uniform chains, as this family converts it."""
        return self.K * math.exp(-float(self.log_calibration(family, self.a)[0]))


@dataclass(frozen=True, slots=True)
class SizeLaw:
    """Rg = K M^nu of uniform chains, K in cm; ``u_K`` relative, at ``m_ref`` in g/mol."""

    K: float
    nu: float
    u_K: float
    m_ref: float
    source: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class LnPrediction:
    """ln F at given unknowns with its derivatives; arrays over the nodes of t."""

    value: Array
    d_mu: Array
    d_delta: Array
    d2_delta: Array


@dataclass(frozen=True, slots=True)
class Observable:
    """A product of mass moments; see the module's formula.

    ``terms`` holds pairs (c, p); ``exponent_effect`` names the effect that shifts the first order,
    if any, with ``constants`` giving pivot and calibration.
    """

    label: str
    terms: tuple[tuple[float, float], ...]
    ln_constant: float = 0.0
    exponent_effect: str | None = None
    constants: MarkHouwink | None = None

    def predict(
        self, family: Family, t: Array, mu: Array, delta: Array | float = 0.0
    ) -> LnPrediction:
        """Return ln F at the nodes ``t`` for ``mu`` = ln Mw and an exponent error ``delta``."""
        value = np.full_like(t, self.ln_constant)
        d_mu = np.zeros_like(t)
        d_delta = np.zeros_like(t)
        d2_delta = np.zeros_like(t)
        for index, (coefficient, order) in enumerate(self.terms):
            shifted = order + (np.asarray(delta) if index == 0 and self.exponent_effect else 0.0)
            moment = family.log_moment(shifted, t)
            value = value + coefficient * (shifted * mu + moment.value)
            d_mu = d_mu + coefficient * shifted
            if index == 0:
                d_delta = coefficient * (mu + moment.slope)
                d2_delta = coefficient * moment.curvature
        if self.constants is not None:
            pair = self.constants
            ln_pivot = math.log(pair.m_ref)
            calibration = pair.log_calibration(family, pair.a + np.asarray(delta))
            value = value - calibration[0] - np.asarray(delta) * ln_pivot
            d_delta = d_delta - calibration[1] - ln_pivot
            d2_delta = d2_delta - calibration[2]
        return LnPrediction(value, d_mu, d_delta, d2_delta)


def average(name: str) -> Observable:
    """Return Mn, Mw or Mz itself, in g/mol."""
    return Observable(name, _ORDERS[name])


def inverse_average(name: str, power: float = 1.0) -> Observable:
    """Return the reciprocal of an average to a power (1 or ½), as osmotic and Zimm rows see it."""
    label = f"1/{name}" if power == 1.0 else f"1/{name}^{power:g}"
    return Observable(label, tuple((-power * c, p) for c, p in _ORDERS[name]))


def dispersity() -> Observable:
    """Return Đ = Mw/Mn."""
    return Observable("Mw/Mn", ((1.0, -1.0), (1.0, 1.0)))


def viscosity_average(exponent: float) -> Observable:
    """Return Mv = ⟨M^a⟩_w^{1/a} in g/mol."""
    return Observable("Mv", ((1.0 / exponent, exponent),))


def limiting_viscosity_number(
    constants: MarkHouwink, exponent_effect: str | None = None
) -> Observable:
    """Return [η] = K⟨M^a⟩_w in mL/g, K converted to uniform chains for the family at hand."""
    return Observable(
        "[η]", ((1.0, constants.a),), math.log(constants.K), exponent_effect, constants
    )


def mean_square_radius(law: SizeLaw) -> Observable:
    """Return ⟨Rg²⟩_z = K²⟨M^{1+2ν}⟩_w/Mw in cm²."""
    return Observable("Rg²", ((1.0, 1.0 + 2.0 * law.nu), (-1.0, 1.0)), 2.0 * math.log(law.K))


def osmotic_virial() -> Observable:
    """Return A₂ of osmometry over a scale of its medium: Σ w_i w_j A_ij.

    Notes
    -----
    With A_ij = √(A_ii A_jj) and A_ii ∝ M^−γ both sums of A₂ are mass moments (E. F. Casassa, 1962,
    from memory): ⟨M^−γ/2⟩_w² here, ⟨M^{1−γ/2}⟩_w²/Mw² for light scattering.
    """
    return Observable("A2, osmotic", ((2.0, -VIRIAL_EXPONENT / 2.0),))


def scattering_virial() -> Observable:
    """Return A₂ of light scattering over the same scale: Σ w_i w_j M_i M_j A_ij / Mw²."""
    order = 1.0 - VIRIAL_EXPONENT / 2.0
    return Observable("A2, scattering", ((2.0, order), (-2.0, 1.0)))
