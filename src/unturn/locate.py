"""The elements that hold points of space, and their reference coordinates there: by the elements' own shape functions."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock

Ints = NDArray[np.int64]

_SLACK = 0.1  # share of a cell's size by which a curved side may lie outside the box of its nodes
INSIDE = 1e-6
"""Share of the reference shape within which a point counts as on its border."""
_ITERATIONS = 25
_SETTLED = (
    1e-12  # step in reference coordinates, or share of the cell's size, from which on a search stands still
)
_ASTRAY = 10.0  # reference coordinate from which on it will not come back
_FAR = 1e15  # grid cells from the middle of the mesh, from which on they count as one
_POINTS_AT_ONCE = 20_000
_PAIRS_AT_ONCE = 100_000
_PRIMES = np.array([73_856_093, 19_349_663, 83_492_791], dtype=np.int64)


@dataclass(frozen=True, eq=False)
class Location:
    """A cell that holds the point.

    Parameters
    ----------
    block
        The block of the cell.
    cell
        Its zero-based position in the file.
    connectivity
        `(n_nodes,)` its nodes.
    reference
        `(dim,)` reference coordinates of the point.
    """

    block: ModelBlock
    cell: int
    connectivity: NDArray[np.int64]
    reference: Floats


@dataclass(frozen=True, eq=False)
class BlockLocations:
    """The cells of one block that hold points, one row for each pair of a point and a cell.

    Parameters
    ----------
    block
        The block.
    point
        `(p,)` positions among the points that were asked for.
    row
        `(p,)` positions among the computed cells of the block.
    reference
        `(p, dim)` reference coordinates.
    beyond
        `(p,)` share of the reference shape by which the point lies outside of it; 0 inside.
    """

    block: ModelBlock
    point: Ints
    row: Ints
    reference: Floats
    beyond: Floats

    @property
    def cell(self) -> Ints:
        """`(p,)` file positions of the cells."""
        return self.block.index[self.row]

    @property
    def connectivity(self) -> Ints:
        """`(p, n_nodes)` nodes of the cells."""
        return self.block.connectivity[self.row]


def locate(model: Model, point: Floats) -> list[Location]:
    """Return every computed cell of the highest dimension that holds a point; several where it lies on their border.

    Parameters
    ----------
    model
        The model.
    point
        `(3,)` reference coordinates, in the unit of the points.
    """
    return [
        Location(found.block, int(cell), nodes, xi)
        for found in locate_all(model, np.asarray(point, dtype=np.float64)[None], model.dimension)
        for cell, nodes, xi in zip(found.cell, found.connectivity, found.reference)
    ]


def locate_all(model: Model, points: Floats, dimension: int, inside: float = INSIDE) -> list[BlockLocations]:
    """Return every computed cell of one dimension that holds each of many points.

    Parameters
    ----------
    model
        The model.
    points
        `(n, 3)` reference coordinates, in the unit of the points of the model.
    dimension
        Of the cells.
    inside
        Share of the reference shape, and of a cell's size across a surface or line, by which a point may lie outside.

    Notes
    -----
    Newton's method on `sum_a N_a(xi) X_a = point`; for surfaces and lines in space the least-squares step, and the point
    must lie on them. Cells are found by their boxes, sorted by size into grids whose cells are as large as the boxes.
    """
    usable = np.flatnonzero(np.isfinite(points).all(axis=1))
    found = []
    for block in model.blocks:
        if block.row is None or block.row.dim != dimension or not len(block.active):
            continue
        parts = list(_in_block(model, block, points, usable, inside))
        point, row, xi, beyond = (np.concatenate(arrays) for arrays in zip(*parts)) if parts else _NOTHING
        if len(point):
            order = np.lexsort((row, point))
            found.append(BlockLocations(block, point[order], row[order], xi[order], beyond[order]))
    return found


_NOTHING = (np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros((0, 0)), np.zeros(0))


def _in_block(
    model: Model, block: ModelBlock, points: Floats, usable: Ints, inside: float
) -> Iterator[tuple[Ints, Ints, Floats, Floats]]:
    assert block.row is not None
    connectivity = block.connectivity
    slack = 2.0 * inside + (
        _SLACK if block.row.order > 1 else 0.0
    )  # cells of order 1 lie in the box of their nodes
    boxes = _Boxes(model.points, connectivity, slack)
    for start in range(0, len(usable), _POINTS_AT_ONCE):
        which = usable[start : start + _POINTS_AT_ONCE]
        near, rows = boxes.pairs(points[which])
        for k in range(0, len(rows), _PAIRS_AT_ONCE):
            point, row = which[near[k : k + _PAIRS_AT_ONCE]], rows[k : k + _PAIRS_AT_ONCE]
            xi, beyond = _references(block.row, model.points[connectivity[row]], points[point])
            hit = beyond <= inside
            yield point[hit], row[hit], xi[hit], np.where(beyond[hit] <= INSIDE, 0.0, beyond[hit])


class _Boxes:
    """The boxes of cells, made a little larger, in grids by size: a box lies in at most eight cells of its grid."""

    def __init__(self, points: Floats, connectivity: Ints, slack: float) -> None:
        self.low, self.high = (
            np.full((len(connectivity), 3), np.inf),
            np.full((len(connectivity), 3), -np.inf),
        )
        for nodes in connectivity.T:
            np.fmin(self.low, points[nodes], out=self.low)
            np.fmax(self.high, points[nodes], out=self.high)
        with np.errstate(invalid="ignore"):
            margin = slack * (self.high - self.low).max(axis=1, keepdims=True)
            self.low -= margin
            self.high += margin
            size = (self.high - self.low).max(axis=1)
        sound = np.isfinite(size) & (size > 0)
        self.origin = np.median(self.low[sound], axis=0) if sound.any() else np.zeros(3)
        level = np.zeros(len(size), dtype=np.int64)
        level[sound] = np.ceil(np.log2(size[sound])).astype(np.int64)
        self.grids = [
            (2.0**k, *self._grid(2.0**k, np.flatnonzero(sound & (level == k))))
            for k in np.unique(level[sound])
        ]

    def _grid(self, spacing: float, cells: Ints) -> tuple[Ints, Ints]:
        """Return the keys of the grid's cells, sorted, and the mesh cell of each."""
        first, last = self._bins(self.low[cells], spacing), self._bins(self.high[cells], spacing)
        keys, members = [], []
        for step in itertools.product((0, 1), repeat=3):
            bins = first + np.array(step)
            reached = (bins <= last).all(axis=1)
            keys.append(_keys(bins[reached]))
            members.append(cells[reached])
        key, member = np.concatenate(keys), np.concatenate(members)
        order = np.argsort(key, kind="stable")
        return key[order], member[order]

    def _bins(self, places: Floats, spacing: float) -> Ints:
        bins = np.floor((places - self.origin) / spacing)
        return np.clip(bins, -_FAR, _FAR).astype(np.int64)

    def pairs(self, points: Floats) -> tuple[Ints, Ints]:
        """Return positions of points and of the cells in whose box they lie."""
        found_points, found_cells = [np.zeros(0, dtype=np.int64)], [np.zeros(0, dtype=np.int64)]
        low, high = self.low.min(axis=0, initial=np.inf), self.high.max(axis=0, initial=-np.inf)
        near = np.flatnonzero(((points >= low) & (points <= high)).all(axis=1))
        for spacing, keys, members in self.grids:
            key = _keys(self._bins(points[near], spacing))
            first, last = np.searchsorted(keys, key, "left"), np.searchsorted(keys, key, "right")
            count = last - first
            point = np.repeat(near, count)
            within = np.arange(len(point)) - np.repeat(np.cumsum(count) - count, count)
            cell = members[np.repeat(first, count) + within]
            held = ((points[point] >= self.low[cell]) & (points[point] <= self.high[cell])).all(axis=1)
            found_points.append(point[held])
            found_cells.append(cell[held])
        return np.concatenate(found_points), np.concatenate(found_cells)


