"""From patches of corners to values at every node: mid-side nodes, borders, thin parts."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from unturn.elements import ELEMENTS, Element
from unturn.gradient import over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.recovery._average import averages
from unturn.recovery._border import border_shift
from unturn.recovery._nodes import NodeShares
from unturn.recovery._patch import Patches, fit_patches
from unturn.recovery._samples import CellSamples, Meetings, meetings

FALLBACKS = (
    "from patches of the nearest corners inside",
    "by a linear polynomial along the directions that the samples cover",
    "extrapolated in each element and averaged weighted by volume",
)
_MEANT, _NEIGHBOURS, _LOWER, _AVERAGE = range(4)
_PAIRS = 4096

Mask = NDArray[np.bool_]
Links = sparse.csr_array
"""`[node, corner]`: weight of the corner's patch in the value at the node."""


def by_patches(
    shares: NodeShares, samples: CellSamples, borders: bool, threads: int | None
) -> tuple[Floats, NDArray[np.int8]]:
    """Return the value `(9, n_shares)` at each share, and how it came about: 0 as meant, else 1 + its fallback.

    With `borders` the values there are shifted to what the displacement says of the edges of free facets.
    """
    corners = meetings(shares, samples, corners_only=True)
    field = _Field(shares, samples, _fit_all(shares, samples, corners, threads), threads)
    no_corner = np.ones(len(shares), dtype=bool)
    no_corner[corners.share] = False
    between = _between(shares, samples, no_corner)
    field.fill(_MEANT, _own(field.good), field.good)
    field.fill(_MEANT, between, field.good)
    near = _around(shares, samples, field.waiting, field.good)
    field.fill(_NEIGHBOURS, near, field.good)
    beside = _around(shares, samples, field.waiting, np.diff(near.indptr) > 0)
    field.fill(_NEIGHBOURS, beside @ near, field.good)
    field.fill(_LOWER, _own(field.linear), field.linear)
    field.fill(_LOWER, between, field.linear)
    everywhere = meetings(shares, samples)
    rest = everywhere.only(field.waiting[everywhere.share], samples.count)
    if len(rest.share):
        field.values[:, rest.share] = averages(shares, samples, rest, True, threads)
        field.how[rest.share] = _AVERAGE
    if borders:
        shift = border_shift(shares, samples, field.values, threads)
        corners_of = np.maximum(np.diff(between.indptr), 1)
        field.values += shift + (between @ shift.T).T / corners_of
    return field.values, field.how


def _fit_all(
    shares: NodeShares, samples: CellSamples, corners: Meetings, threads: int | None
) -> list[Patches]:
    blocks = shares.model.blocks
    orders = np.repeat([b.row.order if b.row else 0 for b in blocks], [len(c) for c in shares.cells])
    order = (
        np.minimum.reduceat(orders[corners.cell], corners.first[:-1]) if len(corners.share) else orders[:0]
    )
    dimension = shares.dimension[corners.share]
    found = []
    for dim, p in sorted(set(zip(dimension.tolist(), order.tolist()))):
        met = corners.only((dimension == dim) & (order == p), samples.count)
        found.append(fit_patches(shares, samples, met, dim, p, threads))
    return found


