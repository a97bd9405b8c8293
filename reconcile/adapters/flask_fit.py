"""The fit of a series of flasks: readings themselves against concentration, errors where they are.

Osmotic pressures and flow times are fitted the same way. Rows of equal concentration are one flask:
its reading errors average, its concentration error does not. That error moves reading and abscissa
together, so it enters as u_c ∂y/∂ ln c at the fitted curve. The scatter multiplies the part of the
covariance that comes from readings, never that of a prior.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.adapters.common import Scatter
from reconcile.evidence import Finding, frozen_array
from reconcile.nonlinear import fit

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    Array = NDArray[np.float64]
    Model = Callable[[Array, Array], tuple[Array, Array, Array]]

__all__ = [
    "NO_SCATTER",
    "FlaskFit",
    "Flasks",
    "Prior",
    "ReadingError",
    "fit_flasks",
    "group_flasks",
    "unknown_finding",
]

_PASSES = 3
_NO_SCATTER2 = 1e-20
"""Scatter over the mean reading, squared, below which it is rounding; only without stated error."""
_NODES, _REACH, _STEPS = 31, 4.0, 5


@dataclass(frozen=True, slots=True)
class ReadingError:
    """Standard uncertainty of one reading: absolute, relative, or not stated (``u`` None)."""

    u: float | None
    is_relative: bool = False

    def of(self, mean: Array) -> Array:
        """Return it per flask; without a stated one a constant, whose size does not matter."""
        if self.u is None:
            return np.full_like(mean, float(np.mean(np.abs(mean))))
        return np.abs(mean) * self.u if self.is_relative else np.full_like(mean, self.u)


@dataclass(frozen=True, slots=True, eq=False)
class Flasks:
    """Readings grouped by flask.

    ``c``, ``mean`` and ``count`` (k,); ``within`` Σ ((reading − mean)/error of one reading)² with
    ``within_dof`` degrees of freedom.
    """

    c: Array
    mean: Array
    count: Array
    within: float
    within_dof: int


@dataclass(frozen=True, slots=True)
class Prior:
    """A Gaussian prior on one parameter."""

    index: int
    mean: float
    sd: float


@dataclass(frozen=True, slots=True, eq=False)
class FlaskFit:
    """Parameters (p,) with covariance (p, p); NaN where nothing tells the errors' scale.

    ``values`` are posterior means; ``mode`` is the curve through the readings. ``at_bound`` tells
    whether the first parameter ended on its lower bound.
    """

    values: Array
    mode: Array
    covariance: Array
    scatter: Scatter
    at_bound: bool

    @property
    def is_known(self) -> bool:
        """Whether there is an uncertainty."""
        return bool(np.isfinite(self.covariance).all())


def group_flasks(c: Array, readings: Array, error: ReadingError) -> Flasks:
    """Group readings by equal concentration.

    Examples
    --------
    >>> flasks = group_flasks(
    ...     np.array([1.0, 2.0, 1.0]), np.array([4.0, 5.0, 6.0]), ReadingError(0.5)
    ... )
    >>> flasks.c.tolist(), flasks.mean.tolist(), flasks.within, flasks.within_dof
    ([1.0, 2.0], [5.0, 5.0], 8.0, 1)
    """
    unique, index = np.unique(c, return_inverse=True)
    count = np.bincount(index).astype(float)
    mean = np.bincount(index, readings) / count
    deviation = (readings - mean[index]) / error.of(mean)[index]
    within = float(deviation @ deviation)
    return Flasks(unique, mean, count, within, len(readings) - len(unique))


def fit_flasks(  # noqa: PLR0913 - a fit is its data, model, start and priors
    flasks: Flasks,
    error: ReadingError,
    u_flask: float,
    model: Model,
    start: Array,
    priors: Sequence[Prior],
    *,
    fixed: int = 0,
    lower: float = -math.inf,
) -> FlaskFit:
    """Fit a curve to flask means.

    Parameters
    ----------
    u_flask : float
        Relative standard uncertainty of each flask's concentration.
    model : callable
        (parameters (p,), c (k,)) → readings (k,), ∂/∂parameters (k, p), ∂/∂ ln c (k,).
    start : ndarray, shape (p,)
        Where to start, in units of which the solver works; no entry may be zero.
    priors : sequence of Prior
        A parameter under a prior counts as no unknown.
    fixed : int
        Number of leading parameters held at their start.
    lower : float
        Lower bound of the first free parameter, in units of its start.
    """
    stated = error.u is not None
    unknowns = len(start) - fixed - len(priors)
    dof = len(flasks.c) - unknowns + flasks.within_dof
    values, scale2 = start, 1.0
    for _ in range(_PASSES):
        sd = _sd(flasks, error, u_flask, model, values) * math.sqrt(scale2)
        values, covariance, bound = _solve(flasks, model, (start, values), sd, priors, fixed, lower)
        sd = _sd(flasks, error, u_flask, model, values)
        misfit = (flasks.mean - model(values, flasks.c)[0]) / sd
        scatter = Scatter.of(float(misfit @ misfit) + flasks.within, dof, stated=stated)
        # readings on the curve to the last digit tell as little of their errors as too few do
        is_known = math.isfinite(scatter.scale2) and scatter.scale2 > _NO_SCATTER2
        if not is_known:
            covariance = np.full_like(covariance, np.nan)
            break
        scale2 = scatter.scale2
    mode = values
    if not bound and is_known:
        sd = _sd(flasks, error, u_flask, model, values) * math.sqrt(scale2)
        values, covariance = _marginalised(
            flasks, model, (values, covariance, np.abs(start)), sd, priors, fixed
        )
    return FlaskFit(
        frozen_array(values), frozen_array(mode), frozen_array(covariance), scatter, bound
    )


NO_SCATTER = "no reading error was stated and there is no scatter to learn it from"


def unknown_finding(name: str, fitted: FlaskFit) -> tuple[Finding, ...]:
    """Return the finding of a series whose readings tell nothing of their errors."""
    if fitted.is_known:
        return ()
    text = f"{NO_SCATTER}: the numbers stand without uncertainty and stay out of the estimate"
    return (Finding("no-uncertainty", "warning", text, "state u_reading", name),)


def _marginalised(
    flasks: Flasks,
    model: Model,
    mode: tuple[Array, Array, Array],
    sd: Array,
    priors: Sequence[Prior],
    fixed: int,
) -> tuple[Array, Array]:
    """Return mean and covariance with the first prior's parameter marginalised on nodes.

    Notes
    -----
    At each node the others are fitted by Gauss-Newton from the mode, and the node weighs
    exp(−Q/2)/√det(JᵀJ). The mode alone is biased where that parameter bends the others: for the
    polycarbonate table of the tests by 0.4 standard uncertainties of 1/Mn.
    """
    at, covariance, unit = mode
    moving = priors[0].index
    spread = math.sqrt(covariance[moving, moving])
    free = [k for k in range(fixed, len(at)) if k != moving]
    rows = [prior for prior in priors if prior.index in free]
    points, parts, ln_weights = [], [], []
    for shift in np.linspace(-_REACH, _REACH, _NODES):
        values = at.copy()
        values[moving] += shift * spread
        # along the ridge the others follow in proportion to their covariance
        values[free] += shift * spread * covariance[free, moving] / covariance[moving, moving]
        for _ in range(_STEPS):
            y, slopes, _ = model(values, flasks.c)
            jacobian = slopes[:, free] / sd[:, None]
            misfit = (flasks.mean - y) / sd
            for prior in rows:
                jacobian = np.vstack([jacobian, np.eye(len(at))[prior.index, free] / prior.sd])
                misfit = np.append(misfit, (prior.mean - values[prior.index]) / prior.sd)
            step, *_ = np.linalg.lstsq(jacobian * unit[free], misfit, rcond=None)
            values[free] += step * unit[free]
        off = (values[moving] - priors[0].mean) / priors[0].sd
        scaled = jacobian * unit[free]
        points.append(values)
        parts.append(np.linalg.pinv(scaled.T @ scaled) * np.outer(unit[free], unit[free]))
        _, ln_det = np.linalg.slogdet(scaled.T @ scaled)
        ln_weights.append(-0.5 * (float(misfit @ misfit) + off**2 + ln_det))
    weight = np.exp(np.array(ln_weights) - max(ln_weights))
    weight /= weight.sum()
    stacked = np.array(points)
    mean = weight @ stacked
    off_mean = stacked - mean
    total = np.einsum("k,ki,kj->ij", weight, off_mean, off_mean)
    total[np.ix_(free, free)] += np.einsum("k,kij->ij", weight, np.array(parts))
    return mean, total


def _sd(flasks: Flasks, error: ReadingError, u_flask: float, model: Model, values: Array) -> Array:
    by_c = model(values, flasks.c)[2]
    return np.asarray(np.hypot(error.of(flasks.mean) / np.sqrt(flasks.count), u_flask * by_c))


def _solve(  # noqa: PLR0913, PLR0917 - as above
    flasks: Flasks,
    model: Model,
    starts: tuple[Array, Array],
    sd: Array,
    priors: Sequence[Prior],
    fixed: int,
    lower: float,
) -> tuple[Array, Array, bool]:
    unit, at = starts
    rows = np.array([prior.index for prior in priors], int)
    centre = np.array([prior.mean for prior in priors])
    width = np.array([prior.sd for prior in priors])

    def complete(p: Array) -> Array:
        return np.concatenate([unit[:fixed], p * unit[fixed:]])

    def residual(p: Array) -> Array:
        values = complete(p)
        misfit = (model(values, flasks.c)[0] - flasks.mean) / sd
        return np.concatenate([misfit, (values[rows] - centre) / width])

    def jacobian(p: Array) -> Array:
        slopes = model(complete(p), flasks.c)[1] / sd[:, None]
        stacked = np.vstack([slopes, np.eye(len(unit))[rows] / width[:, None]])
        return np.asarray((stacked * unit)[:, fixed:])

    bounds = np.full(len(unit) - fixed, -np.inf)
    bounds[0] = lower
    found = fit(residual, jacobian, (at / unit)[fixed:], bounds)
    covariance = np.zeros((len(unit), len(unit)))
    covariance[fixed:, fixed:] = found.covariance
    return complete(found.values), covariance * np.outer(unit, unit), found.at_bound[0]
