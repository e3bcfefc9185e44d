"""What of a mesh can be seen: curved faces, the edges of its cells, its outline."""

from __future__ import annotations

from collections.abc import Mapping
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
_ORIGINAL = "original point"
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
        cell each belongs to; point arrays are the nodal values that were asked for.
    edges
        `vtkPolyData` of the edges of the cells.
    body
        `vtkPolyData` of connected flat pieces, for the outline.
    """

    surface: Any
    edges: Any
    body: Any


class Faces:
    """The free faces of solids, and all other cells; found once for every choice of cells."""

    def __init__(self, result: Result) -> None:
        self._grid = grid_of(result)
        self._found: dict[bytes, Any] = {}

    def skin(
        self, points: Floats, keep: NDArray[np.bool_], nodal: Mapping[str, Floats], edges: bool = True
    ) -> Skin:
        """Return the visible part of the cells `keep` `(n_cells,)`.

        Parameters
        ----------
        points
            `(n_points, 3)` where the points are put.
        keep
            Which cells there are.
        nodal
            `(n_points,)` values by name that the surface carries, by the functions of the faces.
        edges
            Whether every cell gets points of its own, and its edges are found.
        """
        faces = self._moved(keep, points, nodal)
        n = faces.GetNumberOfCells()
        curved = not _is_linear(faces)
        level = (3 if n <= _SMOOTH_BELOW else 2 if n <= 10 * _SMOOTH_BELOW else 1) if curved else 0
        body = _flattened(faces, level)
        if not edges:
            return Skin(body, None, body)
        apart = _flattened(_separated(faces), level)
        return Skin(apart, _boundaries(apart), body)

    def nodes(self, keep: NDArray[np.bool_]) -> NDArray[np.int64]:
        """Return the nodes of what is seen of some cells."""
        from vtkmodules.util.numpy_support import vtk_to_numpy

        return np.asarray(vtk_to_numpy(self._of(keep).GetPointData().GetArray(_ORIGINAL)))

    def _moved(self, keep: NDArray[np.bool_], points: Floats, nodal: Mapping[str, Floats]) -> Any:
        from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

        faces, own = self._of(keep), self.nodes(keep)
        moved = vtkUnstructuredGrid()
        moved.CopyStructure(faces)
        moved.GetCellData().AddArray(faces.GetCellData().GetArray(POSITION))
        moved.SetPoints(vtk_points(points[own]))
        for name, values in nodal.items():
            moved.GetPointData().AddArray(named(name, values[own]))
        return moved

    def _of(self, keep: NDArray[np.bool_]) -> Any:
        """Return the faces of some cells as a grid that keeps curved faces curved."""
        from vtkmodules.vtkFiltersCore import vtkExtractCells
        from vtkmodules.vtkFiltersGeometry import vtkUnstructuredGridGeometryFilter

        key = np.packbits(keep).tobytes()
        if key not in self._found:
            grid = self._grid
            if not keep.all():
                choose = vtkExtractCells()
                choose.SetInputData(grid)
                cells: Any = np.flatnonzero(keep)
                choose.SetCellIds(cells, len(cells))
                choose.Update()
                grid = choose.GetOutput()
            faces = vtkUnstructuredGridGeometryFilter()
            faces.SetInputData(grid)
            faces.Update()
            self._found[key] = faces.GetOutput()
        return self._found[key]


def grid_of(result: Result) -> Any:
    """Return a `vtkUnstructuredGrid` of the result's cells whose only arrays are the file positions."""
    from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

    bare = vtkUnstructuredGrid()
    bare.CopyStructure(vtk_from_result(result))
    bare.GetCellData().AddArray(named(POSITION, np.arange(result.n_cells, dtype=np.int64)))
    bare.GetPointData().AddArray(named(_ORIGINAL, np.arange(result.n_points, dtype=np.int64)))
    return bare


def named(name: str, values: NDArray[Any]) -> Any:
    """Return a VTK array with a name."""
    from vtkmodules.util.numpy_support import numpy_to_vtk

    held = numpy_to_vtk(np.ascontiguousarray(values), deep=True)
    held.SetName(name)
    return held


def vtk_points(points: Floats) -> Any:
    """Return VTK points."""
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints

    held = vtkPoints()
    held.SetData(numpy_to_vtk(np.ascontiguousarray(points), deep=True))
    return held


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
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkUnstructuredGrid

    nodes = vtk_to_numpy(grid.GetCells().GetConnectivityArray())
    cells = vtkCellArray()
    cells.SetData(
        numpy_to_vtk(vtk_to_numpy(grid.GetCells().GetOffsetsArray()).astype(np.int64), deep=True),
        numpy_to_vtk(np.arange(len(nodes), dtype=np.int64), deep=True),
    )
    apart = vtkUnstructuredGrid()
    apart.SetPoints(vtk_points(vtk_to_numpy(grid.GetPoints().GetData())[nodes]))
    apart.SetCells(numpy_to_vtk(types_of(grid), deep=True), cells)
    apart.GetCellData().ShallowCopy(grid.GetCellData())
    held = grid.GetPointData()
    for k in range(held.GetNumberOfArrays()):
        apart.GetPointData().AddArray(named(held.GetArrayName(k), vtk_to_numpy(held.GetArray(k))[nodes]))
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
