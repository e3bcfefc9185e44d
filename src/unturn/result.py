"""A finite-element result in memory: points, cells in file order, arrays, steps, groups.

A `Result` is not changed after it is made: adding arrays returns a new one that shares the rest.
It knows no file and no mechanics. Readers fill it, writers empty it.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError

Array = NDArray[Any]
Association = Literal["point", "cell", "field"]


@dataclass(frozen=True, eq=False)
class CellBlock:
    """Cells of one type and one number of nodes.

    Parameters
    ----------
    cell_type
        meshio's name (``tetra10``, ``VTK_LAGRANGE_HEXAHEDRON``, ``polygon`` ...).
    connectivity
        ``(n_cells, n_nodes)`` int64, zero-based positions of points, the format's node order
        already turned into the order of `unturn.elements`.
    index
        ``(n_cells,)`` int64, the position of each cell in the file's cell order; cell arrays are in that order.
    """

    cell_type: str
    connectivity: NDArray[np.int64]
    index: NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.index)


@dataclass(frozen=True)
class Steps:
    """The steps of a series and which of them this result is.

    Parameters
    ----------
    values
        Time (or frequency, load factor ...) of every step, in file order.
    current
        Zero-based position of the step that was read.
    """

    values: tuple[float, ...]
    current: int


@dataclass(frozen=True, eq=False)
class Result:
    """A mesh with arrays, as read from a file or made in memory.

    Parameters
    ----------
    points
        ``(n_points, 3)`` coordinates, length unit of the file, dtype of the file. Two-dimensional files get z = 0.
    blocks
        Cells grouped by type and number of nodes; their `index` together is a permutation of ``range(n_cells)``.
    point_data, cell_data
        Arrays by name, first axis n_points or n_cells (file order), dtypes of the file.
    field_data
        Arrays that belong to neither points nor cells.
    groups
        Named cell groups of the file: name -> zero-based cell positions.
    component_names
        ``(association, array name)`` -> names of the components, where the file has them.
    steps
        Set when the file is a series.
    path, format_name
        Where it came from, empty for a result made in memory; the name in the FORMATS table.
    point_dimension
        2 when the file stores two coordinates a point.
    notes
        Sentences of the reader that the user must see (a repaired order, a left-out part).
    left_out
        ``{reason: (n,) cell positions}`` of cells that do not count (ghost, duplicate, hidden), set by the reader.
    carrier
        The reader's own object from which the writer of the same family makes the output with nothing lost.

    Raises
    ------
    InputError
        Array lengths do not fit, connectivity out of range, a cell without a place or with two, no cell.
    """

    points: Array
    blocks: tuple[CellBlock, ...]
    point_data: Mapping[str, Array] = field(default_factory=dict)
    cell_data: Mapping[str, Array] = field(default_factory=dict)
    field_data: Mapping[str, Array] = field(default_factory=dict)
    groups: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)
    component_names: Mapping[tuple[Association, str], tuple[str, ...]] = field(default_factory=dict)
    steps: Steps | None = None
    path: str = ""
    format_name: str = ""
    point_dimension: int = 3
    notes: tuple[str, ...] = ()
    left_out: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)
    carrier: object | None = None

    def __post_init__(self) -> None:
        _validate(self)

    @property
    def n_points(self) -> int:
        """Number of points."""
        return len(self.points)

    @property
    def n_cells(self) -> int:
        """Number of cells of every kind, also those that cannot be computed."""
        return sum(len(b) for b in self.blocks)

    def with_arrays(
        self,
        *,
        point_data: Mapping[str, Array] | None = None,
        cell_data: Mapping[str, Array] | None = None,
        field_data: Mapping[str, Array] | None = None,
        component_names: Mapping[tuple[Association, str], Sequence[str]] | None = None,
    ) -> Result:
        """Return a result with these arrays added (or replaced by name); this one stays as it is."""
        return replace(
            self,
            point_data={**self.point_data, **(point_data or {})},
            cell_data={**self.cell_data, **(cell_data or {})},
            field_data={**self.field_data, **(field_data or {})},
            component_names={
                **self.component_names,
                **{k: tuple(v) for k, v in (component_names or {}).items()},
            },
        )


def used_points(blocks: Iterable[CellBlock], n_points: int) -> NDArray[np.bool_]:
    """Return which of the points belong to a cell of these blocks."""
    used = np.zeros(n_points, dtype=bool)
    for block in blocks:
        used[block.connectivity] = True
    return used


def _where(result: Result) -> str:
    return f"{result.path}: " if result.path else ""


def _validate(result: Result) -> None:
    where = _where(result)
    points = result.points
    if points.ndim != 2 or points.shape[1] != 3:
        raise InputError(f"{where}the points have shape {points.shape}; expected (n, 3).")
    if not result.n_cells:
        raise InputError(
            f"{where}the mesh has {len(points)} points and no cells; a displacement gradient needs elements. "
            "Check that the file is complete and holds the volume mesh."
        )
    for block in result.blocks:
        _validate_block(block, len(points), where)
    _validate_positions(result, where)
    for kind, data, n in (
        ("point", result.point_data, len(points)),
        ("cell", result.cell_data, result.n_cells),
    ):
        for name, values in data.items():
            if len(values) != n:
                raise InputError(
                    f"{where}{kind} array {name!r} has {len(values)} rows; the mesh has {n} {kind}s. "
                    "The file is incomplete or was written wrongly: write it again."
                )


def _validate_positions(result: Result, where: str) -> None:
    """Each cell of the file has one place in the blocks, and groups hold cells that exist."""
    n = result.n_cells
    seen = np.zeros(n, dtype=bool)
    for block in result.blocks:
        if len(block) and int(block.index.min()) >= 0 and int(block.index.max()) < n:
            seen[block.index] = True
    if not seen.all():
        raise InputError(
            f"{where}the positions of the cells (index of the blocks) are not 0 to {n - 1}, each once; cell "
            f"{int(np.argmin(seen))} has no place."
        )
    for name, cells in result.groups.items():
        members = np.asarray(cells)
        if len(members) and not (members.min() >= 0 and members.max() < n):
            raise InputError(
                f"{where}group {name!r} holds cells that do not exist; the mesh has 0 to {n - 1}."
            )


def _validate_block(block: CellBlock, n_points: int, where: str) -> None:
    conn = block.connectivity
    if conn.ndim != 2 or len(conn) != len(block.index):
        raise InputError(
            f"{where}{block.cell_type} block: connectivity of shape {conn.shape} for {len(block.index)} cells."
        )
    if conn.dtype.kind not in "iu" or block.index.dtype.kind not in "iu":
        raise InputError(
            f"{where}{block.cell_type} block: connectivity and index hold {conn.dtype} and {block.index.dtype}; both are "
            "whole numbers."
        )
    if conn.size == 0:
        return
    low, high = int(conn.min()), int(conn.max())
    if low < 0 or high >= n_points:
        bad = int(np.flatnonzero((conn < 0).any(axis=1) | (conn >= n_points).any(axis=1))[0])
        raise InputError(
            f"{where}cell {int(block.index[bad])} ({block.cell_type}) refers to node "
            f"{low if low < 0 else high}, but the mesh has nodes 0 to {n_points - 1}. "
            "The file is damaged or was written with another node numbering: write it again."
        )
