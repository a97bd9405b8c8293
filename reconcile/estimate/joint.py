"""The joint estimate: both families, averaged, with every interval and the budget behind Đ.

Shape by a grid in t = ln(Đ − 1), all else by the engine. Families weigh equally; the averaged
likelihood makes the headline, the single-family intervals stand beneath it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import CubicSpline

from reconcile.distribution import FAMILIES
from reconcile.estimate.engine import predict, solve
from reconcile.estimate.intervals import (
    LEVELS,
    Statement,
    cut,
    effective_dof,
    likelihood_interval,
    reading_of,
)
from reconcile.estimate.linearised import Linearised, linearise
from reconcile.evidence import frozen_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.distribution import Family
    from reconcile.estimate.engine import NodeSolution
    from reconcile.estimate.system import System

    Array = NDArray[np.float64]

__all__ = ["T_MAX", "T_MIN", "FamilyFit", "JointEstimate", "Target", "estimate"]

T_MIN, T_MAX = float(np.log(1e-4)), float(np.log(100.0))
"""Range of the grid: Đ from 1.0001 (uniform, for every purpose here) to 101."""

_COARSE, _REFINED, _FINE = 61, 101, 801
_PROFILE_T, _PROFILE_X = 201, 401
_DEPTH = 22.0
"""ln-likelihood below its maximum at which the refined grid ends."""

_LARGEST = float(np.log(1e15))
"""ln of a molar mass in g/mol beyond which an end is no end."""

_SETTLED = 0.01
"""Change of ln(average) per unit of t at the end of the grid below which it counts as settled."""

PRIOR_MAX_DISPERSITY = 30.0
"""Upper end of the prior flat in ln Đ, for family weights and predictions only."""


@dataclass(frozen=True, slots=True)
class Target:
    """An average to report: its order statistics as ln ψ = Σ c_j (p_j μ + λ(p_j)).

    ``exponent`` is the index of the exponent error that shifts the order (Mv of a viscometer with
    an uncertain exponent), −1 for none.
    """

    name: str
    kind: str
    order: float = 1.0
    exponent: int = -1
    measurement: str = ""

    def ln_value(self, family: Family, t: Array, z: Array, n_effects: int) -> tuple[Array, Array]:
        """Return ln ψ (T,) and its gradient in the unknowns (T, m)."""
        gradient = np.zeros_like(z)
        gradient[:, 0] = 1.0
        mu = z[:, 0]
        if self.kind == "Mn":
            return mu - np.log1p(np.exp(t)), gradient
        if self.kind == "Mw":
            return mu, gradient
        if self.kind == "Mz":
            return mu + family.log_moment(2.0, t).value, gradient
        order = np.full_like(t, self.order)
        if self.exponent >= 0:
            order = order + z[:, 1 + n_effects + self.exponent]
        moment = family.log_moment(order, t)
        if self.exponent >= 0:
            slope = (moment.slope - moment.value / order) / order
            gradient[:, 1 + n_effects + self.exponent] = slope
        return mu + moment.value / order, gradient


@dataclass(frozen=True, slots=True, eq=False)
class FamilyFit:
    """One family: its statements, its weight given the readings, its mode and its χ²."""

    family: str
    weight: float
    dispersity: Statement
    averages: dict[str, Statement]
    t_mode: float
    z_mode: Array
    chi2: float
    linearised: Linearised


@dataclass(frozen=True, slots=True, eq=False)
class JointEstimate:
    """Everything the joint estimate knows.

    ``fine_t`` and ``deviance`` hold −2 ln L̄(Đ)/L̄max on the common grid;
    ``ln_likelihood_ratio_uniform`` is ln L̄(Đ → 1)/L̄max.
    """

    system: System
    families: dict[str, FamilyFit]
    solutions: dict[str, NodeSolution]
    dispersity: Statement
    averages: dict[str, Statement]
    fine_t: Array
    deviance: Array
    ln_likelihood_ratio_uniform: float

    @property
    def best(self) -> FamilyFit:
        """The family with the smaller χ²."""
        return min(self.families.values(), key=lambda fit: fit.chi2)


@dataclass(frozen=True, slots=True, eq=False)
class _Grid:
    """Splined likelihoods of one family on the common fine grid."""

    family: Family
    nodes: NodeSolution
    ln_likelihood: Array
    t_peak: float
    chi2: float


def estimate(
    system: System, targets: tuple[Target, ...], *, expected: bool = True
) -> JointEstimate:
    """Return the joint estimate of the dispersity and of every target.

    Parameters
    ----------
    system : System
    targets : tuple of Target
    expected : bool
        Also work out, where the dispersity comes out as a limit, the limit that consistent readings
        with the same uncertainties would have given.

    Raises
    ------
    EstimateError
        If the readings carry no positive average.
    """
    coarse = np.linspace(T_MIN, T_MAX, _COARSE)
    scans = {name: solve(system, family, coarse) for name, family in FAMILIES.items()}
    nodes = _refined_nodes(coarse, scans)
    fine = np.linspace(nodes[0], nodes[-1], _FINE)
    grids = {}
    for name, family in FAMILIES.items():
        solution = solve(system, family, nodes)
        spline = CubicSpline(nodes, solution.ln_likelihood)
        chi2 = -_highest(CubicSpline(nodes, -solution.q))[1]
        grids[name] = _Grid(family, solution, spline(fine), _highest(spline)[0], max(chi2, 0.0))
    return _assemble(system, targets, fine, grids, expected=expected)


def _highest(spline: CubicSpline) -> tuple[float, float]:
    """Return where a spline is highest within its nodes, and how high."""
    inside = spline.derivative().roots(extrapolate=False)
    places = np.concatenate([spline.x[[0, -1]], inside[np.isfinite(inside)]])
    heights = spline(places)
    best = int(np.argmax(heights))
    return float(places[best]), float(heights[best])


def _refined_nodes(coarse: Array, scans: dict[str, NodeSolution]) -> Array:
    keep = np.zeros(len(coarse), bool)
    for scan in scans.values():
        keep |= scan.ln_likelihood > scan.ln_likelihood.max() - _DEPTH
    index = np.flatnonzero(keep)
    low, high = max(index[0] - 1, 0), min(index[-1] + 1, len(coarse) - 1)
    return np.linspace(coarse[low], coarse[high], _REFINED)


def _assemble(
    system: System,
    targets: tuple[Target, ...],
    fine: Array,
    grids: dict[str, _Grid],
    *,
    expected: bool,
) -> JointEstimate:
    weights = _family_weights(fine, grids)
    families = {}
    for name, grid in grids.items():
        mode = _mode(system, grid)
        rates = _dof_of(mode, targets)
        families[name] = FamilyFit(
            name,
            weights[name],
            _dispersity_statement(fine, grid.ln_likelihood, rates["dispersity"]),
            {t.name: _profile(t, [grid], fine, rates[t.name], system) for t in targets},
            mode.t,
            mode.z,
            grid.chi2,
            mode,
        )
    # the headline uses the smaller ν of the two families: the wider cut
    dof = {
        key: min(_dof_of(fit.linearised, targets)[key] for fit in families.values())
        for key in ("dispersity", *(t.name for t in targets))
    }
    averaged = np.logaddexp(*(grid.ln_likelihood for grid in grids.values())) - np.log(2.0)
    headline = _dispersity_statement(fine, averaged, dof["dispersity"])
    result = JointEstimate(
        system,
        families,
        {name: grid.nodes for name, grid in grids.items()},
        headline,
        {
            t.name: _between(
                _profile(t, list(grids.values()), fine, dof[t.name], system), t.name, families
            )
            for t in targets
        },
        fine,
        frozen_array(2.0 * (averaged.max() - averaged)),
        float(averaged[0] - averaged.max()),
    )
    if expected and headline.reading in {"upper limit", "lower limit"}:
        return _with_expected_limit(result)
    return result


def _family_weights(fine: Array, grids: dict[str, _Grid]) -> dict[str, float]:
    top = max(float(grid.ln_likelihood.max()) for grid in grids.values())
    measure = np.where(fine <= np.log(PRIOR_MAX_DISPERSITY - 1.0), 1.0 / (1.0 + np.exp(-fine)), 0.0)
    mass = {
        name: float(np.trapezoid(np.exp(grid.ln_likelihood - top) * measure, fine))
        for name, grid in grids.items()
    }
    total = sum(mass.values())
    return {name: value / total if total > 0.0 else 0.5 for name, value in mass.items()}


def _mode(system: System, grid: _Grid) -> Linearised:
    t = np.array([grid.t_peak])
    solution = solve(system, grid.family, t)
    return linearise(system, grid.family, float(t[0]), solution.z[0])


def _dof_of(mode: Linearised, targets: tuple[Target, ...]) -> dict[str, float]:
    gradient = np.zeros(mode.covariance.shape[0])
    gradient[0] = 1.0
    gradients = {"dispersity": gradient}
    for target in targets:
        gradients[target.name] = _target_gradient(target, mode)
    result = {}
    for name, direction in gradients.items():
        parts = mode.variance_parts(direction)
        result[name] = effective_dof(
            np.array([part.variance for part in parts]), np.array([part.dof for part in parts])
        )
    return result


def _target_gradient(target: Target, mode: Linearised) -> Array:
    """Return ∂ ln ψ/∂(ln Đ, z) at the mode, the shape's part by central difference."""
    family, n_effects = FAMILIES[mode.family], len(mode.system.effects)
    t = np.array([mode.t])
    _, inner = target.ln_value(family, t, mode.z[None], n_effects)
    step = 1e-4
    sides = np.array([mode.t - step, mode.t + step])
    ln_value, _ = target.ln_value(family, sides, np.repeat(mode.z[None], 2, axis=0), n_effects)
    ln_d = np.log1p(np.exp(sides))
    return np.concatenate([[(ln_value[1] - ln_value[0]) / (ln_d[1] - ln_d[0])], inner[0]])


