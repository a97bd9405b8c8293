"""The estimate linearised at its mode: sensitivities, shares of variance, residuals, global χ².

Everything here is the Gaussian picture at one point, used for effective degrees of freedom, the
uncertainty budget and the pulls; the intervals themselves come from the likelihood.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.distribution import FAMILIES
from reconcile.estimate.engine import predict
from reconcile.evidence import frozen_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.distribution import Family
    from reconcile.estimate.system import System

    Array = NDArray[np.float64]

__all__ = ["Linearised", "VariancePart", "linearise"]

_STEP = 1e-4


@dataclass(frozen=True, slots=True)
class VariancePart:
    """What one measurement or effect contributes to a variance, with its degrees of freedom."""

    source: str
    kind: str
    variance: float
    dof: float


@dataclass(frozen=True, slots=True, eq=False)
class Linearised:
    """The joint problem at a mode, unknowns x = (ln Đ, z).

    ``jacobian`` (n, 1 + m) holds ∂F/∂x, ``covariance`` (1 + m, 1 + m) that of x,
    ``row_covariance`` (n, n) that of the readings, ``residual`` (n,) y − F.
    """

    system: System
    family: str
    t: float
    z: Array
    jacobian: Array
    covariance: Array
    row_covariance: Array
    residual: Array
    predicted: Array

    def variance_parts(self, gradient: Array) -> tuple[VariancePart, ...]:
        """Return the parts of the variance gᵀ Cov(x) g by measurement, effect and exponent.

        The parts add up to the whole. Rows of one measurement are correlated and stand together.

        Notes
        -----
        The estimate is linear in the readings and in the priors' zeros; a part is its own
        covariance carried through that map.
        """
        weight = np.linalg.inv(self.row_covariance)
        sensitivity = gradient @ self.covariance @ self.jacobian.T @ weight
        rows = sensitivity * (self.row_covariance @ sensitivity)
        dof = np.array([row.dof for row in self.system.rows])
        names = np.array(self.system.measurements)
        parts = []
        for name in dict.fromkeys(self.system.measurements):
            mine, nu = np.abs(rows[names == name]), dof[names == name]
            spread = float(np.sum(mine / nu))
            pooled = float(np.sum(mine)) / spread if spread > 0.0 else float("inf")
            parts.append(
                VariancePart(name, "measurement", float(np.sum(rows[names == name])), pooled)
            )
        carried = (gradient @ self.covariance)[2:] * np.sqrt(self.system.prior_precision[1:])
        effects = (*self.system.effects, *self.system.exponents)
        for effect, value in zip(effects, carried, strict=True):
            parts.append(VariancePart(effect.id, "effect", float(value**2), float("inf")))
        return tuple(parts)

    def pulls(self) -> Array:
        """Return normalised residuals (n,): NaN where the fit leaves a row no freedom.

        Notes
        -----
        With effects marginalised into the covariance V and only (ln Đ, ln Mw) fitted, the residual
        has covariance V − J (JᵀV⁻¹J)⁻¹ Jᵀ.
        """
        total, shape = self._marginal()
        normal = np.linalg.pinv(shape.T @ np.linalg.solve(total, shape))
        left = total - shape @ normal @ shape.T
        residual = self.residual + self.jacobian[:, 2:] @ self.z[1:]
        variance = np.diag(left)
        free = variance > 1e-9 * np.diag(total)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(free, residual / np.sqrt(np.where(free, variance, 1.0)), np.nan)

    def residual_dof(self) -> float:
        """Return ν_eff of the residual contrasts, for the tail of the global χ².

        Notes
        -----
        The share of a row in the residual space is its diagonal part of the projector on what
        (ln Đ, ln Mw) cannot absorb, split between its readings and the effects.
        """
        total, shape = self._marginal()
        cholesky = np.linalg.cholesky(total)
        white = np.linalg.solve(cholesky, shape)
        q, _ = np.linalg.qr(white)
        projector = np.eye(len(total)) - q @ q.T
        space = np.linalg.solve(cholesky.T, projector)
        readings = np.einsum("ik,ij,jk->i", space, self.row_covariance, space)
        freedom = max(float(np.trace(projector)), 1e-12)
        shares = np.clip(readings / freedom, 0.0, 1.0)
        dof = np.array([row.dof for row in self.system.rows])
        denominator = float(np.sum(shares**2 / dof))
        return 1.0 / denominator if denominator > 1e-9 else float("inf")

    def _marginal(self) -> tuple[Array, Array]:
        precision = self.system.prior_precision[1:]
        effects = self.jacobian[:, 2:]
        total = self.row_covariance + (effects / precision) @ effects.T
        return np.asarray(total), self.jacobian[:, :2]


def linearise(system: System, family: Family, t: float, z: Array) -> Linearised:
    """Return the linearised problem at shape ``t`` and unknowns ``z`` (m,)."""
    sides = np.array([t - _STEP, t + _STEP])
    ln_d = np.log1p(np.exp(sides))
    at_sides = predict(system, family, sides, np.repeat(z[None], 2, axis=0)).value
    here = predict(system, family, np.array([t]), z[None])
    shape = (at_sides[1] - at_sides[0]) / (ln_d[1] - ln_d[0])
    jacobian = np.column_stack([shape, here.value[0][:, None] * here.gradient[0]])
    data = system.data(family, np.array([t]))
    whitened = data.whitener[0] @ jacobian
    precision = np.diag(np.concatenate([[0.0], system.prior_precision]))
    # a shape that the rows do not see leaves the matrix singular: its variance is then infinite,
    # and a pseudo-inverse with a vanishing ridge keeps the other entries right
    normal = whitened.T @ whitened + precision
    scale = np.sqrt(np.maximum(np.diag(normal), 1e-12))
    covariance = np.linalg.inv(
        normal / np.outer(scale, scale) + 1e-12 * np.eye(len(scale))
    ) / np.outer(scale, scale)
    factor = np.linalg.inv(data.whitener[0])
    return Linearised(
        system,
        family.name if family.name in FAMILIES else "",
        t,
        frozen_array(z),
        frozen_array(jacobian),
        frozen_array(covariance),
        frozen_array(factor @ factor.T),
        frozen_array(data.values[0] - here.value[0]),
        frozen_array(here.value[0]),
    )
