"""A VTK data set with some of its points duplicated: what numpy cannot hold and the roles of arrays stay with it."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from vtkmodules.vtkCommonCore import vtkDataArray, vtkIdList, vtkPoints
from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

from unturn.errors import UsageError
from unturn.io.vtk_arrays import from_numpy, name_of, roles_of, set_arrays, text_of
from unturn.io.vtk_cells import grid_from_blocks
from unturn.io.vtk_types import cell_number
from unturn.result import Result


def grid_with_points(carrier: Any, result: Result, point: NDArray[np.int64]) -> Any:
    """Return an unstructured grid with points and cells of a result and every array of the data set it was made from.

    Parameters
    ----------
    carrier
        Any VTK data set; stays as it was.
    result
        The same cells in the same order, with more points.
    point
        `(n_points,)` position in the carrier of each point; where cells are polyhedra, their own points keep their places.
    """
    numbers = [cell_number(block.cell_type) for block in result.blocks]
    unknown = [b.cell_type for b, number in zip(result.blocks, numbers) if number is None]
    if unknown:
        raise UsageError(f"cells of type {unknown[0]!r} cannot be written to a VTK format; write XDMF.")
    kinds, cells = grid_from_blocks(result.blocks, tuple(n for n in numbers if n is not None))
    grid = vtkUnstructuredGrid()
    points = vtkPoints()
    points.SetData(from_numpy(result.points, "Points"))
    grid.SetPoints(points)
    if any(block.cell_type == "polyhedron" for block in result.blocks):
        grid.SetPolyhedralCells(
            kinds, cells, carrier.GetPolyhedronFaceLocations(), carrier.GetPolyhedronFaces()
        )
    else:
        grid.SetCells(kinds, cells)
    _take_points(carrier.GetPointData(), grid.GetPointData(), point)
    grid.GetCellData().ShallowCopy(carrier.GetCellData())
    grid.GetFieldData().ShallowCopy(carrier.GetFieldData())
    return grid


def _take_points(source: Any, target: Any, point: NDArray[np.int64]) -> None:
    """Give `target` the rows of every array, component names and roles (active scalars, global ids ...) included."""
    ids = vtkIdList()
    ids.SetNumberOfIds(len(point))
    for at, number in enumerate(point.tolist()):
        ids.SetId(at, number)
    taken = []
    for k in range(source.GetNumberOfArrays()):
        array = source.GetAbstractArray(k)
        if isinstance(array, vtkDataArray) and not array.HasStandardMemoryLayout():
            array = array.ToAOSDataArray()
        twin = array.NewInstance()
        twin.SetName(name_of(array, k))
        twin.SetNumberOfComponents(array.GetNumberOfComponents())
        twin.SetNumberOfTuples(len(point))
        array.GetTuples(ids, twin)
        for c in range(array.GetNumberOfComponents() if array.HasAComponentName() else 0):
            twin.SetComponentName(c, text_of(array.GetComponentName(c)))
        taken.append(twin)
    set_arrays(target, taken, roles_of(source))