def _dispersity_statement(fine: Array, ln_likelihood: Array, dof: float) -> Statement:
    deviance = 2.0 * (ln_likelihood.max() - ln_likelihood)
    ends = {}
    for key, level in LEVELS.items():
        low, high = likelihood_interval(fine, deviance, cut(level, dof))
        ends[key] = (_to_dispersity(low), _to_dispersity(high))
    peak, _ = _highest(CubicSpline(fine, ln_likelihood))
    # the grid starts at Đ = 1.0001, which stands for a uniform polymer, and ends where nothing is
    # known any more
    value = None if peak >= T_MAX else 1.0 + float(np.exp(peak)) * (peak > T_MIN)
    reading = reading_of(*ends["interval95"])
    return Statement(
        None if reading == "undetermined" else value,
        ends["interval68"],
        ends["interval95"],
        reading,
        dof,
    )


def _to_dispersity(t: float | None) -> float | None:
    return None if t is None else 1.0 + float(np.exp(t))


def _profile(
    target: Target, grids: list[_Grid], fine: Array, dof: float, system: System
) -> Statement:
    """Return the statement on an average: profile over the shape of the averaged likelihood.

    Notes
    -----
    At each shape ln ψ is normal about its mode with the engine's covariance; the densities of the
    families are averaged before the profile is taken.
    """
    t = np.linspace(fine[0], fine[-1], _PROFILE_T)
    parts = [_conditional(target, grid, t, system) for grid in grids]
    top = max(float(part[2].max()) for part in parts)
    alive = [part[2] > top - _DEPTH for part in parts]
    low = min(
        float((p[0] - 6.0 * p[1])[a].min()) for p, a in zip(parts, alive, strict=True) if a.any()
    )
    high = max(
        float((p[0] + 6.0 * p[1])[a].max()) for p, a in zip(parts, alive, strict=True) if a.any()
    )
    x = np.linspace(low, high, _PROFILE_X)
    joint = np.full((len(x), len(t)), -np.inf)
    for centre, sd, ln_l in parts:
        ln_density = ln_l - np.log(sd) - 0.5 * ((x[:, None] - centre) / sd) ** 2
        joint = np.logaddexp(joint, ln_density)
    profile = joint.max(axis=1)
    where = joint.argmax(axis=1)
    deviance = 2.0 * (profile.max() - profile)
    # where the grid ends, an average may still be on its way: down, up, or settled
    drift = max((p[0][-1] - p[0][-2] for p in parts), key=abs) / (t[-1] - t[-2])
    falls = fine[-1] >= T_MAX - 1e-9 and drift < -_SETTLED
    rises = fine[-1] >= T_MAX - 1e-9 and drift > _SETTLED
    ends = {}
    for key, level in LEVELS.items():
        q = cut(level, dof)
        inside = np.flatnonzero(deviance <= q)
        lower, upper = likelihood_interval(x, deviance, q)
        # an end that rests on the last shape of the grid has no limit in the data
        if falls and where[inside[0]] == len(t) - 1:
            lower = None
        if rises and where[inside[-1]] == len(t) - 1:
            upper = None
        ends[key] = (_exp(lower), _exp(upper))
    return Statement(
        _exp(float(x[int(np.argmax(profile))])),
        ends["interval68"],
        ends["interval95"],
        reading_of(*ends["interval95"]),
        dof,
    )


