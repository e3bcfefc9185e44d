"""Writing XDMF: an index and one uncompressed HDF5 file beside it, valid after every step."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import h5py
import numpy as np

from unturn.errors import UsageError
from unturn.io._atomic import ensure_room
from unturn.io.xdmf_attributes import COMPONENT_NAMES, TENSOR6_IN_FILE, TENSOR6_ORDER
from unturn.io.xdmf_layout import carrier_of, check_names, form_of, same_mesh, topology_of
from unturn.result import Array, Association, Result

_NUMBER_TYPES = {
    "f4": ("Float", "4"),
    "f8": ("Float", "8"),
    "i1": ("Char", "1"),
    "i2": ("Int", "2"),
    "i4": ("Int", "4"),
    "i8": ("Int", "8"),
    "u1": ("UChar", "1"),
    "u2": ("UInt", "2"),
    "u4": ("UInt", "4"),
    "u8": ("UInt", "8"),
}
_CENTERS: tuple[tuple[Association, str], ...] = (("point", "Node"), ("cell", "Cell"), ("field", "Grid"))


def write(result: Result, path: Path) -> tuple[str, ...]:
    """Write one result to an XDMF index and the HDF5 file beside it; return what XDMF could not hold.

    Parameters
    ----------
    result
        Any result; one that came from an XDMF file keeps its array types, sets and information.
    path
        The index ``NAME.xdmf``; the numbers go to ``NAME.xdmf.h5`` in the same folder, a name that no other
        program gives its data, so a solver's own ``NAME.h5`` stays.

    Raises
    ------
    UsageError
        XDMF has no cell of a type in the mesh, or a name holds characters that XML cannot.
    """
    with _Store(path) as store:
        value = result.steps.values[result.steps.current] if result.steps else None
        grid = store.grid(result, "mesh", value)
        for where, attributes, text in carrier_of(result).information:
            parent = {"Xdmf": store.root, "Domain": store.domain}.get(where, grid)
            ET.SubElement(parent, "Information", dict(attributes)).text = text or None
        store.domain.append(grid)
        store.index()
    return tuple(store.lost)


def open_series(path: Path) -> XdmfSeriesWriter:
    """Return a writer that adds step after step; index and data are complete after each."""
    return XdmfSeriesWriter(path)


class XdmfSeriesWriter:
    """Writes a temporal collection; see `unturn.io._format.StepWriter`."""

    def __init__(self, path: Path) -> None:
        self._store = _Store(path)
        self._collection = ET.SubElement(
            self._store.domain, "Grid", Name="steps", GridType="Collection", CollectionType="Temporal"
        )
        self._values: set[float] = set()

    @property
    def lost(self) -> tuple[str, ...]:
        """What XDMF could not hold, so far."""
        return tuple(self._store.lost)

    def add(self, result: Result, value: float) -> None:
        """Write one step and bring the index up to date.

        Raises
        ------
        UsageError
            The value is not finite or was used before, or XDMF cannot hold the result.
        """
        if value in self._values:
            raise UsageError(f"two steps with the value {value}; each step of an XDMF series needs its own.")
        with self._store as store:
            self._collection.append(store.grid(result, f"step {len(self._values)}", float(value)))
            self._values.add(value)
            store.index()

    def close(self) -> None:
        """Finish the file: nothing is left to do, it is complete after each step."""


class _Store:
    """The index in memory and the HDF5 file that its DataItems point into."""

    def __init__(self, path: Path) -> None:
        self.path, self.h5_path = path, path.with_name(path.name + ".h5")
        self.root = ET.Element("Xdmf", Version="3.0")
        self.domain = ET.SubElement(self.root, "Domain")
        self.lost: dict[str, None] = {}
        self._mode = "w"
        self._grids = 0
        self._mesh: tuple[Result, ET.Element, ET.Element] | None = None

    def __enter__(self) -> _Store:
        try:
            self.file = h5py.File(self.h5_path, self._mode)
        except OSError as error:
            raise UsageError(f"{self.h5_path}: cannot be written: {error}.") from error
        self._mode = "a"
        return self

    def __exit__(self, *_: object) -> None:
        self.file.close()

    def index(self) -> None:
        """Write the index, in one move, once the data it points to is on disk."""
        self.file.flush()
        ET.indent(self.root)
        beside = self.path.with_name(self.path.name + ".part")
        ET.ElementTree(self.root).write(beside, encoding="utf-8", xml_declaration=True)
        os.replace(beside, self.path)

    def grid(self, result: Result, name: str, value: float | None) -> ET.Element:
        """Return the Grid of one result, its data stored."""
        check_names(result)
        ensure_room(self.h5_path, _size(result))
        group = f"/grid_{self._grids}"
        self._grids += 1
        grid = ET.Element("Grid", Name=name, GridType="Uniform")
        if value is not None:
            if not np.isfinite(value):
                raise UsageError(
                    f"the step value {value} cannot be stored in XDMF; it must be a finite number."
                )
            ET.SubElement(grid, "Time", Value=repr(float(value)))
        grid.extend(self._mesh_elements(result, group))
        for association, center in _CENTERS:
            for key, values in getattr(result, f"{association}_data").items():
                self._attribute(grid, result, group, association, center, key, values)
        for key, members in result.groups.items():
            element = ET.SubElement(grid, "Set", Name=key, SetType="Cell")
            self._item(element, np.asarray(members), group, f"cell set {key!r}")
        for kept in carrier_of(result).kept:
            element = ET.SubElement(grid, kept.tag, dict(kept.attributes))
            for array in kept.arrays:
                self._item(element, array, group, kept.why)
        return grid

    def _mesh_elements(self, result: Result, group: str) -> tuple[ET.Element, ET.Element]:
        if self._mesh and same_mesh(self._mesh[0], result):
            return self._mesh[1:]
        topology, data = topology_of(result)
        self._item(topology, data, group, "the connectivity", "connectivity")
        two = result.point_dimension == 2 and not np.any(result.points[:, 2])
        points = result.points[:, :2] if two else result.points
        geometry = ET.Element("Geometry", GeometryType="XY" if two else "XYZ")
        self._item(geometry, points, group, "the points", "points")
        self._mesh = (result, topology, geometry)
        return topology, geometry

    def _attribute(
        self,
        grid: ET.Element,
        result: Result,
        group: str,
        association: Association,
        center: str,
        name: str,
        values: Array,
    ) -> None:
        values = np.asarray(values)
        if values.dtype.kind not in "biuf" or values.dtype.itemsize > 8:
            self.lost[
                f"XDMF cannot hold the {association} array {name!r} of type {values.dtype}: left out."
            ] = None
            return
        names = tuple(result.component_names.get((association, name), ()))
        kind, tail = form_of(result, association, name, values, names)
        shape = values.shape if association == "field" else (len(values), *tail)
        if kind == "Tensor6":
            values, names = values[:, TENSOR6_ORDER], TENSOR6_IN_FILE
        element = ET.SubElement(grid, "Attribute", Name=name, AttributeType=kind, Center=center)
        if kind == "Tensor6":
            element.append(ET.Comment(f" components: {' '.join(names)} "))
        # A Matrix of one row keeps its two axes in HDF5, where other readers look.
        stored = values if tail[:1] == (1,) and len(tail) > 1 else values.reshape(shape)
        dataset = self._item(element, stored, group, f"the {association} array {name!r}", name, shape)
        if names:
            dataset.attrs[COMPONENT_NAMES] = np.array(names, dtype=h5py.string_dtype())

    def _item(
        self,
        parent: ET.Element,
        values: Array,
        group: str,
        what: str,
        name: str = "",
        shape: tuple[int, ...] = (),
    ) -> Any:
        values = self._plain(np.asarray(values), what)
        number_type, precision = _NUMBER_TYPES[values.dtype.str[1:]]
        inside = self.file.require_group(group)
        key = base = name if re.fullmatch(r"[A-Za-z_][\w+-]{0,60}", name, re.ASCII) else "data"
        count = 0
        while key in inside:
            count += 1
            key = f"{base}_{count}"
        dataset = inside.create_dataset(key, data=values)
        item = ET.SubElement(
            parent,
            "DataItem",
            Dimensions=" ".join(map(str, shape or values.shape)),
            NumberType=number_type,
            Precision=precision,
            Format="HDF",
        )
        item.text = f"{self.h5_path.name}:{group}/{key}"
        return dataset

    def _plain(self, values: Array, what: str) -> Array:
        values = np.atleast_1d(values)
        if values.dtype == np.float16:
            self.lost[f"XDMF has no 2-byte floating-point numbers: {what} is written with 4 bytes."] = None
            return values.astype(np.float32)
        if values.dtype.kind == "b":
            self.lost[f"XDMF has no true and false: {what} is written as 0 and 1 in one byte."] = None
            return values.astype(np.uint8)
        return values.astype(values.dtype.newbyteorder("="), copy=False)


def _size(result: Result) -> int:
    """Return at least as many bytes as the data of one step takes."""
    arrays = [result.points, *(block.connectivity for block in result.blocks), *result.groups.values()]
    for association, _ in _CENTERS:
        arrays.extend(np.asarray(a) for a in getattr(result, f"{association}_data").values())
    return sum(2 * a.nbytes for a in arrays) + (1 << 20)
