"""A VTK data set as a `Result`, and a `Result` as a VTK data set."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from vtkmodules.vtkCommonCore import vtkPoints
from vtkmodules.vtkCommonDataModel import (
    vtkDataSet,
    vtkImageData,
    vtkPointSet,
    vtkPolyData,
    vtkRectilinearGrid,
    vtkStructuredGrid,
    vtkUnstructuredGrid,
)

from unturn.errors import InputError, UsageError
from unturn.io._node_order import checked_order
from unturn.io.vtk_arrays import from_numpy, read_attributes, to_numpy, update_attributes
from unturn.io.vtk_cells import blocks_of_poly, blocks_of_structured, blocks_of_unstructured, grid_from_blocks
from unturn.io.vtk_types import cell_number
from unturn.result import Array, CellBlock, Result, Steps

GHOSTS = "vtkGhostType"
# Source: VTK 9.7, vtkDataSetAttributes.h, CellGhostTypes and PointGhostTypes.
_CELL_REASONS = {1: "ghost", 8: "refined", 32: "hidden"}
_HIDDEN_POINT = 2


def result_from_vtk(
    dataset: Any,
    path: str = "",
    *,
    format_name: str = "",
    steps: Steps | None = None,
    groups: Mapping[str, NDArray[np.int64]] | None = None,
    notes: Sequence[str] = (),
) -> Result:
    """Return a VTK data set as a `Result` whose arrays share VTK's memory and whose carrier is the data set.

    Voxels, pixels and the cells of structured, rectilinear and image grids become hexahedra and quads, and
    mid-side nodes in a known wrong order are put right, in the result only: the carrier keeps its cells.

    Parameters
    ----------
    dataset
        `vtkUnstructuredGrid`, `vtkPolyData`, `vtkStructuredGrid`, `vtkRectilinearGrid` or `vtkImageData`.
    path, format_name, steps, groups, notes
        As in `Result`.

    Raises
    ------
    InputError
        No cell; cells, offsets, faces or arrays that contradict each other; mid-side nodes far from their
        edges. The message names the place.
    """
    where = f"{path}: " if path else ""
    blocks = blocks_of(dataset, where)
    points = points_of(dataset)
    if not blocks or points is None:
        raise InputError(
            f"{where}the mesh has {dataset.GetNumberOfPoints()} points and no cells; a displacement gradient "
            "needs elements. Check that the file is complete and holds the volume mesh."
        )
    blocks, repaired = checked_order(points, blocks, where)
    point_data, names, skipped = read_attributes(dataset.GetPointData(), "point", where)
    cell_data, cell_names, cell_skipped = read_attributes(dataset.GetCellData(), "cell", where)
    field_data, field_names, field_skipped = read_attributes(dataset.GetFieldData(), "field", where)
    return Result(
        points=points,
        blocks=blocks,
        point_data=point_data,
        cell_data=cell_data,
        field_data=field_data,
        groups=dict(groups or {}),
        component_names={**names, **cell_names, **field_names},
        steps=steps,
        path=path,
        format_name=format_name,
        notes=(*notes, *repaired, *skipped, *cell_skipped, *field_skipped),
        left_out=_left_out(blocks, point_data.get(GHOSTS), cell_data.get(GHOSTS)),
        carrier=dataset,
    )


def blocks_of(dataset: Any, where: str) -> tuple[CellBlock, ...]:
    """Return the cells of any VTK data set as checked blocks."""
    if isinstance(dataset, vtkUnstructuredGrid):
        return blocks_of_unstructured(dataset, where)
    if isinstance(dataset, vtkPolyData):
        return blocks_of_poly(dataset, where)
    if isinstance(dataset, vtkStructuredGrid | vtkRectilinearGrid | vtkImageData):
        extent = dataset.GetExtent()
        nx, ny, nz = (extent[2 * a + 1] - extent[2 * a] + 1 for a in range(3))
        blocks = blocks_of_structured((nx, ny, nz), where)
        n_points = nx * ny * nz
        if blocks and isinstance(dataset, vtkPointSet) and dataset.GetNumberOfPoints() != n_points:
            raise InputError(
                f"{where}the grid needs {n_points} points and has {dataset.GetNumberOfPoints()}. "
                "The file is incomplete: write it again."
            )
        return blocks
    raise InputError(
        f"{where}a {dataset.GetClassName()} holds no mesh that can be computed; expected an unstructured, "
        "structured, rectilinear or image grid, or polygons."
    )


def points_of(dataset: Any) -> Array | None:
    """Return ``(n_points, 3)`` coordinates of any VTK data set, or None when it has none."""
    if isinstance(dataset, vtkPointSet):
        held: Any = dataset.GetPoints()
        return None if held is None else to_numpy(held.GetData())
    extent = dataset.GetExtent()
    if isinstance(dataset, vtkImageData):
        spacing, origin, turn = dataset.GetSpacing(), dataset.GetOrigin(), dataset.GetDirectionMatrix()
        axes = [np.arange(extent[2 * a], extent[2 * a + 1] + 1) * spacing[a] for a in range(3)]
        matrix = np.array([[turn.GetElement(i, j) for j in range(3)] for i in range(3)])
        return np.asarray(_grid_points(axes) @ matrix.T + np.array(origin))
    held = (dataset.GetXCoordinates(), dataset.GetYCoordinates(), dataset.GetZCoordinates())
    coordinates = [None if a is None else to_numpy(a) for a in held]
    if any(c is None or len(c) != extent[2 * a + 1] - extent[2 * a] + 1 for a, c in enumerate(coordinates)):
        return None
    return _grid_points([c for c in coordinates if c is not None])


def _grid_points(axes: Sequence[Array]) -> Array:
    """Return the points of a product grid, x fastest."""
    z, y, x = np.meshgrid(axes[2], axes[1], axes[0], indexing="ij")
    return np.stack([x.ravel(), y.ravel(), z.ravel()], axis=1)


def _left_out(
    blocks: tuple[CellBlock, ...], point_flags: Array | None, cell_flags: Array | None
) -> dict[str, NDArray[np.int64]]:
    """Return the cells that do not count, by reason."""
    found: dict[str, NDArray[np.int64]] = {}
    if cell_flags is not None:
        for bit, reason in _CELL_REASONS.items():
            found[reason] = np.flatnonzero(cell_flags & bit)
    if point_flags is not None:
        hidden = (point_flags & _HIDDEN_POINT) != 0
        of_points = [b.index[hidden[b.connectivity].any(axis=1)] for b in blocks if hidden.any()]
        found["hidden"] = np.unique(np.concatenate([found.get("hidden", np.array([], np.int64)), *of_points]))
    found["empty"] = np.concatenate(
        [b.index for b in blocks if b.cell_type == "empty"] or [np.array([], np.int64)]
    )
    return {reason: cells.astype(np.int64) for reason, cells in found.items() if len(cells)}


def dataset_from_result(result: Result) -> Any:
    """Return a VTK data set of the carrier's own kind with the result's arrays; the carrier stays as it was.

    Without a VTK carrier, or when its geometry is no longer the result's, it is a `vtkUnstructuredGrid`.
    """
    carrier = result.carrier
    if not isinstance(carrier, vtkDataSet) or not _same_geometry(carrier, result):
        return vtk_from_result(result)
    copy = carrier.NewInstance()
    copy.ShallowCopy(carrier)
    _fill(copy, result)
    return copy


def vtk_from_result(result: Result) -> Any:
    """Return the result as a `vtkUnstructuredGrid` that shares the memory of its arrays.

    A carrier that is an unstructured grid is copied shallowly, so its cells, active arrays and everything
    numpy cannot hold stay. Groups are not stored.

    Raises
    ------
    UsageError
        A cell type that VTK does not have, or polyhedra without their faces.
    """
    grid = vtkUnstructuredGrid()
    carrier = result.carrier
    if isinstance(carrier, vtkUnstructuredGrid) and _same_geometry(carrier, result):
        grid.ShallowCopy(carrier)
    else:
        _build(grid, result)
        if isinstance(carrier, vtkDataSet) and _same_counts(carrier, result):
            grid.GetPointData().ShallowCopy(carrier.GetPointData())
            grid.GetCellData().ShallowCopy(carrier.GetCellData())
            grid.GetFieldData().ShallowCopy(carrier.GetFieldData())
    _fill(grid, result)
    return grid


def _same_counts(carrier: Any, result: Result) -> bool:
    return (carrier.GetNumberOfPoints(), carrier.GetNumberOfCells()) == (result.n_points, result.n_cells)


def _same_geometry(carrier: Any, result: Result) -> bool:
    if not _same_counts(carrier, result):
        return False
    points = points_of(carrier)
    return (
        points is not None and points.dtype == result.points.dtype and np.array_equal(points, result.points)
    )


def _build(grid: Any, result: Result) -> None:
    """Give an empty grid the points and cells of a result."""
    numbers = []
    for block in result.blocks:
        number = cell_number(block.cell_type)
        if number is None or block.cell_type == "polyhedron":
            raise UsageError(
                f"cells of type {block.cell_type!r} ({block.connectivity.shape[1]} nodes) cannot be written "
                "to a VTK format from this source; write XDMF, or leave these cells out."
            )
        numbers.append(number)
    kinds, cells = grid_from_blocks(result.blocks, tuple(numbers))
    points = vtkPoints()
    points.SetData(from_numpy(result.points, "Points"))
    grid.SetPoints(points)
    grid.SetCells(kinds, cells)


def _fill(dataset: Any, result: Result) -> None:
    """Make the arrays of a VTK data set those of a result."""
    names = result.component_names
    update_attributes(dataset.GetPointData(), result.point_data, "point", names)
    update_attributes(dataset.GetCellData(), result.cell_data, "cell", names)
    update_attributes(dataset.GetFieldData(), result.field_data, "field", names)
