"""Jacobian determinants at the nodes: a warning where they are negative though they are not inside."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unturn.gradient import ElementChunk, chunk_ranges
from unturn.model import Model, ModelBlock

_ZERO = 1e-9  # share of the determinant at the centroid below which a node's counts as zero, not negative


def negative_at_nodes(model: Model, block: ModelBlock) -> NDArray[np.int64]:
    """Return file positions of solids whose Jacobian has one sign inside and the other at a node.

    Nodes where it is legitimately zero (the apex of a pyramid, repeated nodes) do not count; nor do cells whose
    Jacobian already changes sign at the quadrature points, which are tangled.
    """
    row = block.row
    if row is None or row.dim != 3 or row.n_nodes == row.dim + 1:
        return np.zeros(0, dtype=np.int64)
    corners = [n for n in range(row.n_nodes) if n not in row.node_jacobian_exempt]
    at_nodes = row.shape_gradients(row.nodes)[corners]
    inside = row.shape_gradients(row.quadrature.points)
    center = row.shape_gradients(row.centroid[None])[0]
    found = []
    for start, stop in chunk_ranges(len(block.index), row.n_nodes):
        chunk = ElementChunk(model.fields, block.connectivity[start:stop], row, None)
        middle = chunk.measure(center)
        sign = np.sign(middle)
        bad = np.zeros(len(chunk), dtype=bool)
        for gradients in at_nodes:
            bad |= chunk.measure(gradients) * sign < -_ZERO * np.abs(middle)
        if bad.any():
            for gradients in inside:
                bad &= chunk.measure(gradients) * sign > 0
        found.append(block.index[start:stop][bad])
    return np.concatenate(found)
