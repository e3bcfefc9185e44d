"""What an imposed field needs to know of every cell: its middle, how far rounding reaches, whether it is straight."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.fields import smallest_height
from unturn.gradient import ElementChunk, chunk_ranges, over_chunks
from unturn.kinematics._symmetric import Floats, six_from_full
from unturn.model import Model, ModelBlock
from unturn.precision import storage_resolution
from unturn.verdicts.straight_cells import moved_between_edges, reordered_cells, straight_places

_STRAIGHT = 1e-9  # share of the cell's size by which a node of a straight cell may be off its place
_STEPS = 8.0  # of the stored coordinates, where they are coarser
_FAR_OFF = 20.0
_LOOKED_AT = 500
"""Cells of each block in which another order of the nodes is searched for."""


@dataclass(eq=False)
class CellShapes:
    """Geometry of the cells of a model, `(n_cells,)` each, file order; NaN where there is no such cell.

    Attributes
    ----------
    middle
        `(n_cells, 3)` centroid from `origin`.
    span
        Distance of the farthest node from the first.
    reach
        Largest over the axes of the sum of the derivatives of the shape functions, by size: what one unit of error in
        every nodal displacement can do to a component of the gradient.
    height
        Smallest height.
    condition
        Product of the lengths of the tangents over their volume: 1 for a brick, large for a sliver.
    bent
        How far a node is off its place in the straight cell with the same corners.
    change
        Norm of the change of a strain with the gradient `slope` over the nodes of the cell.
    along
        `(n_cells, 3, 3)` projectors onto the cells that are surfaces or lines in space; None where there are none.
    straight
        Whether every node is at its place, or at that of another node.
    reordered
        Whether the nodes are those of a straight cell in another order.
    origin
        `(3,)` middle of the mesh.
    """

    middle: Floats
    span: Floats
    reach: Floats
    height: Floats
    condition: Floats
    bent: Floats
    change: Floats
    along: Floats | None
    straight: NDArray[np.bool_]
    reordered: NDArray[np.bool_]
    origin: Floats


def middle_and_size(model: Model) -> tuple[Floats, float]:
    """Return the middle of the box around the computed cells, and the length of its longest side."""
    used = np.zeros(len(model.points), dtype=bool)
    for block in model.blocks:
        used[block.connectivity] = len(block.active) > 0
    points = model.points[used & np.isfinite(model.points).all(axis=1)]
    if not len(points):
        return np.zeros(3), 1.0
    low, high = points.min(axis=0), points.max(axis=0)
    size = float((high - low).max())
    return 0.5 * (low + high), size if size > 0 else 1.0


def cell_shapes(model: Model, slope: Floats, threads: int | None = None) -> CellShapes:
    """Return the geometry of the cells of a model.

    Parameters
    ----------
    model
        See `build_model`.
    slope
        `(3, 3, 3)` second derivatives of a displacement, for `change`.
    threads
        Number of threads; None for all processors.
    """
    n = model.result.n_cells
    span, reach, height, condition, bent, change = (np.full(n, np.nan) for _ in range(6))
    in_space = any(b.kind in ("surface", "line") and len(b.active) for b in model.blocks)
    shapes = CellShapes(
        np.full((n, 3), np.nan), span, reach, height, condition, bent, change,
        np.empty((n, 3, 3)) if in_space else None,
        np.zeros(n, dtype=bool), np.zeros(n, dtype=bool), middle_and_size(model)[0],
    )  # fmt: skip
    stored = storage_resolution(model.result.points)
    for block in model.blocks:
        if block.row is not None and len(block.active):
            _Pass(model, block, shapes, slope, (stored.relative, stored.absolute)).run(threads)
    return shapes


class _Pass:
    """One block being gone through."""

    def __init__(
        self, model: Model, block: ModelBlock, shapes: CellShapes, slope: Floats, stored: tuple[float, float]
    ) -> None:
        assert block.row is not None
        self.model, self.block, self.row, self.shapes = model, block, block.row, shapes
        self.center = self.row.shape_gradients(self.row.centroid[None])[0]
        self.functions = self.row.shape_functions(self.row.centroid[None])[0]
        self.strain_slope = six_from_full(slope)  # `(6, 3)` by the coordinates
        self.norm = np.sqrt([1.0, 1.0, 1.0, 2.0, 2.0, 2.0])
        self.stored = stored
        self.frame, self.places = straight_places(self.row)

    def run(self, threads: int | None) -> None:
        connectivity, index = self.block.connectivity, self.block.index

        def work(start: int, stop: int) -> None:
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                chunk = self.model.chunk(self.block, connectivity[start:stop], index[start:stop])
                self._chunk(chunk, index[start:stop])

        over_chunks(work, chunk_ranges(len(index), connectivity.shape[1]), threads)
        self._search(connectivity, index)

    def _chunk(self, chunk: ElementChunk, rows: NDArray[np.int64]) -> None:
        s, relative = self.shapes, chunk.relative[:3]
        point = chunk.at(self.center, self.functions)
        first = chunk.first[:3] - s.origin[:, None]
        s.middle[rows] = (first + np.einsum("a,iam->im", self.functions[1:], relative)).T
        span = np.sqrt((relative**2).sum(axis=0).max(axis=0))
        s.span[rows] = span
        s.height[rows] = smallest_height(chunk, point)
        s.reach[rows] = _reach(point.inverse, self.center)
        tangents = np.matmul(self.center[:, 1:], relative)  # (3, dim, m)
        lengths = np.sqrt((tangents**2).sum(axis=0)).prod(axis=0)
        s.condition[rows] = lengths / np.abs(point.measure)
        bent = self._bent(relative)
        s.bent[rows] = bent
        far = np.abs(chunk.first[:3]).max(axis=0) + span
        s.straight[rows] = bent <= self._allowed(span, far)
        over = np.einsum("cj,jam->cam", self.strain_slope, relative)
        most, least = np.maximum(over.max(axis=1), 0.0), np.minimum(over.min(axis=1), 0.0)
        s.change[rows] = np.sqrt(((self.norm[:, None] * (most - least)) ** 2).sum(axis=0))
        if self.block.kind in ("surface", "line"):
            assert s.along is not None
            s.along[rows] = _projector(tangents)

    def _allowed(self, span: Floats, far: Floats) -> Floats:
        """Return how far a node of a straight cell may be off its place, because of the digits of its coordinates."""
        return _STRAIGHT * span + _STEPS * (self.stored[0] * far + self.stored[1])

    def _bent(self, relative: Floats) -> Floats:
        """Return how far the nodes are off the straight cell that has the same corners."""
        if self.row.n_nodes == self.row.dim + 1:
            return np.zeros(relative.shape[-1])
        nodes = np.concatenate([np.zeros((3, 1, relative.shape[-1])), relative], axis=1)
        off = nodes - np.einsum("af,ifm->iam", self.places, nodes[:, list(self.frame)])
        found: Floats = np.sqrt((off**2).sum(axis=0).max(axis=0))
        return found

    def _search(self, connectivity: NDArray[np.int64], index: NDArray[np.int64]) -> None:
        """Look among the cells that are not straight for those whose nodes are only in another order."""
        s = self.shapes
        with np.errstate(invalid="ignore", over="ignore"):
            far = np.abs(s.middle[index] + s.origin).max(axis=1) + s.span[index]
            allowed = 4.0 * self._allowed(s.span[index], far)
            # nodes at each other's places are much farther off than digits that are missing
            odd = np.flatnonzero(s.bent[index] > _FAR_OFF * allowed)
        if not len(odd):
            return
        odd = odd[np.unique(np.linspace(0, len(odd) - 1, _LOOKED_AT).astype(np.int64))]
        points, allowed = self.model.points[connectivity[odd]], allowed[odd]
        found = index[odd[reordered_cells(points, self.row, allowed)]]
        s.reordered[found] = s.straight[found] = True
        s.bent[found] = 0.0  # the nodes are at the places of a straight cell
        s.reordered[index[odd[moved_between_edges(points, self.row, allowed)]]] = True


def _reach(inverse: Floats, center: Floats) -> Floats:
    """Return the largest sum over the nodes of `|dN_a / dX_j|` `(m,)`."""
    total = np.zeros(inverse.shape[1:])
    for gradient in center.T:
        total += np.abs(np.einsum("k,kjm->jm", gradient, inverse))
    found: Floats = total.max(axis=0)
    return found


def _projector(tangents: Floats) -> Floats:
    """Return the projectors `(m, 3, 3)` onto the span of one or two tangents `(3, dim, m)`."""
    if tangents.shape[1] == 1:
        t = tangents[:, 0]
        return np.asarray(np.einsum("im,jm->mij", t, t) / (t * t).sum(axis=0)[:, None, None])
    normal = np.cross(tangents[:, 0], tangents[:, 1], axis=0)
    onto = np.einsum("im,jm->mij", normal, normal) / (normal * normal).sum(axis=0)[:, None, None]
    return np.asarray(np.eye(3) - onto)
