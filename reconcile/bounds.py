"""Statements that hold for a distribution of any shape.

Power means of one distribution increase with their order: Mn ≤ Mv ≤ Mw ≤ Mz. From whichever are
measured follow a lower bound on Đ, and a test whether any distribution has them at all.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import nnls
from scipy.special import chdtrc

from reconcile.distribution import FAMILIES

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.estimate.system import System
    from reconcile.observables import Observable

    Array = NDArray[np.float64]

__all__ = ["FamilyFree", "family_free"]

_IMPOSSIBLE = 0.01
_N_DRAWS = 4000


@dataclass(frozen=True, slots=True)
class FamilyFree:
    """Bounds on Đ (None where there is none), and the test of the chain of averages.

    ``lower``, ``upper`` are outer 2.5 and 97.5 % quantiles; ``p_value`` is None with fewer than two
    different averages.
    """

    lower: float | None
    upper: float | None
    possible: bool
    p_value: float | None


@dataclass(frozen=True, slots=True, eq=False)
class _Averages:
    """ln of the measured power means (k,), ascending in order, with their covariance."""

    orders: tuple[float, ...]
    ln_m: Array
    covariance: Array


def family_free(system: System, seed: int) -> FamilyFree:
    """Return what the averages say without a family.

    Notes
    -----
    Rows that are a single power mean take part: 1/Mn, Mw, Mv, and [η] through its constants. Their
    logarithms are linearised; shared effects enter the covariance. The distance of the k − 1 slacks
    ln(M₊/M₋) from the region where all are ≥ 0 follows, at its apex, a χ̄² law whose weights come
    from draws (k > 3) or from the angle between the slacks.
    """
    averages = _averages(system)
    if averages is None or len(averages.orders) < 2:
        return FamilyFree(None, None, possible=True, p_value=None)
    k = len(averages.orders)
    difference = np.eye(k - 1, k, 1) - np.eye(k - 1, k)
    slack = difference @ averages.ln_m
    covariance = difference @ averages.covariance @ difference.T
    rng = np.random.default_rng(seed)
    p_value = _chain_p(slack, covariance, rng)
    lower, upper = _dispersity_bounds(averages, rng)
    return FamilyFree(lower, upper, possible=p_value >= _IMPOSSIBLE, p_value=p_value)


def _mean_order(observable: Observable) -> tuple[float, float] | None:
    """Return (order p of the power mean ⟨M^p⟩_w^{1/p}, exponent of M in ln F), if it is one."""
    if len(observable.terms) != 1:
        return None
    coefficient, order = observable.terms[0]
    return order, coefficient * order


def _averages(system: System) -> _Averages | None:
    family = next(iter(FAMILIES.values()))
    data = system.data(family, np.array([0.0]))
    factor = np.linalg.inv(data.whitener[0])
    value = data.values[0]
    pick, orders, ln_m, slope = [], [], [], []
    for i, observable in enumerate(system.observables):
        found = _mean_order(observable)
        if found is None or value[i] <= 0.0 or system.rows[i].link is not None:
            continue
        order, power = found
        constant = observable.ln_constant
        if observable.constants is not None:
            constant -= float(observable.constants.log_calibration(family, order)[0])
        pick.append(i)
        orders.append(order)
        ln_m.append((math.log(value[i]) - constant) / power)
        slope.append(1.0 / power)
    if not pick:
        return None
    relative = np.diag(1.0 / value[pick])
    rows = relative @ (factor @ factor.T)[np.ix_(pick, pick)] @ relative
    effects = system.derivatives[pick] * system.effect_u
    covariance = rows + effects @ effects.T
    for a, i in enumerate(pick):
        k = system.exponent_of[i]
        if k >= 0 and system.observables[i].constants is not None:
            pivot = math.log(system.observables[i].constants.m_ref)  # type: ignore[union-attr] # checked above
            lever = (ln_m[a] - pivot) * system.exponent_u[k]
            covariance[a, a] += lever**2
    scale = np.diag(slope)
    return _pooled(orders, np.array(ln_m), scale @ covariance @ scale)


def _pooled(orders: list[float], ln_m: Array, covariance: Array) -> _Averages:
    """Average repeated measurements of one order by generalised least squares."""
    unique = sorted(set(orders))
    design = np.array([[float(order == u) for u in unique] for order in orders])
    weight = np.linalg.inv(covariance)
    pooled = np.linalg.inv(design.T @ weight @ design)
    return _Averages(tuple(unique), pooled @ design.T @ weight @ ln_m, pooled)


def _distance(slack: Array, covariance: Array) -> float:
    """Return the squared distance of ``slack`` from the non-negative orthant in its own metric."""
    whitener = np.linalg.inv(np.linalg.cholesky(covariance))
    _, norm = nnls(whitener, whitener @ slack)
    return float(norm) ** 2


def _chain_p(slack: Array, covariance: Array, rng: np.random.Generator) -> float:
    distance = _distance(slack, covariance)
    if distance <= 0.0:
        return 1.0
    n = len(slack)
    if n == 1:
        return 0.5 * float(chdtrc(1, distance))
    if n == 2:
        rho = covariance[0, 1] / math.sqrt(covariance[0, 0] * covariance[1, 1])
        both = math.acos(rho) / (2.0 * math.pi)
        return 0.5 * float(chdtrc(1, distance)) + both * float(chdtrc(2, distance))
    null = rng.multivariate_normal(np.zeros(n), covariance, size=_N_DRAWS)
    beyond = sum(_distance(row, covariance) >= distance for row in null)
    return (beyond + 1.0) / (_N_DRAWS + 1.0)


def _dispersity_bounds(
    averages: _Averages, rng: np.random.Generator
) -> tuple[float | None, float | None]:
    """Return outer quantiles of the sharp bounds on Đ.

    Notes
    -----
    Mn and Mw together are Đ itself. Otherwise Đ ≥ Mv/Mn or Đ ≥ Mw/Mv, with no upper bound on an
    unbounded support.
    """
    orders = averages.orders
    draws = rng.multivariate_normal(averages.ln_m, averages.covariance, size=_N_DRAWS)
    column = {order: draws[:, i] for i, order in enumerate(orders)}
    low_end, high_end = max(min(orders), -1.0), min(max(orders), 1.0)
    if low_end not in column or high_end not in column or low_end >= high_end:
        return None, None
    ln_ratio = np.maximum(column[high_end] - column[low_end], 0.0)
    lower = float(np.exp(np.quantile(ln_ratio, 0.025)))
    exact = low_end == -1.0 and high_end == 1.0
    return lower, float(np.exp(np.quantile(ln_ratio, 0.975))) if exact else None
