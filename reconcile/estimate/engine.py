"""The inner problem: for a given shape, maximise over everything else and integrate it out.

At each node of t = ln(Đ − 1) the unknowns are z = (ln Mw, effects e, exponent errors δ). Rows are

    y_i = F_i(z, t) exp(Σ_j D_ij e_j) + error,   errors Gaussian on the scale of y,

and e, δ have Gaussian priors. With Q(z) the sum of squares of whitened residuals and prior terms,
the engine finds the mode ẑ(t) by Newton's method and integrates by Laplace's:
ln L(t) = −Q̂/2 − ½ ln det(H/2π), where H is half the Hessian of Q.
All arrays have the nodes as their first axis.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.errors import EstimateError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.distribution import Family
    from reconcile.estimate.system import NodeData, System

    Array = NDArray[np.float64]

__all__ = ["NodeSolution", "Predicted", "objective", "predict", "solve"]

_GAUSS_NEWTON_STEPS = 2
_RESOLVED = 3.0
"""Least distance of some row from zero, in its own standard uncertainty over its order."""

_MAX_STEPS = 40
_CONVERGED = 1e-11
"""Newton decrement (in units of Q) below which a node is done."""


@dataclass(frozen=True, slots=True, eq=False)
class Predicted:
    """Rows at given unknowns: ``value`` F (T, n), ``gradient`` ∂ ln F/∂z (T, n, m).

    ``curvature`` holds the second derivatives of ln F that do not vanish: ∂²ln F/∂δ² (T, n).
    """

    value: Array
    gradient: Array
    curvature: Array


@dataclass(frozen=True, slots=True, eq=False)
class NodeSolution:
    """Modes ``z`` (T, m), ``q`` (T,), half-Hessians (T, m, m) and ``ln_likelihood`` (T,)."""

    t: Array
    z: Array
    q: Array
    hessian: Array
    ln_likelihood: Array


def predict(system: System, family: Family, t: Array, z: Array) -> Predicted:
    """Return the predicted rows at nodes ``t`` and unknowns ``z`` (T, m)."""
    n_effects = len(system.effects)
    effects = z[:, 1 : 1 + n_effects]
    ln_f = effects @ system.derivatives.T
    gradient = np.zeros((len(t), system.n_rows, system.n_inner))
    gradient[:, :, 1 : 1 + n_effects] = system.derivatives
    curvature = np.zeros((len(t), system.n_rows))
    for i, observable in enumerate(system.observables):
        k = system.exponent_of[i]
        delta = z[:, 1 + n_effects + k] if k >= 0 else 0.0
        row = observable.predict(family, t, z[:, 0], delta)
        ln_f[:, i] += row.value
        gradient[:, i, 0] = row.d_mu
        if k >= 0:
            gradient[:, i, 1 + n_effects + k] = row.d_delta
            curvature[:, i] = row.d2_delta
    # a trial step may run far off; its Q is then huge, not infinite
    return Predicted(np.exp(np.clip(ln_f, -150.0, 150.0)), gradient, curvature)


def objective(system: System, data: NodeData, z: Array, predicted: Predicted) -> Array:
    """Return Q (T,)."""
    residual = np.einsum("tij,tj->ti", data.whitener, data.values - predicted.value)
    return np.asarray((residual**2).sum(1) + (z * z) @ system.prior_precision)


def _derivatives(
    system: System, data: NodeData, z: Array, predicted: Predicted, *, exact: bool
) -> tuple[Array, Array]:
    """Return half the gradient of Q (T, m) and half its Hessian (T, m, m)."""
    precision = system.prior_precision
    residual = np.einsum("tij,tj->ti", data.whitener, data.values - predicted.value)
    slope = predicted.value[:, :, None] * predicted.gradient
    jacobian = np.einsum("tij,tjk->tik", data.whitener, slope)
    gradient = -np.einsum("tik,ti->tk", jacobian, residual) + precision * z
    hessian = np.einsum("tik,til->tkl", jacobian, jacobian) + np.diag(precision)
    if exact:
        pull = np.einsum("tij,ti->tj", data.whitener, residual) * predicted.value
        hessian = hessian - np.einsum(
            "ti,tik,til->tkl", pull, predicted.gradient, predicted.gradient
        )
        for i, k in enumerate(system.exponent_of):
            if k < 0:
                continue
            column = 1 + len(system.effects) + k
            coefficient = system.observables[i].terms[0][0]
            hessian[:, column, column] -= pull[:, i] * predicted.curvature[:, i]
            hessian[:, 0, column] -= pull[:, i] * coefficient
            hessian[:, column, 0] -= pull[:, i] * coefficient
    return gradient, hessian


def _start(system: System, family: Family, t: Array, data: NodeData) -> Array:
    """Return unknowns to start from: ln Mw by the rows' own weights, effects at zero."""
    z = np.zeros((len(t), system.n_inner))
    at_zero = predict(system, family, t, z)
    values = np.broadcast_to(data.values, at_zero.value.shape)
    order = at_zero.gradient[:, :, 0]
    cholesky = np.linalg.inv(data.whitener)
    spread = np.sqrt(np.einsum("tik,tik->ti", cholesky, cholesky))
    usable = (values > 0.0) & (np.abs(order) > 1e-9)
    if not (np.abs(order) > 1e-9).any():
        raise EstimateError(
            "no measurement fixes the scale of molar mass\n"
            "  a dispersity alone does not: give Mn, Mw, or [η] with Mark-Houwink constants"
        )
    if not usable.any(axis=1).all():
        raise EstimateError(
            "no measurement yields a positive average\n"
            "  every extrapolated value is zero or negative: see the reductions"
        )
    resolved = np.where(usable, np.abs(values / order) / spread, 0.0).max()
    if resolved < _RESOLVED:
        raise EstimateError(
            "no measurement resolves the scale of molar mass from infinity or zero\n"
            f"  the best lies {resolved:.1f} standard uncertainties off, expected {_RESOLVED:g}:"
            " see the limits in `reconcile reduce`"
        )
    safe = np.where(usable, order, 1.0)
    ln_ratio = np.log(np.where(usable, values, 1.0)) - np.log(at_zero.value)
    weight = np.where(usable, (safe * values / spread) ** 2, 0.0)
    z[:, 0] = (weight * ln_ratio / safe).sum(1) / weight.sum(1)
    return z


