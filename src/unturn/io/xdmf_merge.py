"""One mesh from the grids of one XDMF step: grids that share points or cells are joined, others added."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.io.xdmf_attributes import Field, Kept, read_attribute, read_set
from unturn.io.xdmf_items import ItemReader
from unturn.io.xdmf_mesh import mesh_key, read_cells, read_points
from unturn.io.xdmf_xml import Node, attribute, fault, local_name
from unturn.result import Array, Association, CellBlock


@dataclass(eq=False)
class Part:
    """One Uniform grid as read."""

    grid: Node
    name: str
    points: Array
    point_dimension: int
    blocks: tuple[CellBlock, ...]
    connectivity_dtype: str
    cells_key: object
    geometry_key: object
    fields: list[Field] = field(default_factory=list)
    sets: dict[str, NDArray[np.int64]] = field(default_factory=dict)
    kept: list[Kept] = field(default_factory=list)

    @property
    def n_cells(self) -> int:
        """Number of cells."""
        return sum(len(b) for b in self.blocks)


@dataclass(eq=False)
class Merged:
    """The arrays of a `Result`, and what its carrier needs."""

    arrays: dict[str, Any]
    point_dimension: int
    forms: dict[tuple[Association, str], tuple[str, tuple[int, ...]]]
    connectivity_dtype: str
    kept: tuple[Kept, ...]


def read_part(items: ItemReader, grid: Node) -> Part:
    """Return one Uniform grid with everything in it.

    Raises
    ------
    InputError
        No mesh, or data that is damaged or of a kind that is not read.
    """
    name = attribute(grid, "Name")
    topology, geometry = items.tree.child(grid, "Topology"), items.tree.child(grid, "Geometry")
    if topology is None or geometry is None:
        what = "Topology" if topology is None else "Geometry"
        raise fault(
            grid, f"the Grid {name!r} has no {what}: each grid and each step needs its mesh or an include."
        )
    blocks, dtype = read_cells(items, topology)
    points, dimension = read_points(items, geometry, topology)
    _check_nodes(topology, blocks, len(points))
    cells_key, geometry_key = mesh_key(items, topology, geometry)
    part = Part(grid, name, points, dimension, blocks, str(dtype), cells_key, geometry_key)
    for child in items.tree.children(grid):
        if local_name(child) == "Attribute":
            found = read_attribute(items, child, len(points), blocks)
            if isinstance(found, Kept):
                part.kept.append(found)
            else:
                part.fields.append(found)
        elif local_name(child) == "Set":
            members = read_set(items, child, part.n_cells)
            if isinstance(members, Kept):
                part.kept.append(members)
            else:
                part.sets[attribute(items.tree.resolve(child), "Name") or f"set {len(part.sets)}"] = members
    return part


def _check_nodes(topology: Node, blocks: tuple[CellBlock, ...], n_points: int) -> None:
    for block in blocks:
        wrong = (block.connectivity < 0) | (block.connectivity >= n_points)
        if wrong.any():
            row, column = np.argwhere(wrong)[0]
            raise fault(
                topology,
                f"cell {block.index[row]} ({block.cell_type}) refers to node "
                f"{block.connectivity[row, column]}, but the mesh has nodes 0 to {n_points - 1}. "
                "The file is damaged or was written with another node numbering: write it again.",
            )


def merge(parts: list[Part], items: ItemReader) -> Merged:
    """Return one mesh from the grids of one step.

    Raises
    ------
    InputError
        Two grids give one array different values for the same points or cells.
    """
    first_point, points = _place({id(p): (p.geometry_key, len(p.points)) for p in parts})
    first_cell, n_cells = _place({id(p): ((p.cells_key, p.geometry_key), p.n_cells) for p in parts})
    distinct = list({first_cell[id(p)]: p for p in reversed(parts)}.values())[::-1]
    arrays: dict[str, Any] = {
        "points": _stack({first_point[id(p)]: p.points for p in parts}),
        "blocks": _blocks(distinct, first_point, first_cell),
        "point_data": {},
        "cell_data": {},
        "field_data": {},
        "groups": _groups(parts, distinct, first_cell),
        "component_names": {},
    }
    forms: dict[tuple[Association, str], tuple[str, tuple[int, ...]]] = {}
    chunks: dict[tuple[Any, str], list[tuple[int, Field, Part]]] = {}
    for part in parts:
        seen: set[tuple[str, str]] = set()
        for one in part.fields:
            key = (one.center, one.name)
            if key in seen:
                raise fault(
                    part.grid, f"two {one.center} arrays are called {one.name!r} in one grid; rename one."
                )
            seen.add(key)
            first = {"point": first_point, "cell": first_cell}.get(one.center, {}).get(id(part), 0)
            chunks.setdefault(key, []).append((first, one, part))
    for (center, name), pieces in chunks.items():
        total = {"point": points, "cell": n_cells}.get(center)
        arrays[f"{center}_data"][name] = _assemble(pieces, total, items)
        forms[center, name] = (pieces[0][1].kind, pieces[0][1].tail)
        if pieces[0][1].components:
            arrays["component_names"][center, name] = pieces[0][1].components
    kept = tuple(k for p in parts for k in p.kept) if len(distinct) == 1 else ()
    for part in parts:
        for one_kept in part.kept:
            fate = "it is written back as it was" if kept else "it is left out"
            items.notes[f"Not used: {one_kept.why}; {fate}."] = None
    dimension = max(p.point_dimension for p in parts)
    return Merged(arrays, dimension, forms, parts[0].connectivity_dtype, kept)


def _place(sizes: dict[int, tuple[object, int]]) -> tuple[dict[int, int], int]:
    """Return where the rows of each part begin, and how many there are; equal keys share their rows."""
    begin: dict[object, int] = {}
    first: dict[int, int] = {}
    total = 0
    for part, (key, size) in sizes.items():
        if key not in begin:
            begin[key], total = total, total + size
        first[part] = begin[key]
    return first, total


def _stack(pieces: dict[int, Array]) -> Array:
    ordered = [pieces[k] for k in sorted(pieces)]
    return ordered[0] if len(ordered) == 1 else np.concatenate(ordered)


def _blocks(
    parts: list[Part], first_point: dict[int, int], first_cell: dict[int, int]
) -> tuple[CellBlock, ...]:
    if len(parts) == 1:
        return parts[0].blocks
    rows: dict[tuple[str, int], list[tuple[Array, Array]]] = {}
    for part in parts:
        for block in part.blocks:
            key = (block.cell_type, block.connectivity.shape[1])
            moved = (block.connectivity + first_point[id(part)], block.index + first_cell[id(part)])
            rows.setdefault(key, []).append(moved)
    return tuple(
        CellBlock(cell_type, np.concatenate([c for c, _ in pieces]), np.concatenate([i for _, i in pieces]))
        for (cell_type, _), pieces in rows.items()
    )


def _groups(
    parts: list[Part], distinct: list[Part], first_cell: dict[int, int]
) -> dict[str, NDArray[np.int64]]:
    groups: dict[str, list[NDArray[np.int64]]] = {}
    if len(distinct) > 1:
        for number, part in enumerate(distinct):
            cells = np.arange(part.n_cells) + first_cell[id(part)]
            groups.setdefault(part.name or f"grid {number}", []).append(cells)
    for part in parts:
        for name, members in part.sets.items():
            groups.setdefault(name, []).append(members + first_cell[id(part)])
    return {name: np.concatenate(g) if len(g) > 1 else g[0] for name, g in groups.items()}


def _assemble(pieces: list[tuple[int, Field, Part]], total: int | None, items: ItemReader) -> Array:
    one = pieces[0][1]
    if len(pieces) == 1 and (total is None or len(one.values) == total):
        return one.values
    if total is None:
        if all(_same(f.values, one.values) for _, f, _ in pieces):
            return one.values
        raise fault(pieces[1][2].grid, f"two grids have different values for the grid array {one.name!r}.")
    if len({f.values.shape[1:] for _, f, _ in pieces}) > 1:
        raise fault(
            pieces[1][2].grid,
            f"the array {one.name!r} has {one.values.shape[1:]} components in another grid.",
        )
    dtype = np.result_type(*(f.values.dtype for _, f, _ in pieces))
    known = np.zeros(total, bool)
    for first, f, _ in pieces:
        known[first : first + len(f.values)] = True
    if not known.all() and dtype.kind != "f":
        dtype = np.dtype(np.float64)
    values = np.full((total, *one.values.shape[1:]), np.nan if dtype.kind == "f" else 0, dtype)
    filled = np.zeros(total, bool)
    for first, f, at in pieces:
        rows = slice(first, first + len(f.values))
        if filled[rows].any() and not _same(values[rows], f.values.astype(dtype)):
            raise fault(
                at.grid, f"two grids give the {f.center} array {f.name!r} different values for one mesh."
            )
        values[rows], filled[rows] = f.values, True
    if not known.all():
        items.notes[f"The {one.center} array {one.name!r} is not in every grid: NaN where it is missing."] = (
            None
        )
    return values


def _same(a: Array, b: Array) -> bool:
    return a.shape == b.shape and np.array_equal(a, b, equal_nan=a.dtype.kind == "f" and b.dtype.kind == "f")