def _keys(bins: Ints) -> Ints:
    keys: Ints = (bins * _PRIMES).sum(axis=1)  # equal keys of different bins only cost a look at a box
    return keys


def _references(row: Element, nodes: Floats, points: Floats) -> tuple[Floats, Floats]:
    """Return reference coordinates `(m, dim)` of points in cells `(m, n_nodes, 3)`, and how far outside they are."""
    X = nodes - points[:, None]
    xi = np.repeat(row.centroid[None], len(X), axis=0)
    todo = np.arange(len(X))
    affine = row.n_nodes == row.dim + 1  # the first step is exact
    with np.errstate(all="ignore"):  # a search that goes astray ends outside
        size = np.ptp(X, axis=1).max(axis=1)
        for _ in range(_ITERATIONS):
            away = np.einsum("pa,pax->px", row.shape_functions(xi[todo]), X[todo])
            far = np.abs(away).max(axis=1) > _SETTLED * size[todo]
            todo, away = todo[far], away[far]
            if not len(todo):
                break
            J = np.einsum("pka,pax->pkx", row.shape_gradients(xi[todo]), X[todo])
            step = _newton_step(J, away)
            xi[todo] += step
            if affine:
                break
            going = np.abs(step).max(axis=1) >= _SETTLED
            going &= np.abs(xi[todo]).max(axis=1) <= _ASTRAY  # NaN does not go on either
            todo = todo[going]
        astray = ~(np.abs(xi).max(axis=1) <= _ASTRAY)
        xi[astray] = row.centroid
        apart = np.abs(np.einsum("pa,pax->px", row.shape_functions(xi), X)).max(axis=1) / size
        beyond = np.maximum(_beyond(row, xi), apart)
    return xi, np.where(astray | ~np.isfinite(beyond), np.inf, beyond)


def _newton_step(J: Floats, away: Floats) -> Floats:
    """Return the step `(m, dim)` that takes `away` to zero, in least squares where `dim < 3`; NaN where it has none."""
    square = np.einsum("pkx,plx->pkl", J, J) if J.shape[1] < 3 else np.swapaxes(J, 1, 2)
    side = np.einsum("pkx,px->pk", J, away) if J.shape[1] < 3 else away
    with np.errstate(invalid="ignore", over="ignore"):
        sound = np.isfinite(square).all(axis=(1, 2)) & (np.linalg.det(square) != 0)
    step = np.full((len(J), J.shape[1]), np.nan)
    if sound.any():
        step[sound] = -np.linalg.solve(square[sound], side[sound][..., None])[..., 0]
    return step


def _beyond(row: Element, xi: Floats) -> Floats:
    """Return the share of the reference shape by which points lie outside of it, 0 inside: over all its sides, squared."""
    shape = row.shape
    squares = np.zeros(len(xi))
    for normal, facet in zip(shape.facet_normals, shape.facets):
        outside = (xi - shape.vertices[facet[0]]) @ normal / np.ptp(shape.vertices @ normal)
        squares += np.maximum(outside, 0.0) ** 2
    beyond: Floats = np.sqrt(squares)
    return beyond
