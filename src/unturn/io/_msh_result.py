"""The `Result` of one step of an MSH file."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from unturn.errors import InputError, UsageError
from unturn.io._msh import Data, Integers, Msh, read_msh
from unturn.io._msh_cells import CELLS, to_vtk_order
from unturn.io._node_order import checked_order
from unturn.result import Array, CellBlock, Result, Steps

# Source: Gmsh 4.13 reference manual, MSH file format: dimension of the entity an element type belongs to.
_DIMENSIONS = {"vertex": 0, "line": 1, "triangle": 2, "quad": 2}
_DIMENSIONS |= {"VTK_LAGRANGE_CURVE": 1, "VTK_LAGRANGE_TRIANGLE": 2, "VTK_LAGRANGE_QUADRILATERAL": 2}


class MshFile:
    """An opened MSH file; see `unturn.io._format.ResultFile`.

    Raises
    ------
    InputError
        The file is damaged, holds no element, or is of another version.
    """

    format_name = "MSH"

    def __init__(self, path: Path) -> None:
        self.path = str(path)
        self._msh = read_msh(path)
        if not self._msh.chunks or not len(self._msh.points):
            raise InputError(
                f"{path}: the file has no elements; a file of views alone needs the mesh in the same file."
            )
        views = [*self._msh.node_data, *self._msh.element_data]
        times = {(d.step, d.time): d.time for d in views}
        self._keys = sorted(times, key=lambda key: (key[1], key[0]))
        values = tuple(times[key] for key in self._keys)
        if len(set(values)) < len(values):
            values = tuple(float(step) for step, _ in self._keys)
        self.steps: tuple[float, ...] | None = values if len(values) > 1 else None

    def read(self, step: int = 0) -> Result:
        """Return one step (zero-based) as a `Result`.

        Raises
        ------
        InputError
            Node or element numbers are repeated or missing, or one array has two values at a node.
        UsageError
            There is no such step.
        """
        n_steps = len(self.steps or (0.0,))
        if not 0 <= step < n_steps:
            raise UsageError(f"{self.path}: has steps 0 to {n_steps - 1}; step {step} was asked for.")
        msh = self._msh
        numbers = np.concatenate([c.numbers for c in msh.chunks])
        blocks, repaired = checked_order(msh.points, self._blocks(), f"{self.path}: ")
        notes = [*repaired]
        if msh.skipped:
            notes.append("Values at the corners of each element ($ElementNodeData) are not read.")
        key = self._keys[step] if self._keys else None
        point_data = self._arrays(msh.node_data, key, msh.node_numbers, "node", notes)
        cell_data = self._arrays(msh.element_data, key, numbers, "element", notes)
        physical = [p[0] if p else 0 for c in msh.chunks for p in c.physical]
        return Result(
            msh.points,
            blocks,
            {"node_id": msh.node_numbers, **point_data},
            {
                "element_id": numbers,
                "gmsh:physical": np.array(physical, np.int64),
                "gmsh:geometrical": np.concatenate([c.entity for c in msh.chunks]),
                **cell_data,
            },
            groups=_groups(msh),
            steps=Steps(self.steps, step) if self.steps else None,
            path=self.path,
            format_name=self.format_name,
            notes=tuple(notes),
        )

    def _blocks(self) -> tuple[CellBlock, ...]:
        rows: dict[int, list[tuple[Integers, Integers]]] = {}
        first = 0
        for chunk in self._msh.chunks:
            index = np.arange(first, first + len(chunk.numbers))
            nodes = self._positions(chunk.nodes, self._msh.node_numbers, "node")
            rows.setdefault(chunk.kind, []).append((nodes, index))
            first += len(index)
        return tuple(
            CellBlock(
                CELLS[kind][0],
                to_vtk_order(CELLS[kind][0], np.concatenate([n for n, _ in parts])),
                np.concatenate([i for _, i in parts]),
            )
            for kind, parts in rows.items()
        )

    def _positions(self, wanted: Integers, numbers: Integers, what: str) -> Integers:
        """Return the positions of numbers as in the file."""
        order = np.argsort(numbers, kind="stable")
        ordered = numbers[order]
        if (ordered[1:] == ordered[:-1]).any():
            twice = ordered[1:][ordered[1:] == ordered[:-1]][0]
            raise InputError(f"{self.path}: two {what}s have the number {twice}. Write the file again.")
        at = np.minimum(np.searchsorted(ordered, wanted), len(ordered) - 1)
        missing = ordered[at] != wanted
        if missing.any():
            raise InputError(
                f"{self.path}: {what} {wanted[missing][0]} is referred to and not in the file. "
                "The file is damaged or incomplete: write it again."
            )
        found: Integers = order[at]
        return found

    def _arrays(
        self, views: list[Data], key: tuple[int, float] | None, numbers: Integers, what: str, notes: list[str]
    ) -> dict[str, Array]:
        arrays: dict[str, Array] = {}
        filled: dict[str, Array] = {}
        for view in views:
            if (view.step, view.time) != key:
                continue
            width = view.values.shape[1:]
            if view.name not in arrays:
                arrays[view.name] = np.full((len(numbers), *width), np.nan)
                filled[view.name] = np.zeros(len(numbers), bool)
            rows = self._positions(view.numbers, numbers, what)
            same = arrays[view.name].shape[1:] == width
            if not same or filled[view.name][rows].any() or len(np.unique(rows)) < len(rows):
                raise InputError(
                    f"{self.path}: two arrays of one step are called {view.name!r} and have values at the "
                    f"same {what}s. Give each a name or a step of its own."
                )
            arrays[view.name][rows], filled[view.name][rows] = view.values, True
        for name, known in filled.items():
            if not known.all():
                notes.append(f"The array {name!r} has no value at {np.sum(~known)} {what}s; NaN there.")
        return arrays


def _groups(msh: Msh) -> dict[str, Integers]:
    """Return the physical groups by name, ``physical N`` where it has none."""
    members: dict[tuple[int, int], list[int]] = {}
    first = 0
    for chunk in msh.chunks:
        dimension = _DIMENSIONS.get(CELLS[chunk.kind][0].rstrip("0123456789"), 3)
        for row, tags in enumerate(chunk.physical, first):
            for tag in tags:
                members.setdefault((dimension, abs(tag)), []).append(row)
        first += len(chunk.numbers)
    groups: dict[str, Integers] = {}
    for (dimension, tag), rows in members.items():
        name = msh.names.get((dimension, tag), f"physical {tag}")
        if name in groups:
            name = f"{name} ({dimension}D)"
        groups[name] = np.array(rows, np.int64)
    return groups
