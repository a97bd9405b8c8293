"""Importance draws: the built-in check of the engine, and the source of predictive statements.

Shapes are drawn from the integrated likelihood on the engine's own nodes under a prior flat in
ln Đ up to 30, the other unknowns from the engine's normal law at that node. The exact density over
the drawn one is the weight; flat weights say that the normal law was right.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile.distribution import FAMILIES
from reconcile.estimate.engine import objective, predict
from reconcile.estimate.joint import PRIOR_MAX_DISPERSITY
from reconcile.evidence import frozen_array

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from reconcile.estimate.engine import NodeSolution
    from reconcile.estimate.joint import JointEstimate
    from reconcile.estimate.system import System

    Array = NDArray[np.float64]

__all__ = ["Draws", "draw", "pareto_shape"]

N_DRAWS = 4000


@dataclass(frozen=True, slots=True, eq=False)
class Draws:
    """Weighted draws (weights sum to 1) of Mn, Mw, Mz in g/mol and Đ.

    ``effective_fraction`` is 1/(N Σ w²), ``pareto_k`` the tail shape of the weights (None where
    they are all but equal); ``passed`` asks for more than 0.5 and less than 0.5.
    """

    weight: Array
    values: dict[str, Array]
    effective_fraction: float
    pareto_k: float | None
    passed: bool

    def probability(self, name: str, low: float | None, high: float | None) -> float:
        """Return the weight of the draws with low ≤ value ≤ high."""
        x = self.values[name]
        inside = np.ones(len(x), bool)
        if low is not None:
            inside &= x >= low
        if high is not None:
            inside &= x <= high
        return float(self.weight[inside].sum())


def pareto_shape(weights: Array) -> float | None:
    """Return the shape k̂ of a generalised Pareto law fitted to the largest weights.

    Notes
    -----
    Vehtari, Simpson, Gelman, Yao & Gabry, Pareto smoothed importance sampling (from memory).
    None where the excesses are within rounding of each other, so that there is no tail.
    """
    from scipy.stats import genpareto  # noqa: PLC0415 - half a second of import, used once

    size = min(len(weights) // 5, int(3.0 * np.sqrt(len(weights))))
    tail = np.sort(weights)[-size:]
    excess = tail[1:] - tail[0]
    if excess[-1] <= 1e-6 * tail[0]:
        return None
    shape, _, _ = genpareto.fit(excess / excess.mean(), floc=0.0)
    return float(shape)


def draw(result: JointEstimate, seed: int) -> Draws:
    """Return the draws for a joint estimate; the same seed gives the same draws."""
    rng = np.random.default_rng(seed)
    parts = []
    for name, fit in result.families.items():
        count = round(N_DRAWS * fit.weight)
        if count > 0:
            parts.append(_family_draws(result.system, name, result.solutions[name], count, rng))
    ln_weight = np.concatenate([part[0] for part in parts])
    weight = np.exp(ln_weight - ln_weight.max())
    weight = weight / weight.sum()
    values = {
        key: frozen_array(np.concatenate([part[1][key] for part in parts])) for key in parts[0][1]
    }
    fraction = float(1.0 / (len(weight) * np.sum(weight**2)))
    k = pareto_shape(weight)
    passed = fraction > 0.5 and (k is None or k < 0.5)
    return Draws(frozen_array(weight), values, fraction, k, passed)


def _family_draws(
    system: System, name: str, nodes: NodeSolution, count: int, rng: np.random.Generator
) -> tuple[Array, dict[str, Array]]:
    family = FAMILIES[name]
    step = np.gradient(nodes.t)
    measure = np.where(
        nodes.t <= np.log(PRIOR_MAX_DISPERSITY - 1.0), step / (1.0 + np.exp(-nodes.t)), 0.0
    )
    if not (measure > 0.0).any():
        # readings that put all the mass beyond the prior's end still get draws, of themselves
        measure = step
    ln_l = np.where(measure > 0.0, nodes.ln_likelihood, -np.inf)
    mass = np.exp(ln_l - ln_l.max()) * measure
    index = np.sort(rng.choice(len(mass), size=count, p=mass / mass.sum()))
    cholesky = np.linalg.cholesky(np.linalg.inv(nodes.hessian))[index]
    normal = rng.standard_normal((count, system.n_inner))
    z = nodes.z[index] + np.einsum("tij,tj->ti", cholesky, normal)
    t = nodes.t[index]
    data = system.data(family, t)
    q = objective(system, data, z, predict(system, family, t, z))
    ln_weight = -0.5 * (q - nodes.q[index]) + 0.5 * (normal**2).sum(1)
    mw = np.exp(np.clip(z[:, 0], -150.0, 150.0))
    dispersity = 1.0 + np.exp(t)
    mz = mw * np.exp(family.log_moment(2.0, t).value)
    return ln_weight, {"Mn": mw / dispersity, "Mw": mw, "Mz": mz, "dispersity": dispersity}
