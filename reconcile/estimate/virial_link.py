"""Linking second virial coefficients of one medium, where the user asks for it.

A₂ of osmometry and of light scattering in one solvent at one temperature are two averages of one
law; their ratio follows from the distribution. Each medium brings one unknown scale without a
prior, and each row after its first a model error, for what mixing rule and exponent leave open.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

from reconcile.measurement import Effect

if TYPE_CHECKING:
    from collections.abc import Sequence

    from reconcile.evidence import Evidence

__all__ = ["FLAT", "MODEL_ERROR", "link_virial"]

MODEL_ERROR = 0.06
"""Relative standard uncertainty of the ratio: mixing rules differ by up to 12 % at Đ = 2."""

FLAT = 30.0
"""Standard deviation of ln(scale) that stands for no prior at all."""

_LN_PIVOT = math.log(1e5)


def link_virial(evidence: Sequence[Evidence]) -> tuple[list[Evidence], list[Effect], list[str]]:
    """Return evidence with linked rows, the effects that link them, and what was linked.

    Only rows with a medium, a positive value and a partner in the same medium are linked.
    """
    media: dict[str, list[tuple[int, int]]] = {}
    for block, entry in enumerate(evidence):
        for index, row in enumerate(entry.rows):
            usable = row.link is not None and row.medium is not None and entry.values[index] > 0.0
            if usable and row.medium is not None:
                media.setdefault(row.medium, []).append((block, index))
    linked, effects, said = list(evidence), [], []
    for number, (medium, places) in enumerate(sorted(media.items()), start=1):
        if len(places) < 2:
            continue
        scale = Effect(f"virial_scale_{number}", "virial_scale", FLAT, medium)
        effects.append(scale)
        # start the scale at the first row's own value, taken at the pivot molar mass
        block, index = places[0]
        first = float(linked[block].values[index])
        for rank, (block, index) in enumerate(places):
            derivatives = {scale.id: 1.0}
            if rank > 0:
                model = Effect(
                    f"virial_model_{number}_{rank}", "virial_model", MODEL_ERROR, "mixing rule"
                )
                effects.append(model)
                derivatives[model.id] = 1.0
            linked[block] = _with_link(linked[block], index, first, derivatives)
        said.append(medium)
    return linked, effects, said


def _with_link(
    evidence: Evidence, index: int, scale: float, derivatives: dict[str, float]
) -> Evidence:
    row = evidence.rows[index]
    assert row.link is not None  # noqa: S101 - only linkable rows come here
    exponent = sum(coefficient * order for coefficient, order in row.link.terms)
    constant = math.log(scale) - exponent * _LN_PIVOT
    rows = list(evidence.rows)
    rows[index] = replace(
        row,
        observable=replace(row.link, ln_constant=constant),
        derivatives={**row.derivatives, **derivatives},
    )
    return replace(evidence, rows=tuple(rows))
