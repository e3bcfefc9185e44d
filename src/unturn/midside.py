"""Mid-side nodes far from the middle of their edges: the sign of a wrong node order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element
from unturn.kinematics._symmetric import Floats

_FAR = 0.25  # of the edge's length: quarter-point nodes of crack-tip elements sit exactly there


@dataclass(frozen=True)
class MidNodes:
    """Cells whose mid-side nodes are far off.

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
    """Return the cells with an edge node farther than a quarter of the edge from its reference place on the chord.

    A curved edge with a rise of a quarter of its chord is a half circle nearly; crack-tip elements with quarter-point
    nodes are at the bound and pass.
    """
    off = np.zeros(len(connectivity), dtype=bool)
    for a, b, between in row.edges:
        if not between:
            continue
        start, along = row.nodes[a], row.nodes[b] - row.nodes[a]
        xa, xb = points[connectivity[:, a]], points[connectivity[:, b]]
        length = np.linalg.norm(xb - xa, axis=1)
        for node in between:
            t = float((row.nodes[node] - start) @ along / (along @ along))
            middle = (1.0 - t) * xa + t * xb
            distance = np.linalg.norm(points[connectivity[:, node]] - middle, axis=1)
            off |= distance > (_FAR + 0.01) * length
    count = int(off.sum())
    return MidNodes(count, count / max(1, len(off)), int(np.argmax(off)) if count else -1)
