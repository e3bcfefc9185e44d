"""VTKHDF files (.vtkhdf), read with h5py so that names, component names and number types come back.

The layout is that of the VTK file format description (VTK 9.7 documentation, "VTKHDF file format"), types
UnstructuredGrid, PolyData and ImageData, with and without Steps. Two attributes of our own, which other
programs pass over, keep what the layout has no place for: ``Name`` (a name with a slash) and
``ComponentNames``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

import h5py
import numpy as np
from vtkmodules.vtkCommonCore import vtkPoints
from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkImageData, vtkPolyData, vtkUnstructuredGrid

from unturn.errors import InputError
from unturn.io.vtk_arrays import from_numpy
from unturn.io.vtk_cells import check_offsets, check_range
from unturn.io.vtk_result import result_from_vtk
from unturn.io.vtk_types import POLYHEDRON
from unturn.result import Array, Result, Steps

FORMAT_NAME = "VTKHDF"
NAME, COMPONENTS, ROLE = "Name", "ComponentNames", "Attribute"
_LISTS = (("Vertices", "SetVerts"), ("Lines", "SetLines"), ("Polygons", "SetPolys"), ("Strips", "SetStrips"))

T = TypeVar("T")


@dataclass(frozen=True)
class HdfFile:
    """An opened VTKHDF file."""

    path: str
    kind: str
    steps: tuple[float, ...] | None
    format_name: str = FORMAT_NAME

    def read(self, step: int = 0) -> Result:
        """Read one step (0 when the file is not a series)."""
        series = self.steps is not None
        state = Steps(self.steps, step) if self.steps is not None else None
        with _opened(self.path) as file:
            dataset = _guarded(
                self.path,
                lambda: _Reader(self.path, file["VTKHDF"], step if series else None).dataset(self.kind),
            )
        return result_from_vtk(dataset, self.path, format_name=FORMAT_NAME, steps=state)


def open_file(path: Path) -> HdfFile:
    """Open a VTKHDF file; raise `InputError` for types of it that hold no single mesh."""
    with _opened(str(path)) as file:
        return _guarded(str(path), lambda: _file(file, path))


def _file(file: Any, path: Path) -> HdfFile:
    root = file["VTKHDF"]
    kind = _text(root.attrs["Type"])
    if kind not in ("UnstructuredGrid", "PolyData", "ImageData"):
        raise InputError(
            f"{path}: VTKHDF of type {kind!r} is not read; expected UnstructuredGrid, PolyData or ImageData. "
            "Write the parts of a composite as single meshes."
        )
    steps = None
    if "Steps" in root:
        steps = tuple(float(v) for v in np.asarray(root["Steps/Values"][...], dtype=float).ravel())
        if not steps:
            raise InputError(f"{path}: the series has no step. The program that writes it did not finish.")
    return HdfFile(str(path), kind, steps)


def _opened(path: str) -> Any:
    try:
        return h5py.File(path, "r")
    except OSError as error:
        raise InputError(
            f"{path} cannot be opened as HDF5 ({error}). It is damaged, cut short or still being written by "
            "another program."
        ) from error


def _guarded(path: str, get: Callable[[], T]) -> T:
    """Return what `get` reads from the file; whatever h5py cannot read becomes an `InputError`."""
    try:
        return get()
    except (OSError, LookupError, RuntimeError, ValueError, TypeError, AttributeError, MemoryError) as error:
        raise InputError(
            f"{path} cannot be read ({error}). A part of the VTKHDF layout is missing or damaged: write it "
            "again."
        ) from error


class _Reader:
    """Reads one step of a VTKHDF group into a VTK data set."""

    def __init__(self, path: str, root: Any, step: int | None) -> None:
        self.path, self.root, self.step = path, root, step

    def fail(self, what: str) -> InputError:
        return InputError(f"{self.path}: {what}. The file is damaged or incomplete: write it again.")

    def dataset(self, kind: str) -> Any:
        """Return the data set of this type."""
        made = {"UnstructuredGrid": self._grid, "PolyData": self._poly, "ImageData": self._image}[kind]()
        self._fields(made)
        return made

    def _state(self, name: str, column: int = 0) -> int:
        """Return one number of the Steps group for this step (0 when the file is not a series)."""
        if self.step is None:
            return 0
        table = self.root["Steps"].get(name)
        if table is None:
            raise self.fail(f"Steps has no {name}")
        values = np.atleast_1d(np.asarray(table[self.step]))
        return int(values[min(column, len(values) - 1)])

    def _parts(self) -> range:
        """Return which parts of the file make up this step."""
        if self.step is None:
            return range(len(self.root["NumberOfPoints"]))
        first = self._state("PartOffsets")
        n = self._state("NumberOfParts") if "NumberOfParts" in self.root["Steps"] else 1
        return range(first, first + n)

    def _rows(self, group: Any, name: str, start: int, n: int) -> Array:
        """Return n rows of a data set, which must have been written."""
        data = group[name]
        if start < 0 or n < 0 or start + n > data.shape[0]:
            raise self.fail(f"{data.name} has {data.shape[0]} rows; rows {start} to {start + n} are needed")
        if data.dtype.kind not in "iufSO" or (data.dtype.kind == "f" and data.dtype.itemsize not in (4, 8)):
            raise self.fail(f"{data.name} has numbers of type {data.dtype}, which are not read")
        if n and data.id.get_storage_size() == 0:
            raise self.fail(f"{data.name} was announced and never written")
        return np.asarray(data[start : start + n])

    def _counts(self, group: Any, name: str, parts: range) -> list[int]:
        return [int(v) for v in self._rows(group, name, parts.start, len(parts))]

    def _cells(
        self, group: Any, parts: range, n_points: list[int], columns: int = 0
    ) -> tuple[Array, Array, int]:
        """Return offsets and connectivity of all parts as one list, and where its cells begin."""
        n_cells = self._counts(group, "NumberOfCells", parts)
        n_ids = self._counts(group, "NumberOfConnectivityIds", parts)
        first, first_id = self._state("CellOffsets", columns), self._state("ConnectivityIdOffsets", columns)
        offsets, nodes = [np.zeros(1, np.int64)], [np.zeros(0, np.int64)]
        points = cells = ids = 0
        for k, part in enumerate(parts):
            piece = self._rows(group, "Offsets", first + cells + part, n_cells[k] + 1).astype(np.int64)
            check_offsets(piece, n_ids[k], f"{self.path}: ")
            listed = self._rows(group, "Connectivity", first_id + ids, n_ids[k]).astype(np.int64)
            check_range(listed, n_points[k], piece, f"{self.path}: ")
            offsets.append(piece[1:] + ids)
            nodes.append(listed + points if points else listed)
            points, cells, ids = points + n_points[k], cells + n_cells[k], ids + n_ids[k]
        # A list of one piece is passed on without a copy.
        joined = nodes[1] if len(nodes) == 2 else np.concatenate(nodes)
        return np.concatenate(offsets), joined, first

    def _points(self, made: Any, n_points: int) -> int:
        start = self._state("PointOffsets")
        held = vtkPoints()
        held.SetData(from_numpy(self._rows(self.root, "Points", start, n_points), "Points"))
        made.SetPoints(held)
        return start

    def _grid(self) -> Any:
        parts = self._parts()
        n_points = self._counts(self.root, "NumberOfPoints", parts)
        offsets, nodes, first = self._cells(self.root, parts, n_points)
        n_cells = len(offsets) - 1
        types = self._rows(self.root, "Types", first, n_cells).astype(np.uint8)
        if (types == POLYHEDRON).any():
            raise InputError(f"{self.path}: polyhedra in VTKHDF are not read; write the result as .vtu.")
        grid, cells = vtkUnstructuredGrid(), vtkCellArray()
        start = self._points(grid, sum(n_points))
        cells.SetData(from_numpy(offsets, "offsets"), from_numpy(nodes, "connectivity"))
        grid.SetCells(from_numpy(types, "types"), cells)
        self._arrays("PointData", grid.GetPointData(), start, sum(n_points))
        self._arrays("CellData", grid.GetCellData(), first, n_cells)
        return grid

    def _poly(self) -> Any:
        parts = self._parts()
        if len(parts) != 1:
            raise InputError(
                f"{self.path}: PolyData of {len(parts)} parts is not read; write it as one part."
            )
        n_points = self._counts(self.root, "NumberOfPoints", parts)
        poly = vtkPolyData()
        start = self._points(poly, n_points[0])
        n_cells = first = 0
        for column, (name, setter) in enumerate(_LISTS):
            offsets, nodes, begin = self._cells(self.root[name], parts, n_points, column)
            cells = vtkCellArray()
            cells.SetData(from_numpy(offsets, "offsets"), from_numpy(nodes, "connectivity"))
            getattr(poly, setter)(cells)
            n_cells, first = n_cells + len(offsets) - 1, first + begin
        self._arrays("PointData", poly.GetPointData(), start, n_points[0])
        self._arrays("CellData", poly.GetCellData(), first, n_cells)
        return poly

    def _image(self) -> Any:
        image = vtkImageData()
        extent = [int(v) for v in self.root.attrs["WholeExtent"]]
        sizes = [b - a + 1 for a, b in zip(extent[::2], extent[1::2], strict=True)]
        if len(sizes) != 3 or min(sizes) < 1:
            raise self.fail(f"the extent {extent} holds no mesh")
        image.SetExtent(extent)
        image.SetOrigin([float(v) for v in self.root.attrs["Origin"]])
        image.SetSpacing([float(v) for v in self.root.attrs["Spacing"]])
        if "Direction" in self.root.attrs:
            image.SetDirectionMatrix([float(v) for v in np.ravel(self.root.attrs["Direction"])])
        cells = [max(s - 1, 1) for s in sizes]
        for group, data, shape in (
            ("PointData", image.GetPointData(), sizes),
            ("CellData", image.GetCellData(), cells),
        ):
            self._arrays(group, data, 0, int(np.prod(shape, dtype=object)), tuple(reversed(shape)))
        return image

    def _arrays(
        self, group: str, data: Any, start: int, n: int, shape: tuple[int, ...] | None = None
    ) -> None:
        """Add the arrays of a group; `shape` is that of an image, whose arrays are not flat."""
        held = self.root.get(group)
        for key in () if held is None else held:
            item = held[key]
            name = _text(item.attrs.get(NAME, key))
            begin = self._start_of(f"{group}Offsets", key, 0 if shape else start)
            if shape is None:
                values = self._rows(held, key, begin, n)
            else:
                values = np.asarray(item[...] if self.step is None else item[begin])
                if values.shape[:3] != shape:
                    raise self.fail(f"{item.name} has the shape {values.shape}; {shape} is needed")
                values = values.reshape(n, *values.shape[3:])
            array = from_numpy(_decoded(values), name)
            for k, label in enumerate(item.attrs.get(COMPONENTS, ())):
                array.SetComponentName(k, _text(label))
            data.AddArray(array)
            role = _text(item.attrs.get(ROLE, ""))
            for number in range(data.NUM_ATTRIBUTES):
                if data.GetAttributeTypeAsString(number) == role:
                    data.SetActiveAttribute(name, number)

    def _start_of(self, table: str, key: str, otherwise: int) -> int:
        """Return where an array begins in this step; arrays without an entry begin where the mesh does."""
        if self.step is None or f"{table}/{key}" not in self.root["Steps"]:
            return otherwise
        return int(self.root["Steps"][table][key][self.step])

    def _fields(self, made: Any) -> None:
        held = self.root.get("FieldData")
        for key in () if held is None else held:
            item = held[key]
            begin, n = 0, len(item)
            if self.step is not None and f"FieldDataOffsets/{key}" in self.root["Steps"]:
                begin = self._start_of("FieldDataOffsets", key, 0)
                sizes = self.root["Steps"].get(f"FieldDataSizes/{key}")
                n = len(item) - begin if sizes is None else int(sizes[self.step][1])
            array = from_numpy(_decoded(self._rows(held, key, begin, n)), _text(item.attrs.get(NAME, key)))
            for k, label in enumerate(item.attrs.get(COMPONENTS, ())):
                array.SetComponentName(k, _text(label))
            made.GetFieldData().AddArray(array)


def _text(value: Any) -> str:
    return value.decode("utf-8") if isinstance(value, bytes) else str(value)


def _decoded(values: Array) -> Array:
    """Return an array of `str` for one of bytes or of variable-length strings; numbers as they are."""
    if values.dtype.kind in "SO":
        return np.array([_text(v) for v in values.ravel()], dtype=np.str_).reshape(values.shape)
    return values
