"""Displacements that exist only as a table by node number, beside a mesh file.

Read by `read_displacement_table`, put onto the mesh by `attach_displacement_table`.
"""

from __future__ import annotations

import codecs
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.result import Array, Result

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Common practice, no source: names that tables and mesh files give to node numbers and displacements.
_NODE_HEADS = (
    "node", "nodeid", "nodeno", "nodenumber", "nodenr", "nodelabel", "nodetag", "id", "nid", "no", "nr",
    "number", "label", "grid", "gridid", "point", "pointid", "globalid", "n",
)  # fmt: skip
_AXIS_HEADS = tuple(
    tuple(form.format(letter, number) for form in (
        "u{0}", "u{1}", "uu{1}", "d{0}", "t{1}", "u{0}displacement", "disp{0}", "disp{1}", "displ{0}",
        "displ{1}", "displacement{0}", "displacement{1}", "{0}displacement", "{0}disp", "dof{1}",
    ))
    for letter, number in (("x", "1"), ("y", "2"), ("z", "3"))
)  # fmt: skip
_COUNTED_HEADS = tuple(
    tuple(f"{stem}{k}" for stem in ("u", "disp", "displ", "displacement")) for k in range(3)
)
_NUMBER_ARRAYS = (
    "node_id", "nodeid", "node_number", "nodenumber", "node_ids", "gmsh:node", "globalnodeid", "globalids",
    "globalnodeids", "global_ids", "globalid", "originalids", "node", "id", "nid", "gridid",
    "vtkoriginalpointids", "pedigreenodeid",
)  # fmt: skip
_COMMENTS = ("#", "%", "//", "**", "$", "!")
_NUMBER = re.compile(r"[-+]?(\d+\.?\d*|\.\d+)([eEdD][-+]?\d{1,3}|[-+]\d{3})?|[-+]?(nan|inf)", re.IGNORECASE)
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
    rows = _lines(Path(path), where)
    split, decimal_comma = _separator(rows, where)
    head = split(rows[0][1])
    named = not all(_is_number(word, decimal_comma) for word in head if word)
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
    node, axes = _named_columns(head, where) if named else _unnamed_columns(width, where)
    table = _numbers(body, split, decimal_comma, (node, *axes), width, where)
    numbers = _whole(table[:, 0], body, node, where)
    columns = tuple(head[k] if named else f"column {k + 1}" for k in axes)
    return DisplacementTable(numbers, table[:, 1:].copy(), columns, where)


def _lines(path: Path, where: str) -> list[tuple[int, str]]:
    """Return the lines that count, with their numbers."""
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise InputError(f"{where}: cannot be opened: {error.strerror}.") from error
    wide = raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE))
    try:
        text = raw.decode("utf-16" if wide else "utf-8-sig")
    except UnicodeDecodeError:
        text = raw.decode("latin-1")
    if "\0" in text:
        raise InputError(f"{where}: holds binary data and is not a text table. Export it as CSV.")
    rows = [(number, line.strip(" \r")) for number, line in enumerate(text.split("\n"), 1)]
    rows = [(n, line) for n, line in rows if line.strip() and not line.lstrip().startswith(_COMMENTS)]
    if not rows:
        raise InputError(f"{where}: the table is empty. Write it again.")
    return rows


def _separator(rows: Sequence[tuple[int, str]], where: str) -> tuple[Callable[[str], list[str]], bool]:
    """Return how to split a line, and whether numbers have a decimal comma; judged by the last line."""
    number, line = rows[-1]
    marks = [mark for mark in (";", "\t") if mark in line]
    comma = any("," in text for _, text in rows[1:] or rows)
    if marks:
        return lambda text: _cleaned(text.split(marks[0])), comma
    if re.search(r",\s|\s,", line) or ("," in line and not re.search(r"\S\s+\S", line)):
        return lambda text: _cleaned(text.split(",")), False
    if comma and not all(_is_number(word, True) for word in line.split()):
        raise InputError(
            f"{where}, line {number}: it is not clear whether commas separate columns or are decimal commas. "
            "Separate the columns by semicolons."
        )
    return lambda text: _cleaned(text.split()), comma


