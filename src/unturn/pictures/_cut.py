"""The face of a cut through solids, by the elements' own shape functions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element, element, not_computable
from unturn.pictures._division import tetrahedra_of
from unturn.pictures._surface import POSITION, Skin, named, vtk_points
from unturn.result import Result

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
DISTANCE = "distance"
_MOST_PIECES = 1_500_000  # tetrahedra into which the cells on the plane are divided, about
_ON_IT = 1e-9  # share of the extent within which a corner counts as lying on the plane
_BULGE = 0.2  # share of a curved cell's extent by which it may reach beyond its nodes


@dataclass(frozen=True, eq=False)
class Section:
    """Triangles of a cut, each cell with points of its own.

    Attributes
    ----------
    points
        `(n, 3)`.
    nodal
        `(n,)` values by name.
    triangles
        `(m, 3)` positions of points.
    cells
        `(m,)` file positions.
    rim
        `(k, 2)` the edges of each cell's piece.
    """

    points: Floats
    nodal: dict[str, Floats]
    triangles: Ints
    cells: Ints
    rim: Ints


def cut(skin: Skin, section: Section) -> Skin:
    """Return what is left of a skin where ``distance`` is below zero, closed by the section."""
    from vtkmodules.vtkFiltersCore import vtkAppendPolyData

    closed = vtkAppendPolyData()
    closed.AddInputData(_clipped(skin.surface))
    closed.AddInputData(_poly(section, section.triangles, POSITION))
    closed.Update()
    edges = None
    if skin.edges is not None:
        joined = vtkAppendPolyData()
        joined.AddInputData(_clipped(skin.edges))
        joined.AddInputData(_poly(section, section.rim))
        joined.Update()
        edges = joined.GetOutput()
    return replace(skin, surface=closed.GetOutput(), edges=edges, body=_clipped(skin.body))


def _clipped(data: Any) -> Any:
    from vtkmodules.vtkFiltersCore import vtkClipPolyData

    data.GetPointData().SetActiveScalars(DISTANCE)
    clip = vtkClipPolyData()
    clip.SetInputData(data)
    clip.SetValue(0.0)
    clip.InsideOutOn()
    clip.Update()
    return clip.GetOutput()


def _poly(section: Section, cells: Ints, position: str = "") -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData

    data = vtkPolyData()
    data.SetPoints(vtk_points(section.points))
    held = vtkCellArray()
    offsets = np.arange(0, cells.size + 1, cells.shape[1], dtype=np.int64)
    held.SetData(numpy_to_vtk(offsets, deep=True), numpy_to_vtk(cells.reshape(-1), deep=True))
    (data.SetLines if cells.shape[1] == 2 else data.SetPolys)(held)
    if position:
        data.GetCellData().AddArray(named(position, section.cells))
    for name, values in section.nodal.items():
        data.GetPointData().AddArray(named(name, values))
    return data


def section_of(
    result: Result, keep: NDArray[np.bool_], points: Floats, nodal: Mapping[str, Floats]
) -> Section:
    """Return the section of the solids `keep` at ``nodal["distance"]`` = 0.

    Parameters
    ----------
    result
        The mesh.
    keep
        `(n_cells,)` which cells there are.
    points
        `(n_points, 3)` where the points are put.
    nodal
        `(n_points,)` values by name that the section carries, among them ``distance`` from the plane.

    Notes
    -----
    Cells are divided into small tetrahedra in reference coordinates, whose corners the shape functions map; the plane
    cuts those straight. Cells that lie on the plane with a face belong to the side that is kept.
    """
    distance = nodal[DISTANCE]
    blocks = []
    for block in result.blocks:
        if not_computable(block.cell_type, block.connectivity.shape[1]) is not None:
            continue
        row = element(block.cell_type, block.connectivity.shape[1])
        if row.dim == 3:
            there = np.flatnonzero(keep[block.index] & _straddles(distance[block.connectivity], row))
            blocks.append((row, block.connectivity[there], block.index[there]))
    pieces = sum(len(index) * len(tetrahedra_of(row.shape, 0)[1]) for row, _, index in blocks)
    finest = int(np.log(_MOST_PIECES / max(pieces, 1)) / np.log(8))
    parts = [
        _cut_block(row, conn, index, points, nodal, max(0, min(finest, 1 if row.order == 1 else 3)))
        for row, conn, index in blocks
        if len(index)
    ]
    return _joined(parts, list(nodal))


def _straddles(distance: Floats, row: Element) -> NDArray[np.bool_]:
    low, high = distance.min(axis=1), distance.max(axis=1)
    slack = (_ON_IT if row.order == 1 else _BULGE) * (high - low)
    return np.asarray((low - slack < 0) & (high + slack >= 0))


def _joined(parts: list[Section], names: list[str]) -> Section:
    if not parts:
        none = np.zeros((0, 3))
        return Section(
            none,
            {n: none[:, 0] for n in names},
            none.astype(np.int64),
            none[:, 0].astype(np.int64),
            none[:, :2].astype(np.int64),
        )
    shift = np.cumsum([0, *(len(p.points) for p in parts)])
    return Section(
        np.concatenate([p.points for p in parts]),
        {n: np.concatenate([p.nodal[n] for p in parts]) for n in names},
        np.concatenate([p.triangles + s for p, s in zip(parts, shift)]),
        np.concatenate([p.cells for p in parts]),
        np.concatenate([p.rim + s for p, s in zip(parts, shift)]),
    )


def _cut_block(
    row: Element, conn: Ints, index: Ints, points: Floats, nodal: Mapping[str, Floats], level: int
) -> Section:
    corners, tetrahedra = tetrahedra_of(row.shape, level)
    N = row.shape_functions(corners)
    names = list(nodal)
    held = np.stack([*(points[:, k] for k in range(3)), *(nodal[n] for n in names)])
    # the corners of all cells, one cell after another
    at = np.einsum("pa,vca->vcp", N, held[:, conn]).reshape(len(held), -1)
    distance = at[3 + names.index(DISTANCE)]
    near = _ON_IT * float(np.abs(nodal[DISTANCE][conn]).max())
    above = distance >= -near
    tets = (tetrahedra[None] + np.arange(len(conn))[:, None, None] * len(corners)).reshape(-1, 4)
    owner = np.repeat(np.arange(len(conn)), len(tetrahedra))
    ends, who = _crossings(tets, above[tets], owner)
    ends = ends.reshape(-1, 2)
    # where the plane goes through a corner, that is one point and not one for each edge
    ends[:, 0] = np.where(distance[ends[:, 1]] <= near, ends[:, 1], ends[:, 0])
    pair, place = np.unique(ends, axis=0, return_inverse=True)
    below, over = distance[pair[:, 0]], distance[pair[:, 1]]
    t = np.clip(below / np.where(below == over, 1.0, below - over), 0.0, 1.0)
    found = at[:, pair[:, 0]] * (1 - t) + at[:, pair[:, 1]] * t
    triangles = place.reshape(-1, 3)
    real = (triangles != triangles[:, [1, 2, 0]]).all(axis=1)
    triangles, who = triangles[real], who[real]
    values = {n: found[3 + k] for k, n in enumerate(names)}
    return Section(np.ascontiguousarray(found[:3].T), values, triangles, index[who], _single_edges(triangles))


def _crossings(tets: Ints, above: NDArray[np.bool_], owner: Ints) -> tuple[Ints, Ints]:
    """Return `(m, 3, 2)` the ends (below, above) of the tetrahedra's edges that make triangles, and their owners."""
    ends, owners = [], []
    for code in range(1, 15):
        up = [k for k in range(4) if code >> k & 1]
        down = [k for k in range(4) if k not in up]
        rows = np.flatnonzero((above @ np.array([1, 2, 4, 8])) == code)
        if not len(rows):
            continue
        edges = [(d, u) for d in down for u in up]
        # two and two: the four crossings in the order 0, 1, 3, 2 go round the quadrangle
        for pick in ((0, 1, 2),) if len(edges) == 3 else ((0, 1, 3), (0, 3, 2)):
            ends.append(tets[rows][:, [edges[k] for k in pick]])
            owners.append(owner[rows])
    if not ends:
        return np.zeros((0, 3, 2), dtype=np.int64), np.zeros(0, dtype=np.int64)
    return np.concatenate(ends), np.concatenate(owners)


def _single_edges(triangles: Ints) -> Ints:
    """Return the edges that one triangle alone has."""
    edges = np.sort(np.concatenate([triangles[:, [a, b]] for a, b in ((0, 1), (1, 2), (2, 0))]), axis=1)
    distinct, count = np.unique(edges, axis=0, return_counts=True)
    return np.asarray(distinct[count == 1])
