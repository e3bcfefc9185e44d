"""The gradient of every element at the points where it is most accurate."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from unturn.fields import compute_fields
from unturn.gradient import Samples, chunk_ranges, over_chunks, sample_points
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock
from unturn.recovery._nodes import Ints, NodeShares

_PER_CHUNK = 8192
PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2))
"""Components of a symmetric tensor, in the order of the file arrays."""


@dataclass(frozen=True, eq=False)
class CellSamples:
    """Gradients sampled in the active cells of a model, block after block.

    Attributes
    ----------
    H
        `(9, n_samples)` displacement gradient, row-major; zero instead of the unknown third direction of a plane mesh.
    x
        `(3, n_samples)` where, relative to `origin`.
    weight
        `(n_samples,)` share of the element's volume.
    tangent
        `(6, n_samples)` projector onto the tangent plane or line; None when every cell is solid or plane.
    first
        `(n_cells + 1,)` first sample of each active cell, counted over the blocks.
    volume
        `(n_cells,)` of each active cell.
    valid
        `(n_cells,)` whether its gradient can be used.
    origin
        `(3,)`.
    """

    H: Floats
    x: Floats
    weight: Floats
    tangent: Floats | None
    first: Ints
    volume: Floats
    valid: NDArray[np.bool_]
    origin: Floats

    @cached_property
    def count(self) -> Ints:
        """Number of samples of each cell."""
        return np.diff(self.first)


def sample_cells(model: Model, threads: int | None = None, finite: bool = False) -> CellSamples:
    """Return the gradients of the active cells at the accurate points of their elements.

    With `finite` that is `F - I` as finite measures complete it, which a turn of the whole leaves smooth along curved
    surfaces and lines.
    """
    blocks = [b for b in model.blocks if b.row is not None]
    rules = [sample_points(b.row, b.row.accurate.points) for b in blocks if b.row is not None]
    counts = [np.full(len(b.active), len(r.functions)) for b, r in zip(blocks, rules)]
    first = np.concatenate([[0], np.cumsum(np.concatenate(counts))]).astype(np.int64)
    volume, valid = _volume(model, threads)
    curved = any(b.kind in ("surface", "line") for b in blocks if len(b.active))
    n = int(first[-1])
    found = CellSamples(
        np.empty((9, n)),
        np.empty((3, n)),
        np.empty(n),
        np.empty((6, n)) if curved else None,
        first,
        volume,
        valid,
        _origin(model),
    )
    start = 0
    for block, rule in zip(blocks, rules):
        _sample_block(model, block, rule, found, start, threads, finite)
        start += len(block.active)
    if model.plane is not None and model.plane.model is None:
        found.H[4 * model.plane.normal] = 0.0
    return found


def _origin(model: Model) -> Floats:
    rows = model.fields.rows[:3]
    known = rows[:, np.isfinite(rows).all(axis=0)]
    middle: Floats = 0.5 * (known.min(axis=1, initial=np.inf) + known.max(axis=1, initial=-np.inf))
    return middle


def _volume(model: Model, threads: int | None) -> tuple[Floats, NDArray[np.bool_]]:
    """Return the volume of the active cells, and whether they are sound."""
    fields = compute_fields(model, ["element_volume"], threads=threads)
    sound = np.ones(model.result.n_cells, dtype=bool)
    for cells in fields.left_out.values():
        sound[cells] = False
    index = np.concatenate([b.index for b in model.blocks])
    volume = fields.arrays["element_volume"][index]
    return volume, sound[index] & (volume > 0)


def _sample_block(
    model: Model,
    block: ModelBlock,
    rule: Samples,
    found: CellSamples,
    first_cell: int,
    threads: int | None,
    finite: bool,
) -> None:
    assert block.row is not None
    connectivity, index, q = block.connectivity, block.index, len(rule.functions)
    weights = block.row.accurate.weights
    base = int(found.first[first_cell])

    def work(start: int, stop: int) -> None:
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            chunk = model.chunk(block, connectivity[start:stop], index[start:stop])
            total = np.zeros(stop - start)
            usable = np.ones(stop - start, dtype=bool)
            for s in range(q):
                to = slice(base + start * q + s, base + stop * q, q)
                point = chunk.at(rule.gradients[s], rule.functions[s])
                found.H[:, to] = (chunk.finite(point) if finite else point.H).reshape(9, -1)
                for i in range(3):
                    found.x[i, to] = chunk.interpolate(rule.functions[s], i) - found.origin[i]
                found.weight[to] = weights[s] * point.weight
                total += found.weight[to]
                usable &= np.isfinite(point.inverse[0, 0])
                if found.tangent is not None:
                    found.tangent[:, to] = _projector(point.inverse, point.tangents)
            found.weight[base + start * q : base + stop * q] /= np.repeat(total, q)
        found.valid[first_cell + start : first_cell + stop] &= usable

    over_chunks(work, chunk_ranges(len(index), connectivity.shape[1]), threads)


def _projector(inverse: Floats, tangents: Floats | None) -> Floats:
    """Return the projector `sum_k t_k (x) grad xi_k` onto the tangent space; the identity in solids."""
    if tangents is None:
        out = np.zeros((6, inverse.shape[-1]))
        out[:3] = 1.0
        return out
    return np.stack([(tangents[:, i] * inverse[:, j]).sum(axis=0) for i, j in PAIRS])


@dataclass(frozen=True, eq=False)
class Meetings:
    """Cells that meet at shares of nodes, sorted by share.

    Attributes
    ----------
    share
        `(n,)` shares at which any cell meets.
    first
        `(n + 1,)` where the cells of each begin.
    cell
        Active cell, counted over the blocks.
    local
        Which node of that cell it is.
    samples
        `(n + 1,)` number of samples before each share.
    """

    share: Ints
    first: Ints
    cell: NDArray[np.int32]
    local: NDArray[np.int16]
    samples: Ints

    def ranges(self) -> list[tuple[int, int]]:
        """Ranges of shares with about as many samples as fit the cache."""
        steps = np.arange(0, self.samples[-1] + _PER_CHUNK, _PER_CHUNK)
        ends = np.unique(np.minimum(np.searchsorted(self.samples, steps), len(self.share)))
        return list(pairwise(ends.tolist()))

    def only(self, chosen: NDArray[np.bool_], count: Ints) -> Meetings:
        """Return the meetings at some of the shares, `chosen` a mask over `share`."""
        if chosen.all():
            return self
        pairs = np.repeat(chosen, np.diff(self.first))
        lengths = np.diff(self.first)[chosen]
        return _meetings(self.share[chosen], lengths, self.cell[pairs], self.local[pairs], count)

    def gather(self, a: int, b: int, samples: CellSamples) -> Gathered:
        """Return the samples of the cells that meet at shares `a` to `b`."""
        pairs = slice(int(self.first[a]), int(self.first[b]))
        cell = self.cell[pairs]
        q = samples.count[cell]
        at = np.repeat(samples.first[cell], q)
        ends = np.cumsum(q)
        within = np.arange(len(at)) - np.repeat(ends - q, q)
        lengths = self.samples[a + 1 : b + 1] - self.samples[a:b]
        return Gathered(pairs, q, at + within, within, self.samples[a:b] - self.samples[a], lengths)


@dataclass(frozen=True, eq=False)
class Gathered:
    """Samples of a range of shares: pairs, samples of each pair, which they are, their rank in the cell; by share."""

    pairs: slice
    of_pair: Ints
    at: Ints
    within: Ints
    starts: Ints
    lengths: Ints

    def sums(self, values: Floats) -> Floats:
        """Return the sum of `(..., n_samples)` over the samples of each share."""
        total: Floats = np.add.reduceat(values, self.starts, axis=-1)
        return total

    def spread(self, values: Floats) -> Floats:
        """Return `(..., n_shares)` repeated for each sample."""
        return np.repeat(values, self.lengths, axis=-1)


def _meetings(
    share: Ints, lengths: Ints, cell: NDArray[np.int32], local: NDArray[np.int16], count: Ints
) -> Meetings:
    first = np.concatenate([[0], np.cumsum(lengths)])
    before = np.concatenate([[0], np.cumsum(count[cell])])
    return Meetings(share, first, cell, local, before[first])


def meetings(shares: NodeShares, samples: CellSamples, corners_only: bool = False) -> Meetings:
    """Return which usable cells meet at which share; with `corners_only` at their corners alone."""
    nodes, widths, local = [], [], []
    for block, cells, rows in zip(shares.model.blocks, shares.cells, shares.rows):
        n = block.row.n_corners if corners_only and block.row is not None else cells.shape[1]
        usable = samples.valid[rows]
        nodes.append(cells[usable, :n].reshape(-1))
        widths.append(np.where(usable, n, 0))
        local.append(np.tile(np.arange(n, dtype=np.int16), int(usable.sum())))
    ends = np.concatenate([[0], np.cumsum(np.concatenate(widths))]).astype(np.int32)
    shape = (len(ends) - 1, len(shares))
    table = sparse.csr_array((np.concatenate(local), np.concatenate(nodes), ends), shape=shape).T.tocsr()
    lengths = np.diff(table.indptr)
    met = np.flatnonzero(lengths)
    return _meetings(met, lengths[met], table.indices, table.data, samples.count)
