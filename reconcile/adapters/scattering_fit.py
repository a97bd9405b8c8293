"""The joint regression behind light scattering: one surface over concentration and angle.

Readings are g = R/K in g/mL · g/mol, the model g = c/m with

    m(c, q) = b₀ + b₁ q² + 2 A₂ c + 3 g A₂² c²/b₀,     b₀ = 1/Mw, b₁ = Rg²/(3 Mw)

(Zimm 1948 to first order in q²; third virial term by g = A₃/(A₂² Mw)). Their errors are relative:
one per reading, one shared by all angles of a flask, one shared by all flasks of an angle. The two
shared ones have unknown size; the fit is averaged over both.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtri

from reconcile.adapters.common import Scatter
from reconcile.linalg import LinearFit, least_squares, symmetric

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Array = NDArray[np.float64]

__all__ = ["Cells", "SurfaceFit", "double_extrapolation", "fit_surface", "plane", "surface"]

VIRIAL_RATIO_PRIOR = (0.25, 0.2)
"""Mean and sd of g = A₃/(A₂² M): good-solvent theory and experiment span 0 to 0.5."""

SHARED_ERROR_PRIOR = 0.02
"""Scale of the half-normal priors on the two shared relative errors."""

_LEAST_ERROR = 1e-6
"""Least relative error of one reading that the arithmetic is asked to tell apart."""

_SHARED_NODES = 6
_PASSES = 3
_STEPS = 5


@dataclass(frozen=True, slots=True, eq=False)
class Cells:
    """One mean reading per (flask, angle).

    Parameters
    ----------
    c, q2, g : ndarray, shape (n,)
        Concentration in g/mL, q² in 1/cm², R/K in g/mL · g/mol.
    flask, angle : ndarray of int, shape (n,)
        Which flask and which angle a cell belongs to.
    spread : ndarray, shape (n,)
        Error of the cell over that of one plain reading: 1/√replicates, and more where a solvent
        was subtracted.
    blank : ndarray, shape (n,)
        Error of the shared solvent blank over the same, per cell.
    within, within_dof : float, int
        Relative scatter of replicates: Σ (deviation/reading)² and its degrees of freedom.
    """

    c: Array
    q2: Array
    g: Array
    flask: NDArray[np.intp]
    angle: NDArray[np.intp]
    spread: Array
    blank: Array
    within: float
    within_dof: int


@dataclass(frozen=True, slots=True, eq=False)
class SurfaceFit:
    """The averaged fit.

    ``parameters`` are (b₀, b₁, A₂, g) in mol/g, mol cm²/g, mol mL/g² and 1. ``covariance`` (4, 4)
    and ``dof`` (4,) are those of the scaled t law with their posterior's variance and kurtosis,
    ν lowered further for the scatter's own degrees of freedom. ``shared`` holds the mean relative
    errors (flask, angle), ``fitted`` (n,) the readings expected.
    """

    parameters: Array
    covariance: Array
    dof: Array
    scatter: Scatter
    shared: tuple[float, float]
    fitted: Array


def surface(parameters: Array, c: Array, q2: Array) -> Array:
    """Return m = Kc/R in mol/g at (c, q²); ``parameters`` may have leading axes."""
    b0, b1, a2, g = (parameters[..., k, None] for k in range(4))
    return np.asarray(b0 + b1 * q2 + 2.0 * a2 * c + 3.0 * g * a2**2 * c**2 / b0)


def _slopes(parameters: Array, c: Array, q2: Array) -> tuple[Array, Array]:
    """Return ∂m/∂(b₀, b₁, A₂, g), shape (…, n, 4), and ∂ ln m/∂ ln c, shape (…, n)."""
    b0, _, a2, g = (parameters[..., k, None] for k in range(4))
    cubic = 3.0 * a2 * c**2 / b0
    columns = [
        1.0 - g * a2 * cubic / b0,
        np.broadcast_to(q2, np.broadcast_shapes(b0.shape, q2.shape)),
        2.0 * c + 2.0 * g * cubic,
        a2 * cubic,
    ]
    shape = np.broadcast_shapes(*[np.shape(column) for column in columns])
    jacobian = np.stack([np.broadcast_to(column, shape) for column in columns], axis=-1)
    m = surface(parameters, c, q2)
    return jacobian, (2.0 * a2 * c + 2.0 * g * a2 * cubic) / m


def plane(cells: Cells, form: str) -> LinearFit:
    """Return the equal-weight plane of Kc/R (``zimm``, ``zimm-c2``) or of its root (``berry``).

    Coefficients: intercept, slope in c, slope in q², and in c² for ``zimm-c2``.
    """
    y = cells.c / cells.g
    columns = [np.ones_like(y), cells.c, cells.q2]
    if form == "zimm-c2":
        columns.append(cells.c**2)
    return least_squares(np.column_stack(columns), np.sqrt(y) if form == "berry" else y)


def double_extrapolation(cells: Cells) -> tuple[float, float, float] | None:
    """Return (1/Mw, A₂, Rg²) by the classical two sets of straight lines; None off a full grid.

    Notes
    -----
    Equal weights throughout: each angle's line to c = 0, each flask's line to q = 0, then a line
    through either set. On a full grid the two intercepts are the same number.
    """
    n_flasks, n_angles = cells.flask.max() + 1, cells.angle.max() + 1
    if len(cells.c) != n_flasks * n_angles or n_flasks < 2 or n_angles < 2:
        return None
    grid = np.empty((n_flasks, n_angles))
    grid[cells.flask, cells.angle] = cells.c / cells.g
    c = np.empty(n_flasks)
    q2 = np.empty(n_angles)
    c[cells.flask], q2[cells.angle] = cells.c, cells.q2

    def line(x: Array, y: Array) -> Array:
        return least_squares(np.column_stack([np.ones_like(x), x]), y).coefficients

    at_zero_c = np.array([line(c, grid[:, j])[0] for j in range(n_angles)])
    at_zero_q = np.array([line(q2, grid[i])[0] for i in range(n_flasks)])
    intercept, slope = line(q2, at_zero_c)
    _, slope_c = line(c, at_zero_q)
    return float(intercept), float(slope_c / 2.0), float(3.0 * slope / intercept)


def fit_surface(cells: Cells, u_reading: float | None, u_flask: float) -> SurfaceFit | None:
    """Fit the surface to all cells at once, averaged over the sizes of the shared errors.

    None where the readings have no positive intercept.

    Parameters
    ----------
    cells : Cells
    u_reading : float or None
        Stated relative standard uncertainty of one reading; None to learn it from the scatter.
    u_flask : float
        Stated relative standard uncertainty of each flask's concentration.

    Notes
    -----
    The scale of the single readings comes from residuals with every flask's and every angle's mean
    removed, which the shared errors cannot touch; a stated error is its prior with ν₀ = 3.
    Shared errors: half-normal priors on a 6 × 6 grid of equal probability, of scale 2 %, or as
    large as a stated flask error, which is then known to be there besides. A flask's concentration
    error acts through the model, as ∂ ln g/∂ ln c = 1 − ∂ ln m/∂ ln c.
    """
    start = plane(cells, "zimm").coefficients
    parameters = np.array([start[0], start[2], start[1] / 2.0, VIRIAL_RATIO_PRIOR[0]])
    if parameters[0] <= 0.0:
        # a noisy line through zero: start from the lowest reading instead
        parameters[0] = float(np.min(cells.c / cells.g))
    nodes = ndtri(0.5 + 0.5 * (np.arange(_SHARED_NODES) + 0.5) / _SHARED_NODES)
    per_flask = u_flask if u_flask > 0.0 else SHARED_ERROR_PRIOR
    tau = np.stack(
        np.meshgrid(per_flask * nodes, SHARED_ERROR_PRIOR * nodes, indexing="ij"), axis=-1
    ).reshape(-1, 2)
    unit = 1.0 if u_reading is None else u_reading
    mean = parameters
    for _ in range(_PASSES):
        # the weights follow the fitted readings, the fit follows the weights
        scatter = _reading_scatter(cells, mean, u_reading)
        # readings on the surface to the last digit still leave the shared errors open
        sigma = max(unit * float(np.sqrt(scatter.scale2)), _LEAST_ERROR)
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            try:
                mean, covariance, dof, weight = _averaged(cells, mean, tau, sigma, u_flask)
            except np.linalg.LinAlgError:
                return None
        if not (np.isfinite(mean).all() and np.isfinite(covariance).all() and mean[0] > 0.0):
            return None
    shared = weight @ tau
    shrink = np.sqrt((dof - 2.0) / dof)
    return SurfaceFit(
        mean,
        covariance * np.outer(shrink, shrink),
        1.0 / (1.0 / dof + 1.0 / scatter.dof),
        scatter,
        (float(shared[0]), float(shared[1])),
        cells.c / surface(mean, cells.c, cells.q2),
    )


def _reading_scatter(cells: Cells, parameters: Array, u_reading: float | None) -> Scatter:
    expected = cells.c / surface(parameters, cells.c, cells.q2)
    residual = cells.g / expected - 1.0
    columns = [
        np.eye(cells.flask.max() + 1)[cells.flask],
        np.eye(cells.angle.max() + 1)[cells.angle],
    ]
    design = np.concatenate(columns, axis=1) / cells.spread[:, None]
    target = residual / cells.spread
    solution, _, rank, _ = np.linalg.lstsq(design, target, rcond=None)
    chi2 = float(np.sum((target - design @ solution) ** 2)) + cells.within
    dof = len(target) - int(rank) + cells.within_dof
    unit = 1.0 if u_reading is None else u_reading
    return Scatter.of(chi2 / unit**2, dof, stated=u_reading is not None)


def _averaged(
    cells: Cells, parameters: Array, tau: Array, sigma: float, u_flask: float
) -> tuple[Array, Array, Array, Array]:
    expected = cells.c / surface(parameters, cells.c, cells.q2)
    _, order = _slopes(parameters, cells.c, cells.q2)
    same_flask = (cells.flask[:, None] == cells.flask).astype(float)
    same_angle = (cells.angle[:, None] == cells.angle).astype(float)
    lever = 1.0 - order
    known = (
        np.diag((sigma * cells.spread) ** 2)
        + sigma**2 * same_angle * np.outer(cells.blank, cells.blank)
        + u_flask**2 * same_flask * np.outer(lever, lever)
    )
    covariance = (
        known + tau[:, 0, None, None] ** 2 * same_flask + tau[:, 1, None, None] ** 2 * same_angle
    )
    weight_matrix = np.linalg.inv(covariance)
    _, ln_det = np.linalg.slogdet(covariance)
    at, hessian, q = _gauss_newton(cells, parameters, expected, weight_matrix)
    _, ln_det_h = np.linalg.slogdet(hessian)
    ln_weight = -0.5 * (q + ln_det + ln_det_h)
    weight = np.exp(ln_weight - ln_weight.max())
    weight /= weight.sum()
    scale = _scales(parameters)
    part = np.linalg.inv(hessian) * np.outer(scale, scale)
    mean = weight @ at
    shift = at - mean
    total = np.einsum("k,kij->ij", weight, part + shift[:, :, None] * shift[:, None, :])
    variance = np.einsum("kii->ki", part)
    fourth = weight @ (3.0 * variance**2 + 6.0 * variance * shift**2 + shift**4)
    excess = np.maximum(fourth / np.diag(total) ** 2 - 3.0, 1e-6)
    # a scaled t law of ν degrees of freedom has excess kurtosis 6/(ν − 4)
    return mean, symmetric(total), 4.0 + 6.0 / excess, weight


def _scales(parameters: Array) -> Array:
    b0 = abs(parameters[0])
    return np.array([b0, max(abs(parameters[1]), 1e-30), max(abs(parameters[2]), 1e-30), 1.0])


def _gauss_newton(
    cells: Cells, parameters: Array, expected: Array, weight: Array
) -> tuple[Array, Array, Array]:
    """Return modes (k, 4), scaled half-Hessians (k, 4, 4) and Q (k,) for each weight matrix."""
    scale = _scales(parameters)
    prior = np.zeros(4)
    prior[3] = VIRIAL_RATIO_PRIOR[1] ** -2
    centre = np.array([0.0, 0.0, 0.0, VIRIAL_RATIO_PRIOR[0]])
    at = np.repeat(parameters[None], len(weight), axis=0)
    for step in range(_STEPS + 1):
        m = surface(at, cells.c, cells.q2)
        residual = cells.g / expected - (cells.c / m) / expected
        jacobian, _ = _slopes(at, cells.c, cells.q2)
        slope = -(cells.c / m**2 / expected)[..., None] * jacobian * scale
        weighted = np.einsum("kij,kjp->kip", weight, slope)
        hessian = np.einsum("kip,kiq->kpq", slope, weighted) + np.diag(prior * scale**2)
        off = at - centre
        if step == _STEPS:
            break
        gradient = np.einsum("kip,ki->kp", weighted, residual) - prior * off * scale
        at = at + scale * np.linalg.solve(hessian, gradient[:, :, None])[:, :, 0]
    q = np.einsum("ki,kij,kj->k", residual, weight, residual) + (prior * off**2).sum(1)
    return at, hessian, q
