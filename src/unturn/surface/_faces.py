"""The faces that solids show: those that one cell alone has, and on request those between different groups."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element
from unturn.errors import UsageError
from unturn.gradient import ElementChunk, chunk_ranges
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock
from unturn.regions import Region
from unturn.result import CellBlock, Result
from unturn.surface._matching import (
    Candidates,
    Ints,
    Solid,
    after_merging,
    cells_there,
    covered_by_other_solids,
    group_codes,
    mark_between,
    without_partner,
)

_BROKEN = "tangled or without volume"


@dataclass(frozen=True, eq=False)
class FaceBlock:
    """Faces of one element type.

    Parameters
    ----------
    row
        The face's own element.
    connectivity
        `(n, n_nodes)` in the order of that element; its normal (first reference direction x second) points out of the
        parent, also where the parent's Jacobian is negative.
    parent
        `(n,)` file position of the cell.
    number
        `(n,)` position of the face in the parent's `Element.face_nodes`.
    between
        `(n,)` whether a cell of another group is on the other side.
    """

    row: Element
    connectivity: Ints
    parent: Ints
    number: Ints
    between: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.parent)


@dataclass(frozen=True, eq=False)
class Faces:
    """Faces of the solids of a model.

    Parameters
    ----------
    model
        The model.
    blocks
        One block for each face element; faces of a block in the order of parent and number.
    left_out
        ``{reason: file positions}`` of cells whose free faces are not given because the cell itself cannot be computed.
    merged
        Number of nodes at free faces that were taken for another one at the same place.
    tolerance
        Distance within which two nodes are at the same place.
    """

    model: Model
    blocks: tuple[FaceBlock, ...]
    left_out: dict[str, Ints] = field(default_factory=dict)
    merged: int = 0
    tolerance: float = 0.0

    def __len__(self) -> int:
        return sum(len(b) for b in self.blocks)


def free_faces(
    model: Model,
    groups: Sequence[Region] | None = None,
    between_groups: bool = False,
    threads: int | None = None,
) -> Faces:
    """Return the free faces of the computed solids of a model.

    Parameters
    ----------
    model
        See `build_model`.
    groups
        The groups between which faces are given; None: those of `find_regions`. Only with `between_groups`.
    between_groups
        Also give the faces between cells of different groups, once for each of the two cells.
    threads
        Number of threads; None for all processors.

    Notes
    -----
    A face is free when no other cell has the same corners. Deleted and hidden cells leave a free face behind; ghost
    cells, tangled ones, and solids that cannot be computed (polyhedra) do not. Nodes at one place count as one node when
    no two cells share a face, or when their displacements are the same number too: a writer that repeats nodes makes no
    surface, a crack that opens does. Faces with less than three corners, of collapsed cells, are none. Cells that meet
    without common corners (hanging nodes, tied meshes of different size) both show their face.

    Raises
    ------
    UsageError
        No solid is computed.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result
    >>> from unturn.model import build_model
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0], [1, 1, 1]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3], [1, 2, 3, 4]]), np.array([0, 1]))
    >>> faces = free_faces(build_model(Result(points, (block,), {"u": 0 * points})))
    >>> len(faces), faces.blocks[0].row.name
    (6, 'triangle')
    """
    there = cells_there(model)
    solids = [
        Solid(b, np.flatnonzero(there[b.cells.index]))
        for b in model.blocks
        if b.row is not None and b.row.dim == 3
    ]
    if not any(len(s.block.active) for s in solids):
        raise UsageError("free faces need solid cells that are computed; this mesh has none.")
    code = group_codes(model, groups, there) if between_groups else None
    candidates = without_partner(model, solids, code, threads)
    candidates, merged, tolerance = after_merging(model, solids, candidates, code)
    if between_groups:
        candidates = mark_between(model, candidates)
    candidates = candidates.only(~covered_by_other_solids(model, candidates.corners))
    active = np.zeros(model.result.n_cells, dtype=bool)
    for solid in solids:
        active[solid.block.index] = True
    candidates = candidates.only(active[candidates.parent])
    blocks, broken = _assemble(model, solids, candidates)
    return Faces(model, blocks, {_BROKEN: broken} if len(broken) else {}, merged, tolerance)


def _assemble(
    model: Model, solids: Sequence[Solid], candidates: Candidates
) -> tuple[tuple[FaceBlock, ...], Ints]:
    """Return the faces by element, and the parents that are broken."""
    parts: dict[Element, list[tuple[Ints, ...]]] = {}
    broken = []
    for s, solid in enumerate(solids):
        of_solid = np.flatnonzero(candidates.solid == s)
        inside = solid.there[candidates.cell[of_solid]]
        low, high = _jacobian_range(model, solid, inside)
        bad = ~((low > 0) | (high < 0))  # NaN too: coordinates that are not finite
        broken.append(candidates.parent[of_solid[bad]])
        for f, face in enumerate(solid.row.face_nodes):
            mask = ~bad & (candidates.number[of_solid] == f)
            pick = of_solid[mask]
            conn = solid.block.cells.connectivity[inside[mask]][:, list(face.nodes)]
            mirrored = high[mask] < 0
            conn[mirrored] = conn[mirrored][:, _turned_over(face.element)]
            part = (conn, candidates.parent[pick], candidates.number[pick], candidates.between[pick])
            parts.setdefault(face.element, []).append(part)
    blocks = []
    for row, pieces in parts.items():
        columns = [np.concatenate(c) for c in zip(*pieces)]
        order = np.lexsort((columns[2], columns[1]))
        if len(order):
            blocks.append(FaceBlock(row, *(c[order] for c in columns)))
    return tuple(blocks), np.unique(np.concatenate(broken))


def _jacobian_range(model: Model, solid: Solid, cells: Ints) -> tuple[Floats, Floats]:
    """Return for some cells of a solid the smallest and largest Jacobian determinant at the quadrature points."""
    distinct, inverse = np.unique(cells, return_inverse=True)
    low, high = np.full(len(distinct), np.inf), np.full(len(distinct), -np.inf)
    gradients = solid.row.shape_gradients(solid.row.quadrature.points)
    for start, stop in chunk_ranges(len(distinct), solid.row.n_nodes):
        conn = solid.block.cells.connectivity[distinct[start:stop]]
        chunk = ElementChunk(model.fields, conn, solid.row, None)
        for at in gradients:
            with np.errstate(invalid="ignore", over="ignore"):
                det = chunk.measure(at)
            low[start:stop] = np.minimum(low[start:stop], det)
            high[start:stop] = np.maximum(high[start:stop], det)
    return low[inverse], high[inverse]


def _turned_over(row: Element) -> list[int]:
    """Return the order of a face's nodes that turns its normal over."""
    places = row.places[:, ::-1] if row.shape.name == "triangle" else row.places * [-1.0, 1.0]
    distance = np.linalg.norm(row.places[None] - places[:, None], axis=-1)
    return [int(n) for n in distance.argmin(axis=1)]


def faces_model(faces: Faces, poisson: float | None = None) -> Model:
    """Return the faces as a model of their own, of surfaces with the points of the file; rigid motion is taken out alike.

    Parameters
    ----------
    faces
        See `free_faces`; cell k of the model is face k, counted over the blocks.
    poisson
        Poisson's ratio of the material.
    """
    model = faces.model
    blocks, start = [], 0
    for b in faces.blocks:
        index = np.arange(start, start + len(b))
        start += len(b)
        cells = CellBlock(b.row.name, b.connectivity, index)
        blocks.append(ModelBlock(cells, b.row, "surface", np.arange(len(b))))
    parent = np.concatenate([b.parent for b in faces.blocks])
    return replace(
        model,
        result=Result(model.result.points, tuple(b.cells for b in blocks), path=model.result.path),
        blocks=tuple(blocks),
        left_out={},
        back_of=None if model.back_of is None else model.back_of[parent],
        poisson=poisson,
    )
