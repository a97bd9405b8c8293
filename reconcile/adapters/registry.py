"""The techniques this program knows: one line each."""

from __future__ import annotations

from types import MappingProxyType
from typing import TYPE_CHECKING

from reconcile.adapters import light_scattering, osmometry, stated, viscometry

if TYPE_CHECKING:
    from collections.abc import Mapping

    from reconcile.adapters.common import Adapter

__all__ = ["ADAPTERS"]

ADAPTERS: Mapping[str, Adapter] = MappingProxyType(
    {
        "osmometry": osmometry.ADAPTER,
        "light_scattering": light_scattering.ADAPTER,
        "viscometry": viscometry.ADAPTER,
        "stated": stated.ADAPTER,
    }
)
"""Technique → adapter; the key is what the case document says."""
