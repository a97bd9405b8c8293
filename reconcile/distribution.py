"""The two families of molar-mass distribution, by their moments and their densities.

Both are written with the mass-average molar mass Mw as scale and t = ln(Đ − 1) as shape, so that
Mn = Mw/Đ in either. What the estimate needs is the logarithm of a reduced mass moment,

    λ(p; t) = ln( ⟨M^p⟩_w / Mw^p ),

and its first two derivatives in the order p. λ(1) = 0 and λ(−1) = ln Đ for every family.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np
from scipy.special import digamma, gammaln, polygamma

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

__all__ = ["FAMILIES", "Family", "LogMoment", "LogNormal", "SchulzZimm", "shape_of"]


@dataclass(frozen=True, slots=True, eq=False)
class LogMoment:
    """λ(p; t) with ∂λ/∂p and ∂²λ/∂p², arrays of one shape."""

    value: Array
    slope: Array
    curvature: Array


def shape_of(dispersity: float) -> float:
    """Return t = ln(Đ − 1); −inf for a uniform polymer.

    Examples
    --------
    >>> shape_of(2.0)
    0.0
    """
    return float(np.log(dispersity - 1.0)) if dispersity > 1.0 else float("-inf")


class Family(Protocol):
    """What the estimate asks of a family."""

    name: str
    label: str

    def log_moment(self, order: float | Array, t: float | Array) -> LogMoment:
        """Return λ and its derivatives in the order; ``order`` and ``t`` broadcast."""
        ...

    def mass_density(self, ln_m: Array, ln_mw: float, t: float) -> Array:
        """Return w(ln M), the mass density per unit of ln M."""
        ...


class SchulzZimm:
    """Gamma distribution of chain mass; k = 1/(Đ − 1).

    Notes
    -----
    ⟨M^p⟩_w = θ^p Γ(k+1+p)/Γ(k+1) with θ = Mw/(k+1), p > −(k+1); IUPAC Gold Book, entry S05502.
    """

    name = "schulz-zimm"
    label = "Schulz–Zimm"

    def log_moment(self, order: float | Array, t: float | Array) -> LogMoment:
        """Return λ and its derivatives; zero for a uniform polymer (t = −inf).

        Examples
        --------
        >>> round(float(SchulzZimm().log_moment(2.0, 0.0).value), 6)  # Mz/Mw = 1.5 at Đ = 2
        0.405465
        """
        p, shape = np.broadcast_arrays(np.asarray(order, float), np.asarray(t, float))
        uniform = np.isneginf(shape)
        k1 = np.exp(-np.where(uniform, 0.0, shape)) + 1.0
        ln_k1 = np.log(k1)
        value = gammaln(k1 + p) - gammaln(k1) - p * ln_k1
        slope = digamma(k1 + p) - ln_k1
        curvature = polygamma(1, k1 + p)
        zero = np.zeros_like(value)
        return LogMoment(
            np.where(uniform, zero, value),
            np.where(uniform, zero, slope),
            np.where(uniform, zero, curvature),
        )

    def mass_density(self, ln_m: Array, ln_mw: float, t: float) -> Array:
        """Return w(ln M): a gamma density of shape k + 1 in M, times M."""
        k1 = np.exp(-t) + 1.0
        x = ln_m - ln_mw + np.log(k1)
        return np.asarray(np.exp(k1 * x - np.exp(x) - gammaln(k1)))


class LogNormal:
    """Log-normal distribution; σ² = ln Đ in number and in mass alike.

    Notes
    -----
    ⟨M^p⟩_w = Mw^p Đ^{p(p−1)/2}: moments of the normal law of ln M (Wesslau's form).
    """

    name = "log-normal"
    label = "log-normal"

    def log_moment(self, order: float | Array, t: float | Array) -> LogMoment:
        """Return λ = p(p − 1)/2 · ln Đ and its derivatives.

        Examples
        --------
        >>> round(float(LogNormal().log_moment(2.0, 0.0).value), 6)  # Mz/Mw = 2 at Đ = 2
        0.693147
        """
        p, shape = np.broadcast_arrays(np.asarray(order, float), np.asarray(t, float))
        ln_d = np.log1p(np.exp(shape))
        return LogMoment(0.5 * p * (p - 1.0) * ln_d, (p - 0.5) * ln_d, ln_d + 0.0 * p)

    def mass_density(self, ln_m: Array, ln_mw: float, t: float) -> Array:
        """Return w(ln M): normal about ln Mw − σ²/2."""
        variance = float(np.log1p(np.exp(t)))
        x = ln_m - ln_mw + variance / 2.0
        return np.asarray(np.exp(-x * x / (2.0 * variance)) / np.sqrt(2.0 * np.pi * variance))


FAMILIES: dict[str, Family] = {f.name: f for f in (SchulzZimm(), LogNormal())}
"""The families of the joint estimate; the key is what documents say."""
