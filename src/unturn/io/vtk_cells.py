"""Cells of a VTK data set as blocks, checked before anything else touches them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from vtkmodules.vtkCommonCore import VTK_UNSIGNED_CHAR
from vtkmodules.vtkCommonDataModel import vtkCellArray

from unturn.errors import InputError
from unturn.io.vtk_arrays import from_numpy, to_numpy
from unturn.io.vtk_types import POLYHEDRON, TURNED, cell_name, expected_nodes, is_cell_type, uniform_types
from unturn.result import CellBlock

Ints = NDArray[np.int64]


def blocks_of_unstructured(grid: Any, where: str) -> tuple[CellBlock, ...]:
    """Return the cell blocks of a `vtkUnstructuredGrid`; raise `InputError` for anything inconsistent."""
    if grid.GetNumberOfCells() == 0:
        return ()
    types = types_of(grid)
    offsets, connectivity = _cell_array(grid.GetCells(), where)
    if len(types) != len(offsets) - 1:
        raise InputError(
            f"{where}{len(types)} cell types for {len(offsets) - 1} cells. "
            "The file is incomplete or was written wrongly: write it again."
        )
    check_range(connectivity, grid.GetNumberOfPoints(), offsets, where)
    polyhedra = np.flatnonzero(types == POLYHEDRON)
    if len(polyhedra):
        _check_polyhedra(grid, polyhedra, where)
    return group(types, offsets, connectivity, where)


def types_of(grid: Any) -> NDArray[np.uint8]:
    """Return the VTK type number of every cell of an unstructured grid."""
    try:
        array = grid.GetCellTypes()
    except TypeError:  # VTK before 9.6 wants an argument
        array = grid.GetCellTypesArray()
    types = to_numpy(array)
    assert types is not None
    return types


def blocks_of_poly(data: Any, where: str) -> tuple[CellBlock, ...]:
    """Return the cell blocks of a `vtkPolyData`, cells in VTK's order: verts, lines, polys, strips."""
    types, sizes, parts = [], [], []
    # Source: VTK 9.7, vtkPolyData::BuildCells: the type follows from the kind and the number of nodes.
    for cells, by_size, other in (
        (data.GetVerts(), {1: 1}, 2),
        (data.GetLines(), {2: 3}, 4),
        (data.GetPolys(), {3: 5, 4: 9}, 7),
        (data.GetStrips(), {}, 6),
    ):
        if not cells.GetNumberOfCells():
            continue
        offsets, connectivity = _cell_array(cells, where)
        count = np.diff(offsets)
        kind = uniform_types(other, len(count))
        for size, number in by_size.items():
            kind[count == size] = number
        types.append(kind)
        sizes.append(count)
        parts.append(connectivity)
    if not types:
        return ()
    offsets = np.concatenate([[0], np.cumsum(np.concatenate(sizes))])
    connectivity = np.concatenate(parts)
    check_range(connectivity, data.GetNumberOfPoints(), offsets, where)
    return group(np.concatenate(types), offsets, connectivity, where)


def blocks_of_structured(dimensions: tuple[int, int, int], where: str) -> tuple[CellBlock, ...]:
    """Return one block of hexahedra, quads, lines or vertices over a grid of ``dimensions`` points."""
    if min(dimensions) < 1:
        return ()
    n_cells = int(np.prod([max(d - 1, 1) for d in dimensions], dtype=object))
    if n_cells > 2**31:
        raise InputError(
            f"{where}the grid of {dimensions[0]} x {dimensions[1]} x {dimensions[2]} points has {n_cells} "
            "cells, more than can be held in memory. Check the extents in the file, or cut a part out."
        )
    strides = (1, dimensions[0], dimensions[0] * dimensions[1])
    axes = [a for a in range(3) if dimensions[a] > 1]
    first = np.zeros(1, dtype=np.int64)
    for a in axes:
        first = (np.arange(dimensions[a] - 1)[:, None] * strides[a] + first[None, :]).ravel()
    steps = [strides[a] for a in axes]
    corners = {
        0: [0],
        1: [0, *steps],
        2: [0, steps[0], sum(steps), steps[1]] if len(steps) == 2 else [],
    }.get(len(axes))
    if corners is None:
        i, j, k = steps
        corners = [0, i, i + j, j, k, i + k, i + j + k, j + k]
    name = ("vertex", "line", "quad", "hexahedron")[len(axes)]
    return (CellBlock(name, first[:, None] + np.array(corners), np.arange(len(first))),)


def group(types: NDArray[Any], offsets: Ints, connectivity: Ints, where: str) -> tuple[CellBlock, ...]:
    """Return blocks of equal type and node count, in the order in which each first appears."""
    counts = np.diff(offsets)
    n = int(counts[0])
    if (types == types[0]).all() and (counts == n).all():
        block = _block(int(types[0]), connectivity.reshape(len(counts), n), np.arange(len(counts)), where)
        return (block,)
    key = (types.astype(np.int64) << 32) | counts
    keys, first = np.unique(key, return_index=True)
    blocks = []
    for k in keys[np.argsort(first)]:
        index = np.flatnonzero(key == k)
        nodes = connectivity[offsets[index][:, None] + np.arange(int(k & 0xFFFFFFFF))]
        blocks.append(_block(int(k >> 32), nodes, index, where))
    return tuple(blocks)