def solve(system: System, family: Family, t: Array) -> NodeSolution:
    """Return the modes and integrated likelihoods at the nodes ``t``; see `_solve`.

    Raises
    ------
    EstimateError
        If there is nothing to start from, or the equations are singular.
    """
    try:
        return _solve(system, family, t)
    except np.linalg.LinAlgError as error:
        raise EstimateError(
            "the measurements leave the joint equations singular\n"
            "  an extrapolated value is not resolved from zero: see the reductions"
        ) from error


def _solve(system: System, family: Family, t: Array) -> NodeSolution:
    """Return the modes and integrated likelihoods at the nodes ``t``.

    Raises
    ------
    EstimateError
        If no row has a positive value to start from.

    Notes
    -----
    Gauss-Newton first, then Newton with the exact Hessian; where that is not positive definite (far
    from the mass of the likelihood) the Gauss-Newton one stands in, for the step and for the
    determinant. Steps that raise Q are halved, node by node.
    """
    data = system.data(family, t)
    z = _start(system, family, t, data)
    predicted = predict(system, family, t, z)
    q = objective(system, data, z, predicted)
    for step_number in range(_MAX_STEPS):
        exact = step_number >= _GAUSS_NEWTON_STEPS
        gradient, hessian = _positive(system, data, z, predicted, exact=exact)
        step = np.asarray(-np.linalg.solve(hessian, gradient[:, :, None])[:, :, 0], float)
        decrement = -np.einsum("tk,tk->t", gradient, step)
        if exact and (decrement < _CONVERGED * np.maximum(1.0, q)).all():
            break
        z, predicted, q = _accept(system, family, t, data, (z, predicted, q, step))
    _, hessian = _positive(system, data, z, predicted, exact=True)
    _, ln_det = np.linalg.slogdet(hessian / (2.0 * np.pi))
    # the priors' and the readings' normalisation, so that families and tables compare
    _, ln_whitener = np.linalg.slogdet(data.whitener)
    constant = ln_whitener + data.ln_weight
    return NodeSolution(t, z, q, hessian, -0.5 * q - 0.5 * ln_det + constant)


def _positive(
    system: System, data: NodeData, z: Array, predicted: Predicted, *, exact: bool
) -> tuple[Array, Array]:
    gradient, hessian = _derivatives(system, data, z, predicted, exact=exact)
    if exact:
        bad = np.linalg.eigvalsh(hessian)[:, 0] <= 0.0
        if bad.any():
            _, fallback = _derivatives(system, data, z, predicted, exact=False)
            hessian = np.where(bad[:, None, None], fallback, hessian)
    return gradient, hessian


def _accept(
    system: System,
    family: Family,
    t: Array,
    data: NodeData,
    state: tuple[Array, Predicted, Array, Array],
) -> tuple[Array, Predicted, Array]:
    z, _, q, step = state
    length = np.ones(len(t))
    for _ in range(12):
        trial = z + length[:, None] * step
        trial_predicted = predict(system, family, t, trial)
        trial_q = objective(system, data, trial, trial_predicted)
        worse = trial_q > q * (1.0 + 1e-12) + 1e-12
        if not worse.any():
            return trial, trial_predicted, trial_q
        length = np.where(worse, 0.5 * length, length)
    keep = worse[:, None]
    trial = np.where(keep, z, trial)
    trial_predicted = predict(system, family, t, trial)
    return trial, trial_predicted, objective(system, data, trial, trial_predicted)
