"""From likelihoods over a grid to statements: interval, limit, or undetermined.

The dispersity's interval is {Đ: −2 ln L(Đ)/Lmax ≤ q}, that of an average the same for its profile
over the shape, with q the square of Student's t at the quantity's effective degrees of freedom.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtri, stdtrit

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

__all__ = [
    "LEVELS",
    "Statement",
    "cut",
    "effective_dof",
    "likelihood_interval",
    "reading_of",
]

LEVELS: dict[str, float] = {"interval68": 0.6826894921370859, "interval95": 0.95}
_GAUSSIAN_DOF = 1e6
"""Above this many degrees of freedom Student's t is the normal law to all printed digits."""


@dataclass(frozen=True, slots=True)
class Statement:
    """What is said of one quantity; an open end is None, ``value`` None where nothing is known."""

    value: float | None
    interval68: tuple[float | None, float | None]
    interval95: tuple[float | None, float | None]
    reading: str
    dof: float
    expected_limit95: float | None = None


def cut(level: float, dof: float) -> float:
    """Return the cut q = t² of a two-sided interval at ``level``.

    Examples
    --------
    >>> round(cut(0.95, float("inf")), 3), round(cut(0.95, 5.0), 3)
    (3.841, 6.608)
    """
    p = 0.5 + 0.5 * level
    quantile = ndtri(p) if dof > _GAUSSIAN_DOF else stdtrit(dof, p)
    return float(quantile) ** 2


def effective_dof(variances: Array, dof: Array) -> float:
    """Return ν_eff = u⁴/Σ(u_i⁴/ν_i), the Welch-Satterthwaite formula (JCGM 100:2008, G.4.1).

    Examples
    --------
    >>> round(effective_dof(np.array([1.0, 1.0]), np.array([4.0, float("inf")])), 9)
    16.0
    """
    denominator = float(np.sum(variances**2 / dof))
    total = float(np.sum(variances)) ** 2
    return total / denominator if denominator > total / 1e9 else float("inf")


def likelihood_interval(x: Array, deviance: Array, q: float) -> tuple[float | None, float | None]:
    """Return the ends of {x: deviance ≤ q}; None where the set reaches the end of the grid.

    Parameters
    ----------
    x, deviance : ndarray
        Ascending grid and −2 ln(L/Lmax) on it; crossings are interpolated linearly. A set of
        several parts is covered from its first to its last point.

    Examples
    --------
    >>> x = np.linspace(-5.0, 5.0, 1001)
    >>> low, high = likelihood_interval(x, x**2, 4.0)
    >>> round(low, 3), round(high, 3)
    (-2.0, 2.0)
    """
    inside = np.flatnonzero(deviance <= q)
    first, last = int(inside[0]), int(inside[-1])

    def crossing(i: int, j: int) -> float:
        share = (q - deviance[i]) / (deviance[j] - deviance[i])
        return float(x[i] + share * (x[j] - x[i]))

    low = None if first == 0 else crossing(first, first - 1)
    high = None if last == len(x) - 1 else crossing(last, last + 1)
    return low, high


def reading_of(low: float | None, high: float | None) -> str:
    """Return how an interval reads.

    Examples
    --------
    >>> reading_of(None, 1.2), reading_of(1.1, None), reading_of(None, None), reading_of(1.1, 1.2)
    ('upper limit', 'lower limit', 'undetermined', 'interval')
    """
    if low is None:
        return "undetermined" if high is None else "upper limit"
    return "lower limit" if high is None else "interval"
