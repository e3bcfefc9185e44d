"""Displacements that exist only as a table by node number, beside a mesh file.

Read by `read_displacement_table`, put onto the mesh by `attach_displacement_table`.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.io._table_text import (
    Floats,
    Integers,
    is_number,
    named_columns,
    read_numbers,
    separator,
    table_lines,
    unnamed_columns,
    whole_numbers,
)
from unturn.numbering import node_numbers
from unturn.result import Array, Result

# Common practice, no source: names of node numbers besides those that `unturn.numbering` knows.
_NUMBER_ARRAYS = {
    "gmshnode", "globalids", "globalid", "originalids", "node", "id", "vtkoriginalpointids", "pedigreenodeid"
}  # fmt: skip
_SAID = 3


@dataclass(frozen=True, eq=False)
class DisplacementTable:
    """Displacements by node number.

    Parameters
    ----------
    node_numbers
        ``(n,)`` as in the table, in its order.
    values
        ``(n, 2)`` or ``(n, 3)``, unit of the table.
    columns
        What the columns of `values` are called in the table, or ``column 2`` and so on.
    path
        Where it was read from.
    """

    node_numbers: Integers
    values: Floats
    columns: tuple[str, ...]
    path: str = ""


def read_displacement_table(path: str | Path) -> DisplacementTable:
    """Return the displacements of a text table with one line for each node.

    The first column, or the one whose name says so, holds whole node numbers; two or three others the
    displacement. Columns are separated by semicolons, tabs, commas or blanks; with semicolons, tabs or blanks
    a decimal comma is understood. Lines that begin with ``#``, ``%``, ``//``, ``**``, ``$`` or ``!`` and
    empty lines are left out.

    Parameters
    ----------
    path
        The file.

    Raises
    ------
    InputError
        The table cannot be read, or it is not clear which columns are meant; file, line and column are named.
    """
    where = str(path)
    rows = table_lines(Path(path), where)
    split, decimal_comma = separator(rows, where)
    head = split(rows[0][1])
    named = not all(is_number(word, decimal_comma) for word in head if word)
    body = rows[1:] if named else rows
    if not body:
        raise InputError(f"{where}: the table has a header and no line of numbers. Write it again.")
    width = len(split(body[0][1]))
    if named and len(head) != width:
        raise InputError(
            f"{where}, line {rows[0][0]}: the header names {len(head)} columns, line {body[0][0]} has "
            f"{width}. "
            "Give each column a name without the separator in it."
        )
    node, axes = named_columns(head, where) if named else unnamed_columns(width, where)
    table = read_numbers(body, split, decimal_comma, (node, *axes), width, where)
    numbers = whole_numbers(table[:, 0], body, node, where)
    columns = tuple(head[k] if named else f"column {k + 1}" for k in axes)
    return DisplacementTable(numbers, table[:, 1:].copy(), columns, where)


def attach_displacement_table(result: Result, table: DisplacementTable, name: str = "displacement") -> Result:
    """Return the result with the displacements of a table as a point array ``(n_points, 2 or 3)``.

    Parameters
    ----------
    result
        The mesh. An array with the solver's node numbers (``node_id``, ``GlobalNodeId`` ...) is used if there
        is one; otherwise the table must number the nodes without a gap from 1 or from 0.
    table
        The displacements.
    name
        Of the new array.

    Raises
    ------
    InputError
        It is not clear which line belongs to which node, numbers are not in the mesh, or a node of a cell has
        no displacement.

    Notes
    -----
    Nodes that no cell uses may be missing: they get NaN. A note on the result says by what the nodes were
    found.

    Examples
    --------
    >>> from unturn.result import CellBlock
    >>> mesh = Result(np.zeros((3, 3)), (CellBlock("triangle", np.array([[0, 1, 2]]), np.array([0])),))
    >>> table = DisplacementTable(np.array([2, 1, 3]), np.array([[0.2, 0], [0.1, 0], [0.3, 0]]), ("ux", "uy"))
    >>> attach_displacement_table(mesh, table).point_data["displacement"][:, 0]
    array([0.1, 0.2, 0.3])
    """
    where = table.path or "the displacement table"
    if name in result.point_data:
        raise InputError(
            f"{where}: the mesh already has a point array {name!r}; use it, or give the table's array "
            "another name."
        )
    numbers, found_by = _mesh_numbers(result, table, where)
    order = np.argsort(numbers, kind="stable")
    ordered = numbers[order]
    at = np.minimum(np.searchsorted(ordered, table.node_numbers), len(ordered) - 1)
    unknown = ordered[at] != table.node_numbers
    if unknown.any():
        raise InputError(
            f"{where}: {unknown.sum()} node numbers are not in the mesh (first: "
            f"{_first(table.node_numbers[unknown])}); "
            f"the mesh has {len(numbers)} nodes, {numbers.min()} to {numbers.max()} ({found_by}). "
            "Use the mesh that the table was made with."
        )
    values = np.full((len(numbers), table.values.shape[1]), np.nan)
    values[order[at]] = table.values
    has = np.zeros(len(numbers), bool)
    has[order[at]] = True
    notes = [f"Displacements from {where}, columns {', '.join(table.columns)}; nodes found by {found_by}."]
    notes.extend(_missing(result, has, numbers, where))
    return replace(result.with_arrays(point_data={name: values}), notes=(*result.notes, *notes))


def _missing(result: Result, has: NDArray[np.bool_], numbers: Integers, where: str) -> list[str]:
    used = np.zeros(len(has), bool)
    for block in result.blocks:
        used[block.connectivity.ravel()] = True
    lacking = used & ~has
    if lacking.any():
        raise InputError(
            f"{where}: {lacking.sum()} nodes of the mesh's cells have no line (first: "
            f"{_first(numbers[lacking])}). "
            "Export the displacement of every node."
        )
    if not has.all():
        return [f"{(~has).sum()} nodes that no cell uses have no line in the table: NaN there."]
    return []


def _first(numbers: Integers) -> str:
    return ", ".join(str(n) for n in numbers[:_SAID]) + (" ..." if len(numbers) > _SAID else "")


def _mesh_numbers(result: Result, table: DisplacementTable, where: str) -> tuple[Integers, str]:
    """Return the number of every node of the mesh, and what they are, for people."""
    candidates = {
        name: values
        for name, values in result.point_data.items()
        if (_simple(name) in _NUMBER_ARRAYS and _numbers_nodes(values))
        or node_numbers(replace(result, point_data={name: values})) is not None
    }
    distinct = {values.astype(np.int64).tobytes(): name for name, values in reversed(candidates.items())}
    if len(distinct) > 1:
        raise InputError(
            f"{where}: the arrays {', '.join(map(repr, candidates))} of the mesh all look like node "
            "numbers and "
            "differ. Remove those that are not the numbers used in the table."
        )
    if distinct:
        name = next(iter(distinct.values()))
        return result.point_data[name].astype(np.int64), f"the mesh's array {name!r}"
    n, low, high = result.n_points, int(table.node_numbers.min()), int(table.node_numbers.max())
    for first in (1, 0):
        if low == first and high == n - 1 + first:
            return np.arange(first, n + first), f"position in the mesh, counted from {first}"
    raise InputError(
        f"{where}: has nodes {low} to {high}; the mesh has {n} nodes and no array of node numbers, so "
        "it is not "
        "clear which line belongs to which node. Write the mesh with its node numbers (an array 'node_id')."
    )


def _simple(name: str) -> str:
    return re.sub(r"[^a-z]", "", name.lower())


def _numbers_nodes(values: Array) -> bool:
    """Whether an array can be node numbers: whole and all different."""
    if values.ndim != 1 or values.dtype.kind not in "iuf" or not len(values):
        return False
    if values.dtype.kind == "f" and not (np.isfinite(values).all() and (values == np.floor(values)).all()):
        return False
    return len(np.unique(values)) == len(values)
