"""Tiny VTK data sets with every kind of array, made with VTK itself, and what its writers can do with them."""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import Any

import numpy as np
from vtkmodules import vtkIOLegacy, vtkIOXML
from vtkmodules.util.numpy_support import numpy_to_vtk
from vtkmodules.vtkCommonCore import vtkIdList, vtkPoints, vtkStringArray
from vtkmodules.vtkCommonDataModel import (
    vtkImageData,
    vtkPolyData,
    vtkRectilinearGrid,
    vtkStructuredGrid,
    vtkUnstructuredGrid,
)

NUMBERS = ("i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f4", "f8")
VOIGT = ("XX", "YY", "ZZ", "XY", "YZ", "XZ")

# VTK type number and nodes of cells on the points of `corners`: every family of linear cell and then some.
MIXED = (
    (10, (0, 1, 3, 4)),
    (12, (0, 1, 4, 3, 9, 10, 13, 12)),
    (11, (1, 2, 4, 5, 10, 11, 13, 14)),
    (10, (4, 5, 7, 13)),
    (13, (3, 4, 6, 12, 13, 15)),
    (14, (9, 10, 13, 12, 22)),
    (5, (0, 1, 3)),
    (9, (1, 2, 5, 4)),
    (8, (3, 4, 6, 7)),
    (3, (0, 26)),
    (1, (26,)),
    (7, (18, 19, 20, 23, 21)),
    (4, (18, 19, 20, 23)),
)


def corners() -> Any:
    """27 points of a skewed 3 x 3 x 3 lattice, x fastest."""
    lattice = np.array([(x, y, z) for z, y, x in itertools.product((0.0, 1.0, 2.5), repeat=3)])
    points = vtkPoints()
    points.SetData(_array(lattice @ np.array([[1.0, 0.1, 0.0], [0.0, 1.2, 0.2], [0.1, 0.0, 0.9]]), "Points"))
    return points


def mixed() -> vtkUnstructuredGrid:
    """Thirteen cells of eleven types, in no order."""
    grid = vtkUnstructuredGrid()
    grid.SetPoints(corners())
    for number, nodes in MIXED:
        grid.InsertNextCell(number, len(nodes), nodes)
    return dressed(grid)


