"""Whether two meshes are one mesh: the same, the same with other numbers, or another one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from unturn.kinematics._symmetric import Floats
from unturn.regions import merge_coincident
from unturn.result import CellBlock
from unturn.verdicts.mesh_view import MeshView, same_blocks

Ints = NDArray[np.int64]
Kind = Literal["same", "renumbered", "different"]

NEAR = 1e-6
"""Share of the model's size within which two points are one."""


@dataclass(frozen=True, eq=False)
class MeshMatch:
    """How a mesh lies on its reference.

    Parameters
    ----------
    kind
        ``same``; ``renumbered``: the same cells and points in another order; ``different``.
    reason
        Why it is different, in words.
    apart
        The largest distance between a point and its counterpart.
    point_of, cell_of
        For each point and cell of the reference, its position in the other mesh; -1: a point of no cell, without
        counterpart. Empty for a different mesh.
    """

    kind: Kind
    reason: str = ""
    apart: float = 0.0
    point_of: Ints | None = None
    cell_of: Ints | None = None


def match(mesh: MeshView, reference: MeshView) -> MeshMatch:
    """Return how a mesh lies on its reference; points count as one within 1e-6 of the model's size.

    Renumbered meshes are matched by the places of the nodes of each cell, so that nodes at one place that belong to
    different parts stay apart.
    """
    tolerance = NEAR * reference.size
    if _same_cells(mesh, reference):
        used = ~np.isin(np.arange(reference.result.n_points), reference.loose_points)
        apart = _largest_distance(mesh.points[used], reference.points[used])
        if apart <= tolerance:
            order = np.arange(reference.result.n_points)
            order[~used] = _loose(mesh, reference, tolerance)
            return MeshMatch("same", "", apart, order, np.arange(reference.result.n_cells))
        how = f"up to {apart:.3g} apart" if np.isfinite(apart) else "that are nowhere in one of them"
        return MeshMatch("different", f"the same cells, with points {how}")
    ours, theirs = _kinds(mesh), _kinds(reference)
    if ours != theirs:
        return MeshMatch("different", f"{_counts(ours)}; the reference has {_counts(theirs)}")
    return _renumbered(mesh, reference, tolerance)


def _same_cells(mesh: MeshView, reference: MeshView) -> bool:
    a, b = mesh.result, reference.result
    return a.n_points == b.n_points and same_blocks(a, b)


def _largest_distance(a: Floats, b: Floats) -> float:
    with np.errstate(invalid="ignore"):
        apart = np.linalg.norm(a - b, axis=1)
    both = ~np.isfinite(a).all(axis=1) & ~np.isfinite(b).all(axis=1)
    apart = np.where(both, 0.0, np.where(np.isnan(apart), np.inf, apart))
    return float(apart.max(initial=0.0))


def _kinds(mesh: MeshView) -> dict[tuple[str, int], int]:
    found: dict[tuple[str, int], int] = {}
    for block in mesh.result.blocks:
        key = block.cell_type, block.connectivity.shape[1]
        found[key] = found.get(key, 0) + len(block)
    return dict(sorted((k, n) for k, n in found.items() if n))


def _counts(kinds: dict[tuple[str, int], int]) -> str:
    return ", ".join(f"{n} {name}" for (name, _), n in kinds.items())


def _renumbered(mesh: MeshView, reference: MeshView, tolerance: float) -> MeshMatch:
    used = np.setdiff1d(np.arange(reference.result.n_points), reference.loose_points)
    theirs = np.setdiff1d(np.arange(mesh.result.n_points), mesh.loose_points)
    if not (np.isfinite(reference.points[used]).all() and np.isfinite(mesh.points[theirs]).all()):
        return MeshMatch("different", "other node numbers, and points that are not finite")
    spot = np.full(reference.result.n_points, -1)
    spot[used] = used[merge_coincident(reference.points[used])[0]]
    if len(used) != len(theirs):
        return MeshMatch(
            "different", f"{len(theirs)} nodes of cells; the reference has {len(used)}, with the same cells"
        )
    apart, nearest = map(np.asarray, cKDTree(reference.points[used]).query(mesh.points[theirs]))
    far = int(np.argmax(apart)) if len(apart) else -1
    if far >= 0 and apart[far] > tolerance:
        return MeshMatch(
            "different",
            f"point {int(theirs[far])} is {apart[far]:.3g} away from every point of the reference",
        )
    spot_of = np.full(mesh.result.n_points, -1)
    spot_of[theirs] = spot[used[nearest]]
    pairs: list[tuple[Ints, Ints]] = []
    point_of = np.full(reference.result.n_points, -1)
    cell_of = np.full(reference.result.n_cells, -1)
    for kind in _kinds(reference):
        a, a_index = _joined(mesh.result.blocks, kind)
        b, b_index = _joined(reference.result.blocks, kind)
        a_local, b_local = (
            np.argsort(spot_of[a], axis=1, kind="stable"),
            np.argsort(spot[b], axis=1, kind="stable"),
        )
        a_nodes, b_nodes = np.take_along_axis(a, a_local, 1), np.take_along_axis(b, b_local, 1)
        a_order, b_order = np.lexsort(spot_of[a_nodes].T[::-1]), np.lexsort(spot[b_nodes].T[::-1])
        if not np.array_equal(spot_of[a_nodes[a_order]], spot[b_nodes[b_order]]):
            return MeshMatch("different", f"the same number of {kind[0]} cells, between other nodes")
        cell_of[b_index[b_order]] = a_index[a_order]
        point_of[b_nodes[b_order]] = a_nodes[a_order]
        pairs.append((b_nodes[b_order], a_nodes[a_order]))
    if not all(np.array_equal(point_of[b], a) for b, a in pairs):
        return MeshMatch(
            "different", "other numbers, with cells or nodes at one place that cannot be told apart"
        )
    point_of[reference.loose_points] = _loose(mesh, reference, tolerance)
    return MeshMatch("renumbered", "", float(apart.max(initial=0.0)), point_of, cell_of)


def _joined(blocks: tuple[CellBlock, ...], kind: tuple[str, int]) -> tuple[Ints, Ints]:
    mine = [b for b in blocks if (b.cell_type, b.connectivity.shape[1]) == kind]
    return np.concatenate([b.connectivity for b in mine]), np.concatenate([b.index for b in mine])


def _loose(mesh: MeshView, reference: MeshView, tolerance: float) -> Ints:
    """Return the counterpart of each point of no cell, or -1: the same position if it is there, else the nearest."""
    ours, theirs = reference.loose_points, mesh.loose_points
    if (
        np.array_equal(ours, theirs)
        and _largest_distance(mesh.points[ours], reference.points[ours]) <= tolerance
    ):
        return ours
    found = np.full(len(ours), -1)
    known = theirs[np.isfinite(mesh.points[theirs]).all(axis=1)]
    sound = np.isfinite(reference.points[ours]).all(axis=1)
    if len(known) and sound.any():
        apart, nearest = map(np.asarray, cKDTree(mesh.points[known]).query(reference.points[ours[sound]]))
        found[sound] = np.where(apart <= tolerance, known[nearest], -1)
    return found
