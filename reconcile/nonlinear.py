"""Non-linear least squares; lmfit lives here and nowhere else.

Whitened residuals and their Jacobian in, our own result out. The trust-region solver with bounds is
named explicitly, the covariance is never scaled by the scatter (that would hide contradictions),
and no expression ever reaches lmfit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.evidence import frozen_array

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    Array = NDArray[np.float64]

__all__ = ["NonlinearFit", "fit"]

_TOLERANCE = 1e-14
"""As tight as the solver takes, so that a change of units upstream changes nothing that is read."""


_MAX_EVALUATIONS = 200


@dataclass(frozen=True, slots=True, eq=False)
class NonlinearFit:
    """An optimum: parameters (p,), the Jacobian (n, p) there, the sum of squares.

    ``covariance`` (p, p) is (JᵀJ)⁻¹ at the weights given; ``at_bound`` tells which parameters ended
    on a bound, for which it means nothing.
    """

    values: Array
    jacobian: Array
    covariance: Array
    chi2: float
    at_bound: tuple[bool, ...]
    converged: bool


def fit(
    residual: Callable[[Array], Array],
    jacobian: Callable[[Array], Array],
    start: Array,
    lower: Array | None = None,
) -> NonlinearFit:
    """Minimise the sum of squares of ``residual`` from ``start``, above ``lower``.

    Parameters
    ----------
    residual, jacobian : callable
        Whitened residuals (n,) and their derivatives (n, p) at parameters (p,). Parameters should
        be of order one.
    lower : ndarray, shape (p,), optional
        Lower bounds; −inf for none.

    Examples
    --------
    >>> x = np.arange(4.0)
    >>> found = fit(
    ...     lambda p: np.exp(p[0] * x) - np.exp(0.3 * x),
    ...     lambda p: (x * np.exp(p[0] * x))[:, None],
    ...     np.array([0.1]),
    ... )
    >>> round(float(found.values[0]), 9)
    0.3
    """
    import lmfit  # noqa: PLC0415 - a second of import, for cases that need it

    bounds = np.full(len(start), -np.inf) if lower is None else lower
    if not (np.isfinite(start).all() and (start > bounds).all()):
        raise ValueError("the start must be finite and inside the bounds")
    parameters = lmfit.Parameters()
    for index, value in enumerate(start):
        parameters.add(f"p{index}", value=float(value), min=float(bounds[index]))

    def values(current: lmfit.Parameters) -> Array:
        return np.array([entry.value for entry in current.values()])

    found = lmfit.minimize(
        lambda current: residual(values(current)),
        parameters,
        method="least_squares",
        scale_covar=False,
        calc_covar=False,
        jac=lambda current: jacobian(values(current)),
        xtol=_TOLERANCE,
        ftol=_TOLERANCE,
        gtol=_TOLERANCE,
        max_nfev=_MAX_EVALUATIONS,
    )
    best = values(found.params)
    slope = jacobian(best)
    misfit = residual(best)
    scale = np.linalg.norm(slope, axis=0)
    scale = np.where(scale > 0.0, scale, 1.0)
    inverse = np.linalg.pinv(slope / scale)
    return NonlinearFit(
        frozen_array(best),
        frozen_array(slope),
        frozen_array((inverse @ inverse.T) / np.outer(scale, scale)),
        float(misfit @ misfit),
        tuple(bool(b > -np.inf and v - b <= 1e-9) for v, b in zip(best, bounds, strict=True)),
        bool(found.success),
    )
