"""Gradients at nodes: recovered within groups of cells, never across their borders."""

from __future__ import annotations

from unturn.recovery._nodes import NodeShares, Spots, coincident_points, node_shares
from unturn.recovery._recover import METHODS, Method, Recovered, recover_gradient, recover_samples
from unturn.recovery._samples import CellSamples, sample_cells
from unturn.recovery._sheets import sheets

__all__ = [
    "METHODS",
    "CellSamples",
    "Method",
    "NodeShares",
    "Recovered",
    "Spots",
    "coincident_points",
    "node_shares",
    "recover_gradient",
    "recover_samples",
    "sample_cells",
    "sheets",
]