def tetrahedra(n: int = 2) -> vtkUnstructuredGrid:
    """Two times `n` tetrahedra in a row."""
    grid = vtkUnstructuredGrid()
    points = np.array([(0.7 * k, k % 2, (k // 2) % 2) for k in range(n + 3)], dtype=np.float64)
    held = vtkPoints()
    held.SetData(_array(points, "Points"))
    grid.SetPoints(held)
    for k in range(n):
        grid.InsertNextCell(10, 4, (k, k + 1, k + 2, k + 3))
    return dressed(grid)


def polyhedra() -> vtkUnstructuredGrid:
    """A hexahedron and two polyhedra of its six faces."""
    grid = vtkUnstructuredGrid()
    grid.SetPoints(corners())
    faces = ((0, 1, 4, 3), (9, 10, 13, 12), (0, 1, 10, 9), (3, 4, 13, 12), (0, 3, 12, 9), (1, 4, 13, 10))
    stream = vtkIdList()
    for value in (len(faces), *itertools.chain.from_iterable((len(f), *f) for f in faces)):
        stream.InsertNextId(value)
    grid.InsertNextCell(12, 8, (0, 1, 4, 3, 9, 10, 13, 12))
    grid.InsertNextCell(42, stream)
    grid.InsertNextCell(42, stream)
    return grid


def image() -> vtkImageData:
    """3 x 2 x 1 cells, turned and shifted."""
    data = vtkImageData()
    data.SetExtent(1, 4, 0, 2, 0, 1)
    data.SetSpacing(0.5, 1.0, 2.0)
    data.SetOrigin(10.0, -1.0, 0.0)
    return dressed(data)


def rectilinear() -> vtkRectilinearGrid:
    """3 x 2 x 1 cells of unequal width."""
    data = vtkRectilinearGrid()
    data.SetDimensions(4, 3, 2)
    data.SetXCoordinates(_array(np.array([0.0, 1.0, 1.5, 4.0]), "x"))
    data.SetYCoordinates(_array(np.array([0.0, 2.0, 3.0]), "y"))
    data.SetZCoordinates(_array(np.array([-1.0, 1.0]), "z"))
    return dressed(data)


def structured(dimensions: tuple[int, int, int] = (4, 3, 2)) -> vtkStructuredGrid:
    """Cells between sheared points."""
    data = vtkStructuredGrid()
    data.SetDimensions(dimensions)
    axes = [range(d) for d in reversed(dimensions)]
    points = np.array([(x + 0.2 * y, y + 0.1 * z, 1.5 * z) for z, y, x in itertools.product(*axes)])
    held = vtkPoints()
    held.SetData(_array(points, "Points"))
    data.SetPoints(held)
    return dressed(data)


def poly() -> vtkPolyData:
    """A vertex, a line, a polyline, a triangle, a quad, a pentagon and a strip."""
    data = vtkPolyData()
    data.SetPoints(corners())
    data.AllocateExact(16, 64)
    for number, nodes in (
        (1, (26,)),
        (3, (0, 2)),
        (4, (0, 1, 2)),
        (5, (0, 1, 3)),
        (9, (1, 2, 5, 4)),
        (7, (18, 19, 20, 23, 21)),
        (6, (6, 7, 15, 16)),
    ):
        data.InsertNextCell(number, len(nodes), nodes)
    return dressed(data)


def dressed(data: Any, *, strings: bool = True) -> Any:
    """Give a data set arrays of every number type, NaN, names to trip over, strings, roles and field data."""
    rng = np.random.default_rng(7)
    for attributes, n in (
        (data.GetPointData(), data.GetNumberOfPoints()),
        (data.GetCellData(), data.GetNumberOfCells()),
    ):
        attributes.AddArray(_array(rng.random((n, 3)), "u"))
        attributes.AddArray(_array(np.where(np.arange(n) % 2, np.nan, -0.0), "half nan"))
        tensor = _array(rng.random((n, 6)), "a <b> & \"c\" 'd'")
        for k, label in enumerate(VOIGT):
            tensor.SetComponentName(k, label)
        attributes.AddArray(tensor)
        for number in NUMBERS:
            attributes.AddArray(
                _array((rng.random(n) * 250 - 100 * (number[0] != "u")).astype(number), number)
            )
        attributes.AddArray(_array(np.arange(n), "ids"))
        attributes.SetActiveVectors("u")
        attributes.SetActiveGlobalIds("ids")
        if strings:
            attributes.AddArray(_strings([f"name {k}" for k in range(n)], "label"))
    data.GetFieldData().AddArray(_array(np.array([1.25]), "TimeValue"))
    data.GetFieldData().AddArray(_array(rng.random((2, 3)).astype("f4"), "a table"))
    if strings:
        data.GetFieldData().AddArray(_strings(["one title", "two"], "titles"))
    return data


def _array(values: Any, name: str) -> Any:
    array = numpy_to_vtk(np.ascontiguousarray(values), deep=True)
    array.SetName(name)
    return array


def _strings(values: list[str], name: str) -> Any:
    array = vtkStringArray()
    array.SetName(name)
    for value in values:
        array.InsertNextValue(value)
    return array


def without_odd_names(data: Any) -> Any:
    """Rename the array whose name VTK's own XML writer cannot write."""
    for attributes in (data.GetPointData(), data.GetCellData()):
        attributes.GetAbstractArray(2).SetName("tensor")
    return data


def write_xml(data: Any, path: Path, mode: str = "raw", compressor: str = "None", **settings: Any) -> Path:
    """Write with VTK: mode ``ascii``, ``binary``, ``raw`` or ``base64``."""
    kind = data.GetClassName().removeprefix("vtk")
    writer = getattr(vtkIOXML, f"vtkXML{kind}Writer")()
    {
        "ascii": writer.SetDataModeToAscii,
        "binary": writer.SetDataModeToBinary,
        "raw": writer.SetDataModeToAppended,
        "base64": writer.SetDataModeToAppended,
    }[mode]()
    writer.SetEncodeAppendedData(mode == "base64")
    getattr(writer, f"SetCompressorTypeTo{compressor}")()
    for name, value in settings.items():
        getattr(writer, f"Set{name}")(value)
    writer.SetInputData(data)
    writer.SetFileName(str(path))
    assert writer.Write() == 1
    return path


def write_legacy(data: Any, path: Path, *, binary: bool = True, version: int = 51) -> Path:
    """Write with VTK."""
    kind = data.GetClassName().removeprefix("vtk").replace("ImageData", "StructuredPoints")
    writer = getattr(vtkIOLegacy, f"vtk{kind}Writer")()
    writer.SetFileType(2 if binary else 1)
    writer.SetFileVersion(version)
    writer.SetInputData(data)
    writer.SetFileName(str(path))
    assert writer.Write() == 1
    return path
