"""Nodes on edges and faces of quadratic cells must lie where they belong; formats differ in their order."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS
from unturn.errors import InputError
from unturn.result import Array, CellBlock

_SAMPLE = 2000
_NEARER = 1.05
"""How much farther than the nearest place a node may be from its own: quarter-point nodes are a tie."""

Places = tuple[tuple[int, ...], ...]


def _places() -> dict[str, Places]:
    """Return the corners that each further node of an element lies in the middle of."""
    found: dict[str, Places] = {}
    for name, row in ELEMENTS.items():
        weights = ELEMENTS[row.shape.name].shape_functions(row.nodes[row.n_corners :])
        around = [np.flatnonzero(np.abs(w) > 1e-9) for w in weights]
        if around and all(np.allclose(w[held], 1 / len(held)) for w, held in zip(weights, around)):
            found[name] = tuple(tuple(int(corner) for corner in held) for held in around)
    return found


PLACES: dict[str, Places] = _places()
"""The corners that each further node lies in the middle of, in VTK's order; from the element table."""


def checked_order(
    points: Array, blocks: tuple[CellBlock, ...], where: str
) -> tuple[tuple[CellBlock, ...], tuple[str, ...]]:
    """Return the blocks with their quadratic nodes in VTK's order, and a sentence for each that was repaired.

    Parameters
    ----------
    points
        ``(n_points, 3)``.
    blocks
        As the format's reader made them; connectivity within range.
    where
        Put in front of an error.

    Notes
    -----
    At most 2000 cells of a block are looked at, evenly spread. A node is out of place when a corner or the
    place of another node is clearly nearer to it than its own. A block is in the wrong order when half of its
    cells or more have such a node; it is repaired when one other order puts nine cells in ten right.

    Raises
    ------
    InputError
        The order is wrong and no single other order makes it right.

    Examples
    --------
    >>> points = np.array([[0.0, 0, 0], [2, 0, 0], [0, 2, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]])
    >>> block = CellBlock("triangle6", np.array([[0, 1, 2, 3, 4, 5]]), np.array([0]))
    >>> checked_order(points, (block,), "")[1]
    ()
    """
    checked: list[CellBlock] = []
    notes: list[str] = []
    for block in blocks:
        order = _right_order(points, block)
        if order is None:
            raise InputError(
                f"{where}the nodes of the {block.cell_type} cells do not lie on the edges and faces they "
                f"belong to (first cell {int(block.index[0])}): the node order is not that of the format. "
                "Write the file with another program or as VTU."
            )
        if order:
            checked.append(replace(block, connectivity=np.ascontiguousarray(block.connectivity[:, order])))
            notes.append(
                f"The nodes of the {block.cell_type} cells were not in the order of the format; "
                "they were put in order by where they lie."
            )
        else:
            checked.append(block)
    return tuple(checked), tuple(notes)


def _right_order(points: Array, block: CellBlock) -> list[int] | None:
    """Return the columns that bring the nodes into order, an empty list for none needed, None if unknown."""
    if block.cell_type == "VTK_LAGRANGE_HEXAHEDRON":
        return _right_lagrange_hexahedron(points, block)
    places = PLACES.get(block.cell_type)
    if places is None or not len(block):
        return []
    picked = np.unique(np.linspace(0, len(block) - 1, _SAMPLE).astype(np.int64))
    distance, corners = _distances(points, block.connectivity[picked], places)
    own = np.diagonal(distance[:, :, corners:], axis1=1, axis2=2)
    size = distance.max(axis=(1, 2))
    far = own > _NEARER * distance.min(axis=2) + 1e-9 * size[:, None]
    if far.any(axis=1).mean() < 0.5:
        return []
    nearest = distance[:, :, corners:].argmin(axis=2)
    found, count = np.unique(nearest, axis=0, return_counts=True)
    best = found[count.argmax()]
    if count.max() < 0.9 * len(nearest) or len(np.unique(best)) != len(best):
        return None
    return [*range(corners), *(int(k) + corners for k in np.argsort(best))]


def _right_lagrange_hexahedron(points: Array, block: CellBlock) -> list[int]:
    """Return the columns that exchange the upright edges at corners 2 and 3, an empty list for none needed.

    Notes
    -----
    VTK exchanged these two edges between its versions 8 and 9, and its readers turn files of the older format versions
    round. Some writers state an old version over nodes in the new order, and some the other way round.
    """
    n_nodes = block.connectivity.shape[1]
    order = round(n_nodes ** (1 / 3)) - 1
    if (order + 1) ** 3 != n_nodes or order < 2 or not len(block):
        return []
    inner = order - 1
    starts = (8 + 10 * inner, 8 + 11 * inner)
    picked = np.unique(np.linspace(0, len(block) - 1, _SAMPLE).astype(np.int64))
    nodes = points[block.connectivity[picked]].astype(np.float64)
    middles = np.stack([nodes[:, [2, 6]].mean(axis=1), nodes[:, [3, 7]].mean(axis=1)], axis=1)
    held = nodes[:, [start + inner // 2 for start in starts]]
    own, other = (np.linalg.norm(held - m, axis=2) for m in (middles, middles[:, ::-1]))
    if (own > other).all(axis=1).mean() < 0.5:
        return []
    columns = np.arange(n_nodes)
    for here, there in (starts, starts[::-1]):
        columns[here : here + inner] = np.arange(there, there + inner)
    return [int(c) for c in columns]


def _distances(points: Array, connectivity: NDArray[np.int64], places: Places) -> tuple[Array, int]:
    """Return the distance of each further node from corners and places, and the number of corners."""
    corners = connectivity.shape[1] - len(places)
    nodes = points[connectivity].astype(np.float64)
    centres = np.stack([nodes[:, list(place)].mean(axis=1) for place in places], axis=1)
    targets = np.concatenate([nodes[:, :corners], centres], axis=1)
    further = nodes[:, corners:]
    return np.linalg.norm(further[:, :, None] - targets[:, None], axis=3), corners