def _between(statement: Statement, name: str, families: dict[str, FamilyFit]) -> Statement:
    """Return the statement with its point between those of the families, by their weights.

    The highest point of the averaged profile jumps from one family to the other where they differ.
    """
    points = [(fit.weight, fit.averages[name].value) for fit in families.values()]
    if statement.value is None or any(value is None for _, value in points):
        return statement
    mean = sum(weight * math.log(value) for weight, value in points if value is not None)
    return replace(statement, value=math.exp(mean))


def _exp(x: float | None) -> float | None:
    """Return exp(x); None for no end, and for one beyond any molar mass."""
    return None if x is None or x > _LARGEST else float(np.exp(x))


def _conditional(
    target: Target, grid: _Grid, t: Array, system: System
) -> tuple[Array, Array, Array]:
    """Return mode and sd of ln ψ and ln L at the shapes ``t``, splined from the nodes."""
    nodes = grid.nodes
    centre, gradient = target.ln_value(grid.family, nodes.t, nodes.z, len(system.effects))
    covariance = np.linalg.inv(nodes.hessian)
    sd = np.sqrt(np.einsum("tk,tkl,tl->t", gradient, covariance, gradient))
    spline = CubicSpline(nodes.t, np.column_stack([centre, np.log(sd), nodes.ln_likelihood]))(t)
    return spline[:, 0], np.exp(spline[:, 1]), spline[:, 2]


def _with_expected_limit(result: JointEstimate) -> JointEstimate:
    """Add the limit that readings in exact agreement with the estimate would have given."""
    fit = result.best
    t, z = np.array([fit.t_mode]), fit.z_mode[None].copy()
    z[:, 1:] = 0.0
    agreed = predict(result.system, FAMILIES[fit.family], t, z).value[0]
    again = estimate(result.system.with_values(agreed), (), expected=False)
    end = 1 if result.dispersity.reading == "upper limit" else 0
    limit = again.dispersity.interval95[end]
    return replace(result, dispersity=replace(result.dispersity, expected_limit95=limit))
