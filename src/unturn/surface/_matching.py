"""Which faces of solids have no partner: compared by the set of their corner nodes."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element
from unturn.gradient import chunk_ranges, over_chunks
from unturn.model import Model, ModelBlock, _inside_one
from unturn.node_sets import Keys, random_numbers, set_keys, singles
from unturn.regions import Region, find_regions, merge_coincident

Ints = NDArray[np.int64]

# Cells left out for these reasons are there all the same: what they touch is inside the body.
_STILL_THERE = ("ghost", "duplicate")
_OTHER_SOLIDS = re.compile("tetra|hedron|hexa|wedge|pyramid|prism|convex", re.IGNORECASE)


@dataclass(frozen=True, eq=False)
class Solid:
    """A block of solids and which of its cells are there, `(m,)` positions in the block."""

    block: ModelBlock
    there: Ints

    @property
    def row(self) -> Element:
        assert self.block.row is not None
        return self.block.row

    @property
    def corner_lists(self) -> list[list[int]]:
        """Corner nodes of each face."""
        return [list(f.nodes[: f.element.n_corners]) for f in self.row.face_nodes]

    @property
    def n_faces(self) -> int:
        return len(self.row.shape.faces) * len(self.there)

    def connectivity(self, start: int, stop: int) -> Ints:
        conn = self.block.cells.connectivity
        if len(self.there) == len(conn):
            return conn[start:stop]
        return conn[self.there[start:stop]]


@dataclass(frozen=True, eq=False)
class Candidates:
    """Faces that may be free: solid, face number, position among the solid's cells, file position, `(n, 4)` corners.

    The fourth corner of a triangle is its first.
    """

    solid: Ints
    number: Ints
    cell: Ints
    parent: Ints
    corners: Ints
    between: NDArray[np.bool_]

    def only(self, keep: NDArray[np.bool_]) -> Candidates:
        if keep.all():
            return self
        return Candidates(
            self.solid[keep], self.number[keep], self.cell[keep], self.parent[keep], self.corners[keep],
            self.between[keep],
        )  # fmt: skip


def cells_there(model: Model) -> NDArray[np.bool_]:
    """Return which cells stand in the way of a face, `(n_cells,)`; a ghost that repeats a computed cell does not."""
    there = np.ones(model.result.n_cells, dtype=bool)
    ghost = np.zeros_like(there)
    for reason, cells in model.left_out.items():
        there[cells] = False
        if reason in _STILL_THERE:
            ghost[cells] = True
    if not ghost.any():
        return there
    index, centers = [], []
    for which in (there, ghost):
        for block in model.blocks:
            if block.row is not None and block.row.dim == 3:
                mask = which[block.cells.index]
                corners = block.cells.connectivity[mask, : block.row.n_corners]
                index.append(block.cells.index[mask])
                centers.append(model.points[corners].mean(axis=1))
    position = np.concatenate(index)
    own = int(there[position].sum())
    label, _ = merge_coincident(np.concatenate(centers))
    there[position[own:][label[own:] >= own]] = True
    return there


def group_codes(model: Model, groups: Sequence[Region] | None, there: NDArray[np.bool_]) -> Keys:
    """Return for each cell a number that tells in which groups it is, `(n_cells,)`."""
    regions = find_regions(model, there) if groups is None else groups
    numbers = random_numbers(len(regions), seed=1)
    code = np.zeros(model.result.n_cells, dtype=np.uint64)
    for number, region in zip(numbers, regions):
        code[region.cells] += number
    return code


def without_partner(
    model: Model, solids: Sequence[Solid], code: Keys | None, threads: int | None
) -> Candidates:
    """Return the faces whose corners no other face has, node number by node number."""
    table = random_numbers(model.result.n_points, seed=0)
    starts = np.concatenate([[0], np.cumsum([s.n_faces for s in solids])])
    keys = np.empty(starts[-1], dtype=np.uint64)
    for solid, start, stop in zip(solids, starts, starts[1:]):
        _fill_keys(solid, table, code, keys[start:stop].reshape(-1, len(solid.there)), threads)
    ids = singles(keys)
    parts = []
    for s, (solid, start, stop) in enumerate(zip(solids, starts, starts[1:])):
        if start == stop:
            continue
        number, cell = np.divmod(ids[(ids >= start) & (ids < stop)] - start, len(solid.there))
        corners = np.empty((len(cell), 4), dtype=np.int64)
        inside = solid.there[cell]
        for f, nodes in enumerate(solid.corner_lists):
            mask = number == f
            corners[mask] = solid.block.cells.connectivity[inside[mask]][:, (nodes + nodes[:1])[:4]]
        parts.append((np.full(len(cell), s), number, cell, solid.block.cells.index[inside], corners))
    solid_of, number, cell, parent, corners = (np.concatenate(c) for c in zip(*parts))
    return Candidates(solid_of, number, cell, parent, corners, np.zeros(len(cell), dtype=bool))


def _fill_keys(solid: Solid, table: Keys, code: Keys | None, out: Keys, threads: int | None) -> None:
    n_corners = solid.row.n_corners
    lists = solid.corner_lists

    def work(start: int, stop: int) -> None:
        nodes = np.ascontiguousarray(solid.connectivity(start, stop)[:, :n_corners].T)
        for f, corners in enumerate(lists):
            out[f, start:stop] = set_keys(nodes[corners], table)[0]
        if code is not None:
            out[:, start:stop] += code[solid.block.cells.index[solid.there[start:stop]]]

    over_chunks(work, chunk_ranges(len(solid.there), solid.row.n_nodes), threads)


def after_merging(
    model: Model, solids: Sequence[Solid], candidates: Candidates, code: Keys | None
) -> tuple[Candidates, int, float]:
    """Return the faces that remain when nodes at one place are one; the number of nodes merged, and the tolerance."""
    used, where = np.unique(candidates.corners, return_inverse=True)
    label, tolerance = merge_coincident(model.points[used])
    if len(candidates.parent) < sum(s.n_faces for s in solids):
        label = _same_motion(label, model.displacement.values[used])
    merged = int((label != np.arange(len(used))).sum())
    corners = label[where.reshape(candidates.corners.shape)]
    keys, count = set_keys(np.ascontiguousarray(corners.T), random_numbers(len(used), seed=2))
    keep = count > 2
    if merged:
        alone = np.zeros(len(keep), dtype=bool)
        alone[singles(keys if code is None else keys + code[candidates.parent])] = True
        keep &= alone
    merged_nodes = Candidates(
        candidates.solid,
        candidates.number,
        candidates.cell,
        candidates.parent,
        used[corners],
        candidates.between,
    )
    return merged_nodes.only(keep), merged, tolerance


def _same_motion(label: Ints, displacement: NDArray[np.float64]) -> Ints:
    """Return the labels with nodes taken apart that lie at one place and move differently."""
    several = np.flatnonzero(np.bincount(label, minlength=len(label))[label] > 1)
    apart: Ints = np.arange(len(label))
    if len(several):
        together = np.column_stack([label[several], displacement[several] + 0.0])
        _, first, group = np.unique(together, axis=0, return_index=True, return_inverse=True)
        apart[several] = several[first[group.reshape(-1)]]
    return apart


def mark_between(model: Model, candidates: Candidates) -> Candidates:
    """Return the faces, those marked that another cell has too: they were kept because its group is another."""
    keys, _ = set_keys(
        np.ascontiguousarray(candidates.corners.T), random_numbers(model.result.n_points, seed=0)
    )
    between = np.ones(len(keys), dtype=bool)
    between[singles(keys)] = False
    return replace(candidates, between=between)


def covered_by_other_solids(model: Model, corners: Ints) -> NDArray[np.bool_]:
    """Return which faces lie on a solid that cannot be computed: all their corners are nodes of it."""
    covered = np.zeros(len(corners), dtype=bool)
    others = [b.cells for b in model.blocks if b.row is None and _OTHER_SOLIDS.search(b.cells.cell_type)]
    if not others:
        return covered
    near = np.zeros(model.result.n_points, dtype=bool)
    for block in others:
        near[block.connectivity] = True
    maybe = np.flatnonzero(near[corners].all(axis=1))
    if len(maybe):
        covered[maybe] = _inside_one(corners[maybe], others, model.result.n_points)
    return covered
