"""What of a mesh can be seen: curved faces, the edges of its cells, its outline."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.io.vtk_cells import types_of
from unturn.io.vtk_result import vtk_from_result
from unturn.result import Result

Floats = NDArray[np.float64]
POSITION = "position"
VALUE = "value"
_SMOOTH_BELOW = (
    6_000  # faces up to which curved faces are drawn as 64 pieces each; 16 up to ten times as many
)


@dataclass(frozen=True, eq=False)
class Skin:
    """The visible part of a mesh.

    Attributes
    ----------
    surface
        `vtkPolyData` of flat pieces (and lines); cell array ``position`` tells the file position of the mesh
        cell each belongs to, point array ``value`` the nodal value.
    edges
        `vtkPolyData` of the edges of the cells.
    body
        `vtkPolyData` of connected flat pieces, for the outline.
    """

    surface: Any
    edges: Any
    body: Any


def grid_of(result: Result) -> Any:
    """Return a `vtkUnstructuredGrid` of the result's cells without any array."""
    from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

    bare = vtkUnstructuredGrid()
    bare.CopyStructure(vtk_from_result(result))
    return bare


def skin_of(
    grid: Any, points: Floats, keep: NDArray[np.bool_], values: Floats | None, edges: bool = True
) -> Skin:
    """Return the visible part of the cells `keep` `(n_cells,)` with the points put at `points` `(n, 3)`."""
    faces = _faces(_moved(grid, points, values), keep)
    n = faces.GetNumberOfCells()
    curved = not _is_linear(faces)
    level = (3 if n <= _SMOOTH_BELOW else 2 if n <= 10 * _SMOOTH_BELOW else 1) if curved else 0
    body = _flattened(faces, level)
    if not edges:
        return Skin(body, None, body)
    apart = _flattened(_separated(faces), level)
    return Skin(apart, _boundaries(apart), body)


def _moved(grid: Any, points: Floats, values: Floats | None) -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

    moved = vtkUnstructuredGrid()
    moved.CopyStructure(grid)
    held = vtkPoints()
    held.SetData(numpy_to_vtk(np.ascontiguousarray(points), deep=True))
    moved.SetPoints(held)
    number = numpy_to_vtk(np.arange(grid.GetNumberOfCells(), dtype=np.int64), deep=True)
    number.SetName(POSITION)
    moved.GetCellData().AddArray(number)
    if values is not None:
        nodal = numpy_to_vtk(np.ascontiguousarray(values, dtype=np.float64), deep=True)
        nodal.SetName(VALUE)
        moved.GetPointData().AddArray(nodal)
    return moved


def _faces(grid: Any, keep: NDArray[np.bool_]) -> Any:
    """Return the free faces of the solids, and all other cells, as a grid that keeps curved faces curved."""
    from vtkmodules.vtkFiltersCore import vtkExtractCells
    from vtkmodules.vtkFiltersGeometry import vtkUnstructuredGridGeometryFilter

    if not keep.all():
        choose = vtkExtractCells()
        choose.SetInputData(grid)
        from vtkmodules.vtkCommonCore import vtkIdList

        ids = vtkIdList()
        for cell in np.flatnonzero(keep):
            ids.InsertNextId(int(cell))
        choose.SetCellList(ids)
        choose.Update()
        grid = choose.GetOutput()
    faces = vtkUnstructuredGridGeometryFilter()
    faces.SetInputData(grid)
    faces.Update()
    return faces.GetOutput()


def _is_linear(grid: Any) -> bool:
    _, first = np.unique(types_of(grid), return_index=True)
    return all(grid.GetCell(int(cell)).IsLinear() for cell in first)


def _flattened(grid: Any, level: int) -> Any:
    from vtkmodules.vtkFiltersGeometry import vtkDataSetSurfaceFilter

    flat = vtkDataSetSurfaceFilter()
    flat.SetNonlinearSubdivisionLevel(level)
    flat.SetInputData(grid)
    flat.Update()
    return flat.GetOutput()


def _separated(grid: Any) -> Any:
    """Return the grid with nodes of its own for every cell, so that each cell's edges are boundaries."""
    from vtkmodules.util.numpy_support import numpy_to_vtk, vtk_to_numpy
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkUnstructuredGrid

    nodes = vtk_to_numpy(grid.GetCells().GetConnectivityArray())
    cells = vtkCellArray()
    cells.SetData(
        numpy_to_vtk(vtk_to_numpy(grid.GetCells().GetOffsetsArray()).astype(np.int64), deep=True),
        numpy_to_vtk(np.arange(len(nodes), dtype=np.int64), deep=True),
    )
    apart = vtkUnstructuredGrid()
    points = vtkPoints()
    points.SetData(numpy_to_vtk(vtk_to_numpy(grid.GetPoints().GetData())[nodes], deep=True))
    apart.SetPoints(points)
    apart.SetCells(numpy_to_vtk(types_of(grid), deep=True), cells)
    apart.GetCellData().ShallowCopy(grid.GetCellData())
    nodal = grid.GetPointData().GetArray(VALUE)
    if nodal is not None:
        own = numpy_to_vtk(vtk_to_numpy(nodal)[nodes], deep=True)
        own.SetName(VALUE)
        apart.GetPointData().AddArray(own)
    return apart


def _boundaries(surface: Any) -> Any:
    from vtkmodules.vtkFiltersCore import vtkFeatureEdges

    edges = vtkFeatureEdges()
    edges.SetInputData(surface)
    edges.BoundaryEdgesOn()
    edges.FeatureEdgesOff()
    edges.ManifoldEdgesOff()
    edges.NonManifoldEdgesOff()
    edges.ColoringOff()
    edges.Update()
    return edges.GetOutput()


def outline_of(body: Any, direction: Floats, size: float) -> Any:
    """Return the creases, borders and silhouette of a surface seen from `direction`."""
    from vtkmodules.vtkFiltersCore import vtkStaticCleanPolyData
    from vtkmodules.vtkFiltersHybrid import vtkPolyDataSilhouette

    joined = vtkStaticCleanPolyData()
    joined.SetInputData(body)
    joined.ToleranceIsAbsoluteOn()
    joined.SetAbsoluteTolerance(1e-7 * size)
    outline = vtkPolyDataSilhouette()
    outline.SetInputConnection(joined.GetOutputPort())
    outline.SetDirectionToSpecifiedVector()
    outline.SetVector(*(-direction))
    outline.BorderEdgesOn()
    outline.SetFeatureAngle(35.0)
    outline.SetEnableFeatureAngle(1)
    outline.Update()
    return outline.GetOutput()
