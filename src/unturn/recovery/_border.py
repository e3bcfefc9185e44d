"""At borders: the derivative along the edges of free facets, which the displacement of their own nodes gives."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element, element
from unturn.gradient import Plane, chunk_ranges, over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.model import ModelBlock
from unturn.node_sets import Keys, random_numbers, set_keys, singles
from unturn.recovery._average import extrapolation
from unturn.recovery._nodes import Ints, NodeShares
from unturn.recovery._samples import PAIRS, CellSamples

_SEEN = 0.13
"""Share of the best covered direction below which the edges at a node do not cover a direction: tan^2 of 20 degrees, so
that edges which bend by less than 40 degrees at the node count as one direction."""
_NO_LENGTH = 1e-9  # of the size of the cell: a shorter edge is that of a collapsed cell


def border_shift(shares: NodeShares, samples: CellSamples, values: Floats, threads: int | None) -> Floats:
    """Return what is to be added to recovered values at the corners on borders of solids and plane meshes.

    Parameters
    ----------
    shares, samples
        Of the model.
    values
        `(9, n_shares)` recovered gradient.
    threads
        None: all processors.

    Returns
    -------
    numpy.ndarray
        `(9, n_shares)`, zero at all other nodes.
    """
    sums = np.zeros((len(PAIRS) + 9, len(shares)))
    for block, cells, facets in _free_facets(shares, samples, threads):
        assert block.row is not None
        for edge, count in _edges(block.row, facets):
            rows = np.flatnonzero(count)
            ends = _residuals(shares, block, cells, edge, rows, values, threads)
            for corner, (t, r) in zip(block.row.edges[edge][:2], ends):
                at, weight = cells[rows, corner], count[rows]
                for k, (i, j) in enumerate(PAIRS):
                    sums[k] += np.bincount(at, weight * t[i] * t[j], len(shares))
                for k, (i, j) in enumerate(np.ndindex(3, 3), len(PAIRS)):
                    sums[k] += np.bincount(at, weight * r[i] * t[j], len(shares))
    return _solved(sums, shares.model.plane)


def _free_facets(
    shares: NodeShares, samples: CellSamples, threads: int | None
) -> Iterator[tuple[ModelBlock, NDArray[np.int32], NDArray[np.bool_]]]:
    """Yield solid and plane blocks, the shares of their cells, and `(n_facets, n_cells)` which facets no other cell has."""
    table = random_numbers(len(shares), seed=0)
    found = []
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        if block.row is not None and block.kind in ("solid", "plane"):
            keys, whole = _facet_keys(block.row, cells, table, threads)
            found.append((block, cells, keys, whole & samples.valid[rows]))
    keys = np.concatenate([np.zeros(0, dtype=np.uint64), *(k[there] for *_, k, there in found)])
    alone = np.zeros(len(keys), dtype=bool)
    alone[singles(keys)] = True
    for block, cells, _, there in found:
        free = there.copy()
        free[there], alone = np.split(alone, [int(there.sum())])
        yield block, cells, free


def _facet_keys(
    row: Element, cells: NDArray[np.int32], table: Keys, threads: int | None
) -> tuple[Keys, NDArray[np.bool_]]:
    """Return `(n_facets, n_cells)` a key of the corners of each facet, and whether it has as many as its dimension needs."""
    facets = [list(f) for f in row.shape.facets]
    keys = np.empty((len(facets), len(cells)), dtype=np.uint64)
    whole = np.empty(keys.shape, dtype=bool)

    def work(a: int, b: int) -> None:
        nodes = np.ascontiguousarray(cells[a:b, : row.n_corners].T)
        for f, corners in enumerate(facets):
            keys[f, a:b], count = set_keys(nodes[corners], table)
            whole[f, a:b] = count >= row.dim

    over_chunks(work, chunk_ranges(len(cells), row.n_nodes), threads)
    return keys, whole


def _edges(row: Element, free: NDArray[np.bool_]) -> Iterator[tuple[int, Ints]]:
    """Yield each edge of an element that lies on facets, and `(n_cells,)` on how many free ones."""
    for k, (a, b, _) in enumerate(row.edges):
        on = [f for f, facet in enumerate(row.shape.facets) if a in facet and b in facet]
        count = free[on].sum(axis=0)
        if count.any():
            yield k, count


def _residuals(
    shares: NodeShares,
    block: ModelBlock,
    cells: NDArray[np.int32],
    edge: int,
    rows: Ints,
    values: Floats,
    threads: int | None,
) -> Floats:
    """Return `(2, 2, 3, m)`: at both ends of an edge of some cells the unit tangent and the residual.

    The residual is what the derivative along the edge, from the displacement, has more than the recovered gradient; from
    the points where it is most accurate extrapolated to the ends. Both are zero for an edge without length.
    """
    assert block.row is not None
    row, (a, b, between) = block.row, block.row.edges[edge]
    line = element("VTK_LAGRANGE_CURVE", row.order + 1)
    span = row.shape.vertices[[a, b]]
    places = ELEMENTS["line"].shape_functions(line.accurate.points) @ span
    nodes = [a, b, *between]
    to_ends = extrapolation(line)[:2]
    out = np.empty((2, 2, 3, len(rows)))

    def work(start: int, stop: int) -> None:
        some = rows[start:stop]
        chunk = shares.model.chunk(block, block.connectivity[some], block.index[some])
        size = np.abs(chunk.relative[:3]).max(axis=(0, 1))
        nodal = values[:, cells[some][:, nodes]].reshape(3, 3, len(some), len(nodes))
        found = []
        for gradients, functions in zip(row.shape_gradients(places), row.shape_functions(places)):
            along = np.einsum("k,ckm->cm", span[1] - span[0], chunk.tangents(gradients))
            length = np.linalg.norm(along[:3], axis=0)
            tangent, moved = (along / np.where(length > _NO_LENGTH * size, length, np.inf)).reshape(2, 3, -1)
            recovered = np.einsum("ijm,jm->im", nodal @ functions[nodes], tangent)
            found.append([tangent, moved - recovered])
        out[..., start:stop] = np.einsum("eq,qkim->ekim", to_ends, found)

    over_chunks(work, chunk_ranges(len(rows), row.n_nodes), threads)
    length = np.linalg.norm(out[:, :1], axis=2, keepdims=True)
    out[:, :1] /= np.where(length > 0, length, 1.0)
    return out


def _solved(sums: Floats, plane: Plane | None) -> Floats:
    """Return the smallest change `(9, n)` that takes the residuals away, in the mean square where they disagree."""
    some = np.flatnonzero(sums[:3].sum(axis=0))
    squares = np.empty((len(some), 3, 3))
    for (i, j), part in zip(PAIRS, sums):
        squares[:, i, j] = squares[:, j, i] = part[some]
    size, axes = np.linalg.eigh(squares)
    seen = size > _SEEN * size[:, -1:]
    inverse = np.where(seen, 1.0 / np.where(seen, size, 1.0), 0.0)
    moments = sums[len(PAIRS) :, some].T.reshape(-1, 3, 3)
    change = np.einsum("nij,njk,nk,nlk->nil", moments, axes, inverse, axes, optimize=True)
    if plane is not None and plane.model == "stress":
        assert plane.poisson is not None
        k = plane.normal
        trace = np.trace(change, axis1=1, axis2=2) - change[:, k, k]
        change[:, k, k] = -plane.poisson / (1.0 - plane.poisson) * trace
    out = np.zeros((9, sums.shape[1]))
    out[:, some] = change.reshape(-1, 9).T
    return out