def _cleaned(words: list[str]) -> list[str]:
    words = [word.strip().strip('"').strip() for word in words]
    while len(words) > 1 and not words[-1]:
        words.pop()
    return words


def _is_number(word: str, decimal_comma: bool) -> bool:
    return _NUMBER.fullmatch(word.replace(",", ".") if decimal_comma else word) is not None


def _value(word: str, decimal_comma: bool) -> float | None:
    if not _is_number(word, decimal_comma):
        return None
    text = (word.replace(",", ".") if decimal_comma else word).lower().replace("d", "e")
    # Fortran drops the letter when the exponent has three digits: 1.0-100.
    text = re.sub(r"(?<=[\d.])([-+]\d{3})$", r"e\1", text)
    return float(text)


def _plain(word: str) -> str:
    """Return a column name without case, unit, blanks and signs."""
    without_unit = re.sub(r"[\[(].*?[\])]", "", word.lower())
    return re.sub(r"[^a-z0-9]", "", without_unit)


def _named_columns(head: list[str], where: str) -> tuple[int, tuple[int, ...]]:
    plain = [_plain(word) for word in head]
    nodes = [k for k, word in enumerate(plain) if word in _NODE_HEADS]
    from_zero = any(word in _COUNTED_HEADS[0] for word in plain)
    heads = _COUNTED_HEADS if from_zero else _AXIS_HEADS
    axes = [[k for k, word in enumerate(plain) if word in names] for names in heads]
    listed = ", ".join(repr(word) for word in head)
    if len(nodes) != 1:
        found = "no column" if not nodes else f"{len(nodes)} columns"
        raise InputError(
            f"{where}: {found} of the table could be the node number; the columns are {listed}. "
            "Call one of them 'node'."
        )
    if len(axes[0]) != 1 or len(axes[1]) != 1 or len(axes[2]) > 1:
        raise InputError(
            f"{where}: the displacement columns are not clear; the columns are {listed}. "
            "Call them 'ux', 'uy' and 'uz' (x, y and z alone may be coordinates)."
        )
    return nodes[0], tuple(k for found in axes for k in found)


def _unnamed_columns(width: int, where: str) -> tuple[int, tuple[int, ...]]:
    if width not in (3, 4):
        raise InputError(
            f"{where}: a table without column names has a node number and two or three displacements; "
            "this has "
            f"{width} columns. Put the names 'node ux uy uz' above them."
        )
    return 0, tuple(range(1, width))


def _numbers(
    body: Sequence[tuple[int, str]],
    split: Callable[[str], list[str]],
    decimal_comma: bool,
    columns: tuple[int, ...],
    width: int,
    where: str,
) -> Floats:
    table = np.empty((len(body), len(columns)))
    for row, (line, text) in enumerate(body):
        words = split(text)
        if len(words) != width:
            raise InputError(
                f"{where}, line {line}: {len(words)} columns; the lines before have {width}. "
                "The table is damaged or uses another separator here."
            )
        for place, column in enumerate(columns):
            value = _value(words[column], decimal_comma)
            if value is None:
                raise InputError(
                    f"{where}, line {line}, column {column + 1}: {words[column]!r} is not a number."
                )
            table[row, place] = value
    return table


def _whole(column: Floats, body: Sequence[tuple[int, str]], node: int, where: str) -> Integers:
    with np.errstate(invalid="ignore"):
        wrong = ~np.isfinite(column) | (column != np.floor(column)) | (column < 0) | (column > 2**53)
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise InputError(
            f"{where}, line {body[row][0]}, column {node + 1}: the node number {column[row]:g} is not "
            "a whole "
            "number. If node numbers stand in another column, call it 'node'."
        )
    numbers = column.astype(np.int64)
    order = np.argsort(numbers, kind="stable")
    again = order[1:][numbers[order][1:] == numbers[order][:-1]]
    if len(again):
        row = int(again.min())
        raise InputError(
            f"{where}, line {body[row][0]}: node {numbers[row]} stands there a second time; "
            f"{len(again)} lines repeat a node. Give each node one line (one step, one load case)."
        )
    return numbers


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
        if _simple(name) in {_simple(n) for n in _NUMBER_ARRAYS} and _numbers_nodes(values)
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
