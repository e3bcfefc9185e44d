"""VTKHDF files (.vtkhdf), one result or a series with its mesh stored once while it does not change."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from vtkmodules.vtkCommonDataModel import vtkDataSet, vtkUnstructuredGrid

from unturn.errors import UsageError
from unturn.io._format import check_step_value
from unturn.io.vtk_arrays import to_numpy
from unturn.io.vtk_cells import types_of
from unturn.io.vtk_hdf import COMPONENTS, NAME, ROLE
from unturn.io.vtk_result import vtk_from_result
from unturn.io.vtk_types import POLYHEDRON
from unturn.io.vtk_xml import lost_in_vtk
from unturn.result import Array, Association, Result

_VERSION = (2, 2)
_COUNTS = ("NumberOfPoints", "NumberOfCells", "NumberOfConnectivityIds")
_KINDS: tuple[tuple[Association, str], ...] = (
    ("point", "PointData"),
    ("cell", "CellData"),
    ("field", "FieldData"),
)


def write_file(result: Result, path: Path) -> tuple[str, ...]:
    """Write a result as VTKHDF of type UnstructuredGrid and return what the format could not hold."""
    grid = vtk_from_result(result)
    with h5py.File(path, "w") as file:
        root = _start(file)
        mesh = _mesh(grid)
        for name, values in mesh.items():
            root.create_dataset(name, data=values)
        for kind, group in _KINDS:
            held = root.create_group(group, track_order=True)
            for name, values in _writable(result, kind).items():
                _describe(_create(held, name, _flat(values), False), result, kind, name, grid)
    return _lost(result)


def _writable(result: Result, kind: Association) -> dict[str, Array]:
    """Return the arrays that are written.

    VTK's own reader skips strings of points and cells, and those of other than plain ASCII text in the field
    data end the interpreter it runs in (measured with VTK 9.7.2).
    """
    arrays: dict[str, Array] = getattr(result, f"{kind}_data")
    return {name: v for name, v in arrays.items() if v.dtype.kind not in "US" or _is_plain(v, kind)}


def _is_plain(strings: Array, kind: Association) -> bool:
    return kind == "field" and strings.ndim == 1 and all(str(s).isascii() for s in strings)


def _lost(result: Result) -> tuple[str, ...]:
    strings = [
        f"The {kind} array {name!r} was not written: VTKHDF holds strings in field data and ASCII only."
        for kind, _ in _KINDS
        for name in getattr(result, f"{kind}_data")
        if name not in _writable(result, kind)
    ]
    return (*strings, *_lost_kind(result))


def _lost_kind(result: Result) -> tuple[str, ...]:
    carrier = result.carrier
    if isinstance(carrier, vtkDataSet) and not isinstance(carrier, vtkUnstructuredGrid):
        kind = carrier.GetClassName().removeprefix("vtk")
        return (f"The {kind} is stored as an unstructured grid.", *lost_in_vtk(result))
    return lost_in_vtk(result)


def _start(file: Any) -> Any:
    root = file.create_group("VTKHDF")
    root.attrs["Version"] = np.array(_VERSION, dtype=np.int64)
    root.attrs["Type"] = np.bytes_("UnstructuredGrid")
    return root


def _mesh(grid: Any) -> dict[str, Array]:
    """Return the data sets that describe the mesh of one part."""
    points, types = to_numpy(grid.GetPoints().GetData()), types_of(grid)
    offsets = to_numpy(grid.GetCells().GetOffsetsArray())
    nodes = to_numpy(grid.GetCells().GetConnectivityArray())
    assert points is not None
    assert offsets is not None
    assert nodes is not None
    if (types == POLYHEDRON).any():
        raise UsageError("polyhedra are not written to VTKHDF; give the output the suffix .vtu.")
    counts = (len(points), len(types), len(nodes))
    return {
        **{name: np.array([n], dtype=np.int64) for name, n in zip(_COUNTS, counts, strict=True)},
        "Points": points,
        "Offsets": offsets.astype(np.int64, copy=False),
        "Connectivity": nodes.astype(np.int64, copy=False),
        "Types": types,
    }


def _flat(values: Array) -> Array:
    """Return an array with its components in one axis, in a type HDF5 and VTK both have."""
    values = np.atleast_1d(values)
    if values.ndim > 2:
        values = values.reshape(len(values), -1)
    if values.dtype.kind == "b":
        return values.astype(np.uint8)
    if values.dtype.kind in "US":
        return values.astype(np.str_).astype(object)
    if values.dtype.kind not in "iuf":
        raise UsageError(f"numbers of type {values.dtype} cannot be written to VTKHDF.")
    return values


def _create(group: Any, name: str, values: Array, growing: bool) -> Any:
    """Create a data set for an array; a slash in its name, which HDF5 takes for a path, becomes ``_``."""
    key = name.replace("/", "_") if name not in (".", "..", "") else f"unnamed_{len(group)}"
    if key in group:
        raise UsageError(f"arrays {key!r} and {name!r} would share one name in VTKHDF; write .vtu instead.")
    kind = h5py.string_dtype("ascii") if values.dtype.kind == "O" else values.dtype
    if growing:
        rows = max(1, min(len(values), 65536))
        shape = (None, *values.shape[1:])
        chunks = (rows, *values.shape[1:])
        data = group.create_dataset(key, data=values, dtype=kind, maxshape=shape, chunks=chunks)
    else:
        data = group.create_dataset(key, data=values, dtype=kind)
    if key != name:
        data.attrs[NAME] = name
    return data


def _describe(data: Any, result: Result, kind: Association, name: str, grid: Any) -> None:
    """Attach component names and the role of an array (active scalars, global ids ...)."""
    labels = result.component_names.get((kind, name))
    if labels:
        data.attrs[COMPONENTS] = np.array(labels, dtype=object)
    if kind == "field":
        return
    attributes = grid.GetPointData() if kind == "point" else grid.GetCellData()
    for number in range(attributes.NUM_ATTRIBUTES):
        active = attributes.GetAbstractAttribute(number)
        if active is not None and active.GetName() == name:
            data.attrs[ROLE] = np.bytes_(attributes.GetAttributeTypeAsString(number))
            return


class HdfSeriesWriter:
    """Writes steps into one file; a mesh equal to that of the step before is not stored again."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._values: list[float] = []
        self._lost: dict[str, None] = {}
        self._mesh = b""
        self._at = dict.fromkeys(("PartOffsets", "PointOffsets", "CellOffsets", "ConnectivityIdOffsets"), 0)
        self._ends = dict.fromkeys(self._at, 0)
        self._known: set[tuple[Association, str]] | None = None

    @property
    def lost(self) -> tuple[str, ...]:
        """What VTKHDF could not hold, so far."""
        return tuple(self._lost)

    def add(self, result: Result, value: float) -> None:
        """Write one step; the file is complete after it.

        Raises
        ------
        UsageError
            The value is not finite or was used before, or the step has other arrays than the first one.
        """
        check_step_value(value, self._values)
        present = {(kind, name) for kind, _ in _KINDS for name in _writable(result, kind)}
        if self._known is not None and present != self._known:
            odd = ", ".join(sorted(repr(name) for _, name in present ^ self._known))
            raise UsageError(
                f"array {odd} is in some steps and not in others, which VTKHDF cannot hold; write .pvd "
                "instead."
            )
        self._known = present
        grid = vtk_from_result(result)
        with h5py.File(self.path, "a") as file:
            root = file["VTKHDF"] if "VTKHDF" in file else _start(file)
            steps = root.require_group("Steps")
            self._add_mesh(root, _mesh(grid))
            for name, start in self._at.items():
                _append(steps, name, np.array([start], dtype=np.int64))
            _append(steps, "NumberOfParts", np.ones(1, dtype=np.int64))
            _append(steps, "Values", np.array([value], dtype=np.float64))
            for kind, group in _KINDS:
                self._add_arrays(root, steps, kind, group, result, grid)
            self._values.append(value)
            steps.attrs["NSteps"] = np.int64(len(self._values))
        self._lost.update(dict.fromkeys(_lost(result)))

    def close(self) -> None:
        """Finish the file: nothing is left to do, it is complete after each step."""

    def _add_mesh(self, root: Any, mesh: Mapping[str, Array]) -> None:
        digest = hashlib.blake2b()
        for values in mesh.values():
            digest.update(np.ascontiguousarray(values).data)
        if digest.digest() == self._mesh:
            return
        self._mesh = digest.digest()
        self._at = dict(self._ends)
        for name, values in mesh.items():
            _append(root, name, values)
        counts = [1, *(int(mesh[name][0]) for name in _COUNTS)]
        self._ends = {name: self._at[name] + n for name, n in zip(self._at, counts, strict=True)}

    def _add_arrays(
        self, root: Any, steps: Any, kind: Association, group: str, result: Result, grid: Any
    ) -> None:
        held = root[group] if group in root else root.create_group(group, track_order=True)
        table = steps.require_group(f"{group}Offsets")
        keys = {data.attrs.get(NAME, key): key for key, data in held.items()}
        for name, array in _writable(result, kind).items():
            values = _flat(array)
            if name in keys:
                data = held[keys[name]]
                start = data.shape[0]
                if (data.dtype, data.shape[1:]) != (values.dtype, values.shape[1:]):
                    raise UsageError(
                        f"array {name!r} has another type or number of components than in the first step, "
                        "which VTKHDF cannot hold; write .pvd instead."
                    )
                data.resize(start + len(values), axis=0)
                data[start:] = values
            else:
                data, start = _create(held, name, values, True), 0
                _describe(data, result, kind, name, grid)
            key = data.name.rsplit("/", 1)[-1]
            _append(table, key, np.array([start], dtype=np.int64))
            if kind == "field":
                width = int(np.prod(values.shape[1:], dtype=np.int64))
                sizes = np.array([[width, len(values)]], dtype=np.int64)
                _append(steps.require_group("FieldDataSizes"), key, sizes)


def _append(group: Any, name: str, values: Array) -> None:
    """Put rows at the end of a data set, which is created when it is not there."""
    if name not in group:
        _create(group, name, values, True)
        return
    data = group[name]
    start = data.shape[0]
    data.resize(start + len(values), axis=0)
    data[start:] = values


def open_series(path: Path) -> HdfSeriesWriter:
    """Open a writer of a VTKHDF series."""
    return HdfSeriesWriter(path)