def _block(number: int, nodes: Ints, index: Ints, where: str) -> CellBlock:
    if not is_cell_type(number):
        raise InputError(
            f"{where}cell {int(index[0])} has the cell type {number}, and VTK 9.7 has none of this number. The file is "
            "damaged or of another program's making: write it again."
        )
    expected = expected_nodes(number, nodes.shape[1])
    if expected:
        raise InputError(
            f"{where}cell {int(index[0])} ({cell_name(number)}) has {nodes.shape[1]} nodes; a cell of this "
            f"type has {expected}. The program that wrote the file gave it the wrong type or dropped nodes: "
            "correct the export there."
        )
    if number in TURNED:
        nodes = nodes[:, TURNED[number]]
    return CellBlock(cell_name(number), nodes, index)


def _cell_array(cells: Any, where: str) -> tuple[Ints, Ints]:
    """Return offsets (n + 1) and connectivity of a `vtkCellArray`, offsets proved to fit the connectivity."""
    raw_offsets, raw = to_numpy(cells.GetOffsetsArray()), to_numpy(cells.GetConnectivityArray())
    assert raw_offsets is not None
    assert raw is not None
    offsets, connectivity = raw_offsets.astype(np.int64, copy=False), raw.astype(np.int64, copy=False)
    check_offsets(offsets, len(connectivity), where)
    return offsets, connectivity


def check_offsets(offsets: Ints, n_entries: int, where: str, what: str = "cell") -> None:
    """Raise `InputError` unless ``(n + 1,)`` offsets start at 0, never fall and end at `n_entries`."""
    falls = np.flatnonzero(offsets[1:] < offsets[:-1])
    if len(offsets) == 0 or offsets[0] != 0 or len(falls) or offsets[-1] != n_entries:
        at = f"{what} {int(falls[0])}" if len(falls) else f"the last {what}"
        raise InputError(
            f"{where}the offsets into the list of nodes are wrong at {at}: they must rise from 0 to "
            f"{n_entries}, the length of the list. The file is damaged or incomplete: write it again."
        )


def check_range(nodes: Ints, n_points: int, offsets: Ints, where: str) -> None:
    """Raise `InputError` when a cell refers to a point that does not exist; `nodes` runs along `offsets`."""
    if not nodes.size or (int(nodes.min()) >= 0 and int(nodes.max()) < n_points):
        return
    at = int(np.flatnonzero((nodes < 0) | (nodes >= n_points))[0])
    cell = int(np.searchsorted(offsets, at, side="right")) - 1
    raise InputError(
        f"{where}cell {cell} refers to node {int(nodes[at])}, but the mesh has nodes 0 to {n_points - 1}. "
        "The file is damaged or was written with another node numbering: write it again."
    )


def _check_polyhedra(grid: Any, polyhedra: Ints, where: str) -> None:
    """Raise `InputError` when a polyhedron has no faces, or a face or one of its nodes does not exist."""
    faces, locations = grid.GetPolyhedronFaces(), grid.GetPolyhedronFaceLocations()
    if faces is None or locations is None:
        raise InputError(f"{where}the polyhedra have no faces. The file is incomplete: write it again.")
    face_offsets, face_nodes = _cell_array(faces, where)
    check_range(face_nodes, grid.GetNumberOfPoints(), face_offsets, where + "a polyhedron face: ")
    location_offsets, face_ids = _cell_array(locations, where)
    if len(location_offsets) - 1 != grid.GetNumberOfCells():
        raise InputError(f"{where}the list of polyhedron faces does not fit the cells: write the file again.")
    bare = polyhedra[np.diff(location_offsets)[polyhedra] == 0]
    if len(bare):
        raise InputError(f"{where}the polyhedron in cell {int(bare[0])} has no faces: write the file again.")
    if len(face_ids) and (face_ids.min() < 0 or face_ids.max() >= len(face_offsets) - 1):
        raise InputError(f"{where}a polyhedron refers to a face that does not exist: write the file again.")


def grid_from_blocks(blocks: tuple[CellBlock, ...], numbers: tuple[int, ...]) -> tuple[Any, Any]:
    """Return VTK cell types and a `vtkCellArray` of blocks in file order; `numbers` are their VTK types."""
    n_cells = sum(len(b) for b in blocks)
    types, counts = np.zeros(n_cells, np.uint8), np.zeros(n_cells, np.int64)
    for block, number in zip(blocks, numbers, strict=True):
        types[block.index], counts[block.index] = number, block.connectivity.shape[1]
    offsets = np.concatenate([[0], np.cumsum(counts)])
    nodes = np.empty(int(offsets[-1]), np.int64)
    for block in blocks:
        width = block.connectivity.shape[1]
        nodes[offsets[block.index][:, None] + np.arange(width)] = block.connectivity
    cells = vtkCellArray()
    cells.SetData(from_numpy(offsets, "offsets"), from_numpy(nodes, "connectivity"))
    kinds = from_numpy(types, "types")
    assert kinds.GetDataType() == VTK_UNSIGNED_CHAR
    return kinds, cells
