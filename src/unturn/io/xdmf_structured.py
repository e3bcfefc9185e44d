"""Structured XDMF meshes as quads and hexahedra."""

from __future__ import annotations

import re

import numpy as np

from unturn.io.xdmf_binary import dimensions
from unturn.io.xdmf_items import ItemReader
from unturn.io.xdmf_xml import Node, attribute, fault
from unturn.result import Array, CellBlock

_MAX_STRUCTURED = 1 << 26


def structured_shape(topology: Node) -> tuple[int, ...]:
    """Return the number of points along each axis, slowest first."""
    shape = dimensions(topology)
    if shape is None:
        words = attribute(topology, "NumberOfElements").split()
        shape = tuple(int(w) for w in words if re.fullmatch(r"\d{1,9}", w))
    name = attribute(topology, "TopologyType", "Type").lower()
    rank = 2 if name.startswith("2d") else 3
    if not re.fullmatch(r"[23]d(s|rect|corect)mesh", name) or len(shape) != rank or min(shape) < 2:
        raise fault(
            topology,
            f"a {attribute(topology, 'TopologyType', 'Type')} of {' x '.join(map(str, shape)) or 'no'} "
            f"points is not read; {rank} numbers of at least 2 are expected.",
        )
    if int(np.prod(shape, dtype=object)) > _MAX_STRUCTURED:
        raise fault(topology, f"a structured mesh of more than {_MAX_STRUCTURED} points is not read.")
    return shape


def structured_cells(topology: Node, name: str) -> tuple[CellBlock, ...]:
    shape = structured_shape(topology)
    number = np.arange(int(np.prod(shape))).reshape(shape)
    low = number[tuple(slice(0, -1) for _ in shape)].ravel()
    step = [int(s) for s in np.array(number.strides) // number.itemsize]
    around = np.array([0, 1, step[-2] + 1, step[-2]])
    if len(shape) == 3:
        around = np.concatenate([around, around + step[0]])
    cell_type = "quad" if len(shape) == 2 else "hexahedron"
    return (CellBlock(cell_type, low[:, None] + around, np.arange(len(low))),)


def points_on_axes(items: ItemReader, geometry: Node, topology: Node) -> Array:
    shape = structured_shape(topology)
    axes = [items.read(n).ravel() for n in items.children(geometry)]
    if [len(a) for a in axes] != list(shape[::-1]):
        raise fault(
            geometry, f"coordinates along the axes: {[len(a) for a in axes]}, the mesh has {shape[::-1]}."
        )
    grid = np.meshgrid(*axes[::-1], indexing="ij")
    return np.stack([g.ravel() for g in grid[::-1]], axis=1)


def points_from_origin(items: ItemReader, geometry: Node, topology: Node) -> Array:
    shape = structured_shape(topology)
    parts = [items.read(n).ravel() for n in items.children(geometry)]
    if [len(p) for p in parts] != [len(shape)] * 2:
        raise fault(geometry, f"an origin and a spacing of {len(shape)} numbers each are expected.")
    for part in parts:
        if len(set(part.tolist())) > 1:
            items.notes[
                "Origin and spacing of the structured mesh were taken slowest axis first (z, y, x), as XDMF "
                "readers do; the written specification says x, y, z. Check the size of the mesh."
            ] = None
    axes = [o + d * np.arange(n) for o, d, n in zip(parts[0], parts[1], shape)]
    grid = np.meshgrid(*axes, indexing="ij")
    return np.stack([g.ravel() for g in grid[::-1]], axis=1)
