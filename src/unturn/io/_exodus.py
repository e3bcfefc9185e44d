"""Exodus II results: mesh, blocks, and the arrays of every step."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError
from unturn.io._netcdf import load_exodus
from unturn.io._node_order import PLACES, Places, checked_order
from unturn.result import Array, CellBlock, Result, Steps

# Names by which writers call the shapes -> meshio's name by number of nodes.
# Source: Exodus II manual (SAND92-2137), element types; the names of the shells are common practice.
_SHAPES: tuple[tuple[str, dict[int, str]], ...] = (
    ("HEX", {8: "hexahedron", 20: "hexahedron20", 27: "hexahedron27"}),
    ("TET", {4: "tetra", 10: "tetra10"}),
    ("WED", {6: "wedge", 15: "wedge15", 18: "wedge18"}),
    ("PENTA", {6: "wedge", 15: "wedge15", 18: "wedge18"}),
    ("PYR", {5: "pyramid", 13: "pyramid13", 14: "pyramid14"}),
    ("TRI", {3: "triangle", 6: "triangle6", 7: "triangle7"}),
    ("QUAD", {4: "quad", 8: "quad8", 9: "quad9"}),
    ("SHELL", {3: "triangle", 6: "triangle6", 4: "quad", 8: "quad8", 9: "quad9"}),
    ("BAR", {2: "line", 3: "line3"}),
    ("BEAM", {2: "line", 3: "line3"}),
    ("TRUSS", {2: "line", 3: "line3"}),
    ("ROD", {2: "line", 3: "line3"}),
    ("EDGE", {2: "line", 3: "line3"}),
    ("SPHERE", {1: "vertex"}),
    ("CIRCLE", {1: "vertex"}),
)
_UPRIGHT6: Places = ((0, 3), (1, 4), (2, 5))
_UPRIGHT8: Places = ((0, 4), (1, 5), (2, 6), (3, 7))
_RING6 = PLACES["wedge15"]
_RING8 = PLACES["hexahedron20"]
_HEX20: Places = (*_RING8[:4], *_UPRIGHT8, *_RING8[4:8])
_WEDGE15: Places = (*_RING6[:3], *_UPRIGHT6, *_RING6[3:6])
# The order of the nodes after the corners where it is not VTK's. Source: Exodus II manual, node ordering.
_EXODUS_PLACES: dict[str, Places] = {
    "hexahedron20": _HEX20,
    "hexahedron27": (
        *_HEX20, tuple(range(8)), (0, 1, 2, 3), (4, 5, 6, 7), (0, 4, 7, 3), (1, 2, 6, 5), (0, 1, 5, 4),
        (3, 2, 6, 7),
    ),
    "wedge15": _WEDGE15,
    "wedge18": (*_WEDGE15, (0, 1, 4, 3), (1, 2, 5, 4), (2, 0, 3, 5)),
}  # fmt: skip


class ExodusFile:
    """An opened Exodus II file; see `unturn.io._format.ResultFile`.

    Raises
    ------
    InputError
        The file is damaged, or holds elements that are not read.
    """

    format_name = "Exodus"

    def __init__(self, path: Path) -> None:
        self.path = str(path)
        self._variables, self._types = load_exodus(path)
        times = self._variables.get("time_whole", np.empty(0)).ravel().astype(np.float64)
        self.steps: tuple[float, ...] | None = tuple(times.tolist()) or None

    def read(self, step: int = 0) -> Result:
        """Return one step (zero-based) as a `Result`.

        Raises
        ------
        InputError
            An array does not fit the mesh, or an element type is not read.
        UsageError
            There is no such step.
        """
        n_steps = len(self.steps or (0.0,))
        if not 0 <= step < n_steps:
            raise UsageError(f"{self.path}: has steps 0 to {n_steps - 1}; step {step} was asked for.")
        points = self._points()
        blocks, sizes, groups = self._blocks(len(points))
        blocks, notes = checked_order(points, blocks, f"{self.path}: ")
        if any(re.match(r"(node_ns|elem_ss)\d", name) for name in self._variables):
            notes = (*notes, "The node sets and side sets of the file are not read.")
        point_data = _vectors(dict(self._nodal(step, len(points))))
        cell_data = dict(self._elemental(step, sizes))
        for variable, name, data, n in (
            ("node_num_map", "node_id", point_data, len(points)),
            ("elem_num_map", "element_id", cell_data, sum(sizes)),
        ):
            if variable in self._variables and name not in data:
                data[name] = self._sized(variable, self._variables[variable].ravel(), n).astype(np.int64)
        return Result(
            points,
            blocks,
            point_data,
            cell_data,
            self._global(step),
            groups,
            steps=Steps(self.steps, step) if self.steps else None,
            path=self.path,
            format_name=self.format_name,
            point_dimension=2 if "coordz" not in self._variables and self._flat() else 3,
            notes=notes,
        )

    def _flat(self) -> bool:
        coord = self._variables.get("coord")
        return len(coord) == 2 if coord is not None and coord.ndim == 2 else "coordy" in self._variables

    def _sized(self, variable: str, values: Array, n: int) -> Array:
        if len(values) != n:
            raise InputError(
                f"{self.path}: the variable {variable!r} has {len(values)} values; {n} are expected. "
                "The file is incomplete or was written wrongly: write it again."
            )
        return values

    def _points(self) -> Array:
        v = self._variables
        columns = (
            list(v["coord"]) if "coord" in v else [v[c] for c in ("coordx", "coordy", "coordz") if c in v]
        )
        if not columns or len(columns) > 3 or len({c.shape for c in columns}) > 1 or columns[0].ndim != 1:
            raise InputError(f"{self.path}: the coordinates of the nodes are missing or of unequal length.")
        columns += [np.zeros_like(columns[0])] * (3 - len(columns))
        return np.stack(columns, axis=1)

    def _blocks(self, n_points: int) -> tuple[tuple[CellBlock, ...], list[int], dict[str, NDArray[np.int64]]]:
        names, ids = (
            _words(self._variables.get("eb_names")),
            self._variables.get("eb_prop1", np.empty(0)).ravel(),
        )
        rows: dict[str, list[tuple[Array, Array]]] = {}
        groups: dict[str, NDArray[np.int64]] = {}
        sizes: list[int] = []
        count = len(ids) or sum(bool(re.fullmatch(r"connect\d+", v)) for v in self._variables)
        for k in range(count):
            table = self._variables.get(f"connect{k + 1}")
            table = np.empty((0, 1), np.int64) if table is None else table
            if table.ndim != 2 or table.dtype.kind not in "iu":
                raise InputError(
                    f"{self.path}: the elements of block {k + 1} are not a table of node numbers."
                )
            index = np.arange(len(table)) + sum(sizes)
            sizes.append(len(table))
            if not len(table):
                continue
            cell_type = self._cell_type(k, table.shape[1])
            rows.setdefault(cell_type, []).append((table.astype(np.int64) - 1, index))
            name = names[k] if k < len(names) and names[k] else f"block {ids[k] if k < len(ids) else k + 1}"
            groups[name] = np.concatenate([groups.get(name, np.empty(0, np.int64)), index])
        blocks = []
        for cell_type, parts in rows.items():
            nodes = np.concatenate([n for n, _ in parts])
            if int(nodes.min()) < 0 or int(nodes.max()) >= n_points:
                raise InputError(
                    f"{self.path}: a {cell_type} element refers to a node outside 1 to {n_points}. "
                    "The file is damaged: write it again."
                )
            order = _to_vtk_order(cell_type, nodes.shape[1])
            blocks.append(CellBlock(cell_type, nodes[:, order], np.concatenate([i for _, i in parts])))
        return tuple(blocks), sizes, groups

    def _cell_type(self, block: int, n_nodes: int) -> str:
        stated = self._types.get(f"connect{block + 1}", "")
        for word, by_nodes in _SHAPES:
            if stated.upper().startswith(word) and n_nodes in by_nodes:
                return by_nodes[n_nodes]
        raise InputError(
            f"{self.path}: block {block + 1} holds elements of type {stated!r} with {n_nodes} nodes, which "
            "are not read. Write the result as VTU."
        )

    def _nodal(self, step: int, n_points: int) -> Iterator[tuple[str, Array]]:
        together = self._variables.get("vals_nod_var")
        for k, name in enumerate(_words(self._variables.get("name_nod_var"))):
            values = self._variables.get(f"vals_nod_var{k + 1}")
            if values is None and together is not None and together.ndim == 3 and k < together.shape[1]:
                values = together[:, k]
            if values is None or values.ndim != 2 or step >= len(values):
                raise InputError(f"{self.path}: the nodal array {name!r} has no values at step {step}.")
            yield name, self._sized(name, values[step], n_points)

    def _elemental(self, step: int, sizes: list[int]) -> Iterator[tuple[str, Array]]:
        for k, name in enumerate(_words(self._variables.get("name_elem_var"))):
            parts = []
            for b, n in enumerate(sizes):
                values = self._variables.get(f"vals_elem_var{k + 1}eb{b + 1}")
                if values is not None and (values.ndim != 2 or step >= len(values)):
                    raise InputError(f"{self.path}: the element array {name!r} has no values at step {step}.")
                parts.append(np.full(n, np.nan) if values is None else self._sized(name, values[step], n))
            yield name, np.concatenate(parts)

    def _global(self, step: int) -> dict[str, Array]:
        values = self._variables.get("vals_glo_var")
        names = _words(self._variables.get("name_glo_var"))
        if values is None or values.ndim != 2 or step >= len(values) or values.shape[1] != len(names):
            return {}
        return {name: values[step, k : k + 1] for k, name in enumerate(names)}


def _to_vtk_order(cell_type: str, n_nodes: int) -> list[int]:
    if cell_type not in _EXODUS_PLACES:
        return list(range(n_nodes))
    theirs = [frozenset(place) for place in _EXODUS_PLACES[cell_type]]
    corners = n_nodes - len(theirs)
    return [*range(corners), *(corners + theirs.index(frozenset(p)) for p in PLACES[cell_type])]


def _words(table: Array | None) -> list[str]:
    """Return names stored as rows of single characters."""
    if table is None or table.dtype.kind not in "SU" or table.ndim != 2:
        return []
    rows = [b"".join(np.asarray(row, dtype="S1").tolist()) for row in table]
    return [row.split(b"\0")[0].decode("utf-8", "replace").strip() for row in rows]


def _vectors(arrays: dict[str, Array]) -> dict[str, Array]:
    """Put arrays that are the components of a vector by their names (``dispx dispy dispz``) together."""
    found: dict[str, Array] = {}
    taken: set[str] = set()
    for name, values in arrays.items():
        stem = name[:-1]
        parts = [stem + (letter if name[-1:] == "x" else letter.upper()) for letter in "xyz"]
        together = [p for p in parts if p in arrays]
        label = stem.rstrip("_ ")
        if name[-1:] in ("x", "X") and label and together[:2] == parts[:2] and label not in arrays:
            found[label] = np.stack([arrays[p] for p in together], axis=1)
            taken.update(together)
        elif name not in taken:
            found[name] = values
    return found
