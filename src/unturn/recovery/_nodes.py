"""Which cells meet at which node, group by group: the bookkeeping behind everything at nodes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.regions import merge_coincident

Ints = NDArray[np.int64]
Shares = NDArray[np.int32]


@dataclass(frozen=True, eq=False)
class NodeShares:
    """The shares of every node: what the cells of one group and one dimension have of it.

    Shares are sorted by node. A node inside a group has one; a node on a border has one for each group.

    Attributes
    ----------
    model
        The model.
    point
        `(n_shares,)` the node: smallest position among coincident points.
    group
        `(n_shares,)` group of its cells.
    dimension
        `(n_shares,)` their dimension: groups never mix dimensions.
    cells
        For each block of the model, `(n_active, n_nodes)` the share that each node of each active cell has.
    label
        `(n_points,)` smallest position among the points that coincide with each.
    tolerance
        Distance within which points coincide, length unit of the file.
    apart
        Number of points that coincide with another but move differently (a crack, a contact): they stay apart.
    """

    model: Model
    point: Ints
    group: Ints
    dimension: NDArray[np.int8]
    cells: tuple[Shares, ...]
    label: Ints
    tolerance: float
    apart: int

    def __len__(self) -> int:
        return len(self.point)

    @cached_property
    def rows(self) -> tuple[slice, ...]:
        """Which of the active cells, counted over the blocks, each block has."""
        ends = np.cumsum([len(c) for c in self.cells]).tolist()
        return tuple(slice(end - len(c), end) for end, c in zip(ends, self.cells))

    @cached_property
    def merged(self) -> int:
        """Number of points that were merged into another."""
        return int((self.label != np.arange(len(self.label))).sum())

    @cached_property
    def spots(self) -> Spots:
        """The shares of every point of the file, each point with the groups of its own cells alone."""
        kinds, kind_of = _kinds(self.group, self.dimension)
        node = _flat(self.model, [b.connectivity for b in self.model.blocks])
        share = np.concatenate([c.reshape(-1) for c in self.cells])
        first, _, index = _unique_pairs(node, kind_of[share], len(self.label), len(kinds))
        shares = np.empty(int(first[-1]), dtype=np.int64)
        shares[index] = share
        point = np.repeat(np.arange(len(self.label)), np.diff(first))
        return Spots(point, shares, _unflat(index, self.cells))


@dataclass(frozen=True, eq=False)
class Spots:
    """Points of the file, duplicated where groups meet: what a mesh needs to show every group's own value.

    Attributes
    ----------
    point
        `(n_spots,)` position of the point in the file, sorted.
    share
        `(n_spots,)` the share it has.
    cells
        For each block of the model, `(n_active, n_nodes)` connectivity of the active cells in spots.
    """

    point: Ints
    share: Ints
    cells: tuple[Shares, ...]


def node_shares(model: Model, groups: NDArray[np.integer]) -> NodeShares:
    """Return the shares of the nodes of a model.

    Parameters
    ----------
    model
        See `build_model`.
    groups
        `(n_cells,)` the group of each cell in file order, any integers.

    Raises
    ------
    UsageError
        The groups are not one integer a cell.
    """
    groups = np.asarray(groups)
    if groups.shape != (model.result.n_cells,) or groups.dtype.kind not in "iu":
        raise UsageError(
            f"groups have shape {groups.shape} and type {groups.dtype}; expected one integer for each of the "
            f"{model.result.n_cells} cells."
        )
    blocks = model.blocks
    node = _flat(model, [b.connectivity for b in blocks])
    label, tolerance, apart = _coincident(model, node)
    group = np.concatenate([np.asarray(groups[b.index], dtype=np.int64) for b in blocks])
    dimension = np.concatenate(
        [np.full(len(b.active), b.row.dim if b.row else 0, dtype=np.int8) for b in blocks]
    )
    kinds, kind_of_cell = _kinds(group, dimension)
    widths = np.concatenate([np.full(len(b.active), b.cells.connectivity.shape[1]) for b in blocks])
    first, kind, index = _unique_pairs(
        label[node], np.repeat(kind_of_cell, widths), len(model.points), len(kinds)
    )
    shapes = [np.empty((len(b.active), b.cells.connectivity.shape[1]), dtype=np.int8) for b in blocks]
    return NodeShares(
        model,
        np.repeat(np.arange(len(model.points)), np.diff(first)),
        kinds[kind, 1],
        kinds[kind, 0].astype(np.int8),
        _unflat(index, shapes),
        label,
        tolerance,
        apart,
    )


def _flat(model: Model, parts: list[Ints]) -> NDArray[np.int32]:
    return np.concatenate([np.asarray(p, dtype=np.int32).reshape(-1) for p in parts])


def _unflat(
    index: Shares, like: tuple[NDArray[np.integer], ...] | list[NDArray[np.int8]]
) -> tuple[Shares, ...]:
    ends = np.cumsum([c.size for c in like])
    return tuple(index[e - c.size : e].reshape(c.shape) for e, c in zip(ends, like))


def _kinds(group: Ints, dimension: NDArray[np.int8]) -> tuple[Ints, NDArray[np.int32]]:
    """Return the distinct `(dimension, group)` and which of them each entry has."""
    distinct, code = np.unique(group, return_inverse=True)
    kinds, kind = np.unique(dimension * np.int64(len(distinct)) + code, return_inverse=True)
    return np.stack([kinds // len(distinct), distinct[kinds % len(distinct)]], axis=1), kind.astype(np.int32)


def _unique_pairs(
    node: NDArray[np.integer], kind: NDArray[np.int32], n_nodes: int, n_kinds: int
) -> tuple[Ints, NDArray[np.int32], Shares]:
    """Return the distinct `(node, kind)`, sorted: row starts, kinds, and which of them each pair is."""
    ones = np.ones(len(node), dtype=np.int32)
    table = sparse.coo_array((ones, (node, kind)), shape=(n_nodes, n_kinds)).tocsr()
    first, kinds = table.indptr, table.indices
    index = first[node].astype(np.int32)
    several = (np.diff(first) > 1)[node]
    if several.any():
        keys = np.repeat(np.arange(n_nodes), np.diff(first)) * n_kinds + kinds
        index[several] = np.searchsorted(keys, node[several].astype(np.int64) * n_kinds + kind[several])
    return first.astype(np.int64), kinds, index


def coincident_points(model: Model) -> Ints:
    """Return for each point the smallest position among the points that recovery takes for one with it."""
    return _coincident(model, _flat(model, [b.connectivity for b in model.blocks]))[0]


def _coincident(model: Model, node: NDArray[np.int32]) -> tuple[Ints, float, int]:
    """Return for each point the smallest position among points at its place with its displacement."""
    used = np.zeros(len(model.points), dtype=bool)
    used[node] = True
    where = np.flatnonzero(used)
    label = np.arange(len(model.points))
    same, tolerance = _merged(model.points[where])
    several = np.flatnonzero((np.bincount(same, minlength=len(where)) > 1)[same])
    if not len(several):
        return label, tolerance, 0
    where, same = where[several], same[several]
    u = model.fields.rows[3:, where].T
    known = np.isfinite(u).all(axis=1)
    size = float(np.ptp(u[known], axis=0).max(initial=0.0)) if known.any() else 0.0
    _, first, place = np.unique(same, return_index=True, return_inverse=True)
    # places by number and displacements, each as a share of their range: equal within a billionth of it
    together, _ = _merged(np.column_stack([place / len(first), u / size if size > 0 else u]))
    label[where] = where[together]
    apart = known & (label[where] != where[first][place])
    return label, tolerance, int(apart.sum())


def _merged(values: Floats) -> tuple[Ints, float]:
    """Return what `merge_coincident` does, equal rows first: of a node written once per element that leaves one."""
    order = np.lexsort(values.T)
    fresh = np.ones(len(order), dtype=bool)
    fresh[1:] = (values[order[1:]] != values[order[:-1]]).any(axis=1)
    first = np.empty(len(order), dtype=np.int64)
    first[order] = order[fresh][np.cumsum(fresh) - 1]
    distinct = np.unique(first)
    label, tolerance = merge_coincident(values[distinct])
    return distinct[label][np.searchsorted(distinct, first)], tolerance
