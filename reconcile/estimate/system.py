"""The evidence of one case as one set of equations: rows, their covariance, effects, exponents."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import block_diag

from reconcile.errors import EstimateError
from reconcile.evidence import frozen_array

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import NDArray

    from reconcile.distribution import Family
    from reconcile.evidence import Evidence, Row, Tabulated
    from reconcile.measurement import Effect
    from reconcile.observables import Observable

    Array = NDArray[np.float64]

__all__ = ["NodeData", "System", "build_system"]


@dataclass(frozen=True, slots=True, eq=False)
class NodeData:
    """The data as the engine reads them at T nodes (T = 1 where they do not depend on the shape).

    ``values`` (T, n); ``whitener`` (T, n, n) the inverse Cholesky factor of the covariance;
    ``ln_weight`` (T,) what the shape-dependent reductions add to ln L.
    """

    values: Array
    whitener: Array
    ln_weight: Array


@dataclass(frozen=True, slots=True, eq=False)
class System:
    """Stacked rows of evidence that observe the distribution.

    Parameters
    ----------
    observables, rows, measurements : tuple
        One entry per row.
    derivatives : ndarray, shape (n, J)
        ∂ ln F/∂e of every effect.
    effect_u, exponent_u : ndarray
        Standard uncertainties; effects relative, exponents absolute.
    exponent_of : tuple of int
        Index of the exponent error that shifts each row's order; −1 for none.
    """

    observables: tuple[Observable, ...]
    rows: tuple[Row, ...]
    measurements: tuple[str, ...]
    blocks: tuple[tuple[Evidence, tuple[int, ...]], ...]
    effects: tuple[Effect, ...]
    derivatives: Array
    effect_u: Array
    exponents: tuple[Effect, ...]
    exponent_u: Array
    exponent_of: tuple[int, ...]
    override: Array | None = None

    @property
    def n_rows(self) -> int:
        """Number of rows n."""
        return len(self.rows)

    @property
    def n_unknown(self) -> int:
        """Number of unknowns without a prior: shape, ln Mw, scales of linked media."""
        return 2 + sum(effect.target == "virial_scale" for effect in self.effects)

    @property
    def n_inner(self) -> int:
        """Number of inner unknowns: ln Mw, the effects, the exponent errors."""
        return 1 + len(self.effects) + len(self.exponents)

    @property
    def prior_precision(self) -> Array:
        """Diagonal prior precision of the inner unknowns; 0 for ln Mw."""
        return np.concatenate([[0.0], self.effect_u**-2.0, self.exponent_u**-2.0])

    def with_values(self, values: Array) -> System:
        """Return the same system with other readings: what consistent data would have been."""
        return replace(self, override=frozen_array(values))

    def data(self, family: Family, t: Array) -> NodeData:
        """Return values and whitener at the nodes ``t`` for this family."""
        tabulated = any(family.name in evidence.tabulated for evidence, _ in self.blocks)
        nodes = t if tabulated else t[:1]
        parts = [_block_at(evidence, index, family.name, nodes) for evidence, index in self.blocks]
        values = np.concatenate([part[0] for part in parts], axis=1)
        if self.override is not None:
            values = np.broadcast_to(self.override, values.shape)
        ln_weight = np.sum([part[2] for part in parts], axis=0)
        if tabulated:
            covariance = np.stack(
                [block_diag(*[part[1][k] for part in parts]) for k in range(len(nodes))]
            )
        else:
            covariance = block_diag(*[part[1][0] for part in parts])[None]
        return NodeData(values, np.linalg.inv(np.linalg.cholesky(covariance)), ln_weight)


def _block_at(
    evidence: Evidence, index: tuple[int, ...], family: str, t: Array
) -> tuple[Array, Array, Array]:
    pick = np.array(index)
    table = evidence.tabulated.get(family)
    if table is None:
        values = np.broadcast_to(evidence.values[pick], (len(t), len(pick)))
        block = evidence.covariance[np.ix_(pick, pick)]
        return values, np.broadcast_to(block, (len(t), *block.shape)), np.zeros(len(t))
    return _interpolate(table, pick, t)


def _interpolate(table: Tabulated, pick: NDArray[np.intp], t: Array) -> tuple[Array, Array, Array]:
    # linear interpolation keeps every covariance positive definite
    at = np.clip(t, table.t[0], table.t[-1])
    high = np.clip(np.searchsorted(table.t, at), 1, len(table.t) - 1)
    share = (at - table.t[high - 1]) / (table.t[high] - table.t[high - 1])
    values = table.values[:, pick]
    covariance = table.covariance[:, pick][:, :, pick]

    def mix(array: Array) -> Array:
        weight = share.reshape(-1, *([1] * (array.ndim - 1)))
        return np.asarray((1.0 - weight) * array[high - 1] + weight * array[high])

    return mix(values), mix(covariance), mix(table.ln_weight)


def build_system(evidence: Sequence[Evidence], effects: Mapping[str, Effect]) -> System:
    """Stack all rows with an observable; the others are marginalised out by leaving them.

    Parameters
    ----------
    evidence : sequence of Evidence
    effects : mapping
        Every effect that a row may name, by id.

    Raises
    ------
    EstimateError
        If no row observes the distribution.
    """
    blocks: list[tuple[Evidence, tuple[int, ...]]] = []
    rows: list[Row] = []
    measurements: list[str] = []
    for block in evidence:
        linked = tuple(i for i, row in enumerate(block.rows) if row.observable is not None)
        if linked:
            blocks.append((block, linked))
            rows.extend(block.rows[i] for i in linked)
            measurements.extend([block.measurement] * len(linked))
    if not rows:
        raise EstimateError(
            "no measurement observes the molar-mass distribution\n"
            "  give Mn, Mw, or [η] with Mark-Houwink constants, measured or stated"
        )
    observables = tuple(row.observable for row in rows if row.observable is not None)
    acting = sorted({key for row in rows for key in row.derivatives if effects[key].u > 0.0})
    shifts = [
        o.exponent_effect if o.exponent_effect and effects[o.exponent_effect].u > 0.0 else None
        for o in observables
    ]
    exponent_ids = sorted({key for key in shifts if key is not None})
    derivatives = np.array([[row.derivatives.get(key, 0.0) for key in acting] for row in rows])
    return System(
        observables,
        tuple(rows),
        tuple(measurements),
        tuple(blocks),
        tuple(effects[key] for key in acting),
        frozen_array(derivatives.reshape(len(rows), len(acting))),
        frozen_array([effects[key].u for key in acting]),
        tuple(effects[key] for key in exponent_ids),
        frozen_array([effects[key].u for key in exponent_ids]),
        tuple(-1 if key is None else exponent_ids.index(key) for key in shifts),
    )
