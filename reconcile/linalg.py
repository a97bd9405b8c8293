"""Small linear algebra shared by the reductions and the estimate: whitened least squares."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

__all__ = ["LinearFit", "least_squares", "symmetric"]


@dataclass(frozen=True, slots=True, eq=False)
class LinearFit:
    """Coefficients (p,), covariance (p, p) at the weights given, χ², and n − p."""

    coefficients: Array
    covariance: Array
    chi2: float
    dof: int

    def scatter_covariance(self) -> Array:
        """Return the covariance scaled by χ²/(n − p); NaN where n = p leaves no scatter."""
        return self.covariance * (self.chi2 / self.dof if self.dof else np.nan)


def symmetric(matrix: Array) -> Array:
    """Return the symmetric part, against rounding."""
    return np.asarray(0.5 * (matrix + np.swapaxes(matrix, -1, -2)))


def least_squares(design: Array, response: Array, sd: Array | float = 1.0) -> LinearFit:
    """Return the weighted linear least-squares fit of ``response`` (n,) on ``design`` (n, p).

    Parameters
    ----------
    design, response, sd : ndarray
        ``sd`` holds the standard deviations of the response; 1 for equal weights. The columns are
        scaled before the solve, so coefficients of any magnitude are safe.

    Examples
    --------
    >>> x = np.array([0.0, 1.0, 2.0])
    >>> fit = least_squares(np.column_stack([np.ones(3), x]), 1.0 + 2.0 * x)
    >>> fit.coefficients.round(12).tolist(), fit.dof
    ([1.0, 2.0], 1)
    """
    weighted = design / np.broadcast_to(np.asarray(sd, float), response.shape)[:, None]
    target = response / sd
    scale = np.linalg.norm(weighted, axis=0)
    scale = np.where(scale > 0.0, scale, 1.0)
    q, r = np.linalg.qr(weighted / scale)
    coefficients = np.linalg.solve(r, q.T @ target)
    inverse = np.linalg.inv(r)
    residual = target - (weighted / scale) @ coefficients
    covariance = symmetric(inverse @ inverse.T) / np.outer(scale, scale)
    return LinearFit(
        coefficients / scale, covariance, float(residual @ residual), len(target) - len(scale)
    )
