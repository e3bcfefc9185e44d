"""Nodes between the corners that are far from their places: the sign of a wrong node order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element
from unturn.kinematics._symmetric import Floats

_FAR = 0.25  # of the edge's length: the quarter-point nodes of crack-tip elements sit exactly there


@dataclass(frozen=True)
class MidNodes:
    """Cells whose nodes between the corners are far off.

    Parameters
    ----------
    count, share
        Number of such cells and their share of those looked at.
    first
        Position of the first in the block, -1 when there is none.
    """

    count: int
    share: float
    first: int


def misplaced_mid_nodes(points: Floats, connectivity: NDArray[np.int64], row: Element) -> MidNodes:
    """Return the cells with a node that is far from where its corners would have it; see `far_mid_nodes`."""
    off = far_mid_nodes(points, connectivity, row)
    count = int(off.sum())
    return MidNodes(count, count / max(1, len(off)), int(np.argmax(off)) if count else -1)


def far_mid_nodes(points: Floats, connectivity: NDArray[np.int64], row: Element) -> NDArray[np.bool_]:
    """Return which cells `(n,)` have a node that is far from where its corners would have it.

    An edge node may be a quarter of its edge away from its place on the chord: a bow of a quarter of the chord is
    nearly a half circle, and the quarter-point nodes of crack-tip elements are at the bound and pass. A node within
    a face or the cell may be a quarter of the longest distance between its corners away.
    """
    off = np.zeros(len(connectivity), dtype=bool)
    if row.n_nodes == row.n_corners:
        return off
    corners = points[connectivity[:, : row.n_corners]]
    with np.errstate(invalid="ignore", over="ignore"):
        # repeated corners leave edges without length: there the stored digits of the coordinates decide
        rounding = 1e-6 * np.linalg.norm(np.ptp(corners, axis=1), axis=1)
        for node, weights in zip(range(row.n_corners, row.n_nodes), _corner_weights(row)):
            held = np.flatnonzero(np.abs(weights) > 1e-9)
            around = corners[:, held]
            place = np.einsum("c,ncx->nx", weights[held], around)
            reach = np.linalg.norm(around[:, :, None] - around[:, None], axis=-1).max(axis=(1, 2))
            distance = np.linalg.norm(points[connectivity[:, node]] - place, axis=1)
            off |= distance > (_FAR + 0.01) * reach + rounding
    return off


def _corner_weights(row: Element) -> Floats:
    """Return the linear functions of the corners at the other nodes, `(n_nodes - n_corners, n_corners)`."""
    return ELEMENTS[row.shape.name].shape_functions(row.nodes[row.n_corners :])