class _Field:
    """The values that are being filled, and the patches they come from."""

    def __init__(
        self, shares: NodeShares, samples: CellSamples, sets: list[Patches], threads: int | None
    ) -> None:
        n = len(shares)
        self.places = shares.model.points[shares.point] - samples.origin
        self.sets, self.threads = sets, threads
        self.values = np.full((9, n), np.nan)
        self.how = np.full(n, -1, dtype=np.int8)
        self.set_of, self.rank = np.zeros(n, dtype=np.int8), np.zeros(n, dtype=np.int64)
        self.good, self.linear = np.zeros(n, dtype=bool), np.zeros(n, dtype=bool)
        for k, patches in enumerate(sets):
            self.set_of[patches.share] = k
            self.rank[patches.share] = np.arange(len(patches.share))
            self.good[patches.share] = patches.good
            self.linear[patches.share] = patches.linear

    @property
    def waiting(self) -> Mask:
        """Shares without a value so far."""
        return self.how < 0

    def fill(self, code: int, links: Links, usable: Mask) -> None:
        """Give waiting nodes the mean of the usable patches that they are linked to, each at the node."""
        rows = np.flatnonzero(self.waiting & (np.diff(links.indptr) > 0))
        pairs = links[rows].tocoo()
        kept = usable[pairs.col]
        target, source, weight = rows[pairs.row[kept]], pairs.col[kept], pairs.data[kept]
        if not len(target):
            return
        starts = np.flatnonzero(np.concatenate([[True], np.diff(target) > 0]))
        filled, ends = target[starts], np.append(starts[1:], len(target))
        steps = np.searchsorted(starts, np.arange(0, len(target) + _PAIRS, _PAIRS))
        cuts = np.unique(np.minimum(steps, len(starts))).tolist()

        def work(a: int, b: int) -> None:
            part = slice(int(starts[a]), int(ends[b - 1]))
            found = self._evaluate(target[part], source[part]) * weight[part, None]
            first = starts[a:b] - starts[a]
            total = np.add.reduceat(weight[part], first)
            self.values[:, filled[a:b]] = np.add.reduceat(found, first, axis=0).T / total

        over_chunks(work, list(pairwise(cuts)), self.threads)
        self.how[filled] = code

    def _evaluate(self, target: NDArray[np.int64], source: NDArray[np.integer]) -> Floats:
        found = np.empty((len(target), 9))
        for k, patches in enumerate(self.sets):
            mine = np.flatnonzero(self.set_of[source] == k)
            if len(mine):
                found[mine] = patches.evaluate(self.rank[source[mine]], self.places[target[mine]])
        return found


def parents(row: Element) -> Mask:
    """Return `(n_nodes, n_corners)`: the corners of the edge, face or cell inside which each node lies."""
    linear = ELEMENTS[row.shape.name]
    found: Mask = np.abs(linear.shape_functions(row.places)) > 1e-9
    return found


def _own(chosen: Mask) -> Links:
    own = np.flatnonzero(chosen).astype(np.int32)
    return _links([own], [own], len(chosen))


def _links(targets: list[NDArray[np.int32]], sources: list[NDArray[np.int32]], n: int) -> Links:
    target, source = (np.concatenate([np.zeros(0, dtype=np.int32), *parts]) for parts in (targets, sources))
    return sparse.coo_array((np.ones(len(target)), (target, source)), shape=(n, n)).tocsr()


def _between(shares: NodeShares, samples: CellSamples, chosen: Mask) -> Links:
    """Return the links of chosen nodes to the corners between which they lie, as the first of their cells has it."""
    targets, sources = [], []
    todo = chosen.copy()
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        if block.row is None:
            continue
        sound = samples.valid[rows]
        belongs = parents(block.row)
        for local in range(block.row.n_corners, block.row.n_nodes):
            at = np.flatnonzero(todo[cells[:, local]] & sound)
            share, once = np.unique(cells[at, local], return_index=True)
            corners = np.flatnonzero(belongs[local])
            targets.append(np.repeat(share, len(corners)))
            sources.append(cells[at[once]][:, corners].reshape(-1))
            todo[share] = False
    return _links(targets, sources, len(shares))


def _around(shares: NodeShares, samples: CellSamples, chosen: Mask, usable: Mask) -> Links:
    """Return the links of chosen nodes to the usable corners of the cells around them, one for each cell."""
    targets, sources = [], []
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        if block.row is None:
            continue
        corners = cells[:, : block.row.n_corners]
        some = np.flatnonzero(samples.valid[rows] & chosen[cells].any(axis=1) & usable[corners].any(axis=1))
        for local in range(block.row.n_nodes):
            here = some[chosen[cells[some, local]]]
            pairs = usable[corners[here]]
            targets.append(np.repeat(cells[here, local], pairs.sum(axis=1)))
            sources.append(corners[here][pairs])
    return _links(targets, sources, len(shares))
