"""Formats read through meshio, where it was found to read them right, and MSH and Exodus beside them.

Each line of `READ` was decided by a round trip of every cell type; other formats and other cells of these
formats are refused by name. All quadratic cells are checked against the places of their nodes.
"""

from __future__ import annotations

import contextlib
import io
import re
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UsageError, close_matches
from unturn.io._exodus import ExodusFile
from unturn.io._format import ResultFile
from unturn.io._msh_result import MshFile
from unturn.io._node_numbers import NODE_NUMBERS
from unturn.io._node_order import checked_order
from unturn.result import Array, CellBlock, Result

_LINEAR = ("vertex", "line", "triangle", "quad", "tetra", "pyramid", "wedge", "hexahedron")
_FULL = ("quad9", "wedge18", "hexahedron27")
_QUADRATIC = ("line3", "triangle6", "quad8", "tetra10", "pyramid13", "wedge15", "hexahedron20")
_SIGNALLED = 128  # exit statuses above it mean a signal


@dataclass(frozen=True)
class _Line:
    """What meshio reads right of one format."""

    name: str
    meshio_name: str
    cell_types: tuple[str, ...]
    has_arrays: bool


# Measured with meshio 5.3.5: round trip of each cell type with a nodal vector, node places compared.
READ: dict[str, _Line] = {
    ".avs": _Line("AVS-UCD", "avsucd", _LINEAR, True),
    ".med": _Line("MED", "med", (*_LINEAR, *_QUADRATIC, *_FULL, "triangle7"), True),
    ".hmf": _Line("HMF", "hmf", (*_LINEAR, *_QUADRATIC, *_FULL), True),
    ".inp": _Line(
        "INP", "abaqus",
        ("line", "triangle", "quad", "tetra", "wedge", "hexahedron", "line3", "triangle6", "quad8", "tetra10",
         "wedge15", "hexahedron20"), False,
    ),
    ".bdf": _Line("Nastran bulk data", "nastran", (*_LINEAR, *_QUADRATIC), False),
    ".nas": _Line("Nastran bulk data", "nastran", (*_LINEAR, *_QUADRATIC), False),
    ".fem": _Line("Nastran bulk data", "nastran", (*_LINEAR, *_QUADRATIC), False),
    ".mesh": _Line("Medit", "medit", _LINEAR, False),
    ".meshb": _Line("Medit", "medit", _LINEAR, False),
}  # fmt: skip
_OWN: dict[str, Callable[[Path], ResultFile]] = {
    ".msh": MshFile,
    ".e": ExodusFile,
    ".exo": ExodusFile,
    ".ex2": ExodusFile,
}


def open_file(path: Path) -> ResultFile:
    """Return an opened file of a format that is only read, not written.

    Raises
    ------
    InputError
        The format, or what the file holds, is not known to be read right.
    """
    suffix = path.suffix.lower()
    if suffix in _OWN:
        return _OWN[suffix](path)
    if suffix not in READ:
        known = sorted([*READ, *_OWN])
        raise InputError(
            f"{path}: files {suffix or 'without a suffix'} are not read, because no reader was found to read "
            f"them right.{close_matches(suffix, known)} Convert the result to VTU or XDMF."
        )
    return MeshioFile(path, READ[suffix])


class MeshioFile:
    """A file that meshio reads; see `unturn.io._format.ResultFile`."""

    def __init__(self, path: Path, line: _Line) -> None:
        self.path, self.format_name = str(path), line.name
        self._place, self._line = path, line
        self.steps: tuple[float, ...] | None = None

    def read(self, step: int = 0) -> Result:
        """Return the mesh and its arrays as a `Result`.

        Raises
        ------
        InputError
            meshio cannot read the file, or not all of it right.
        UsageError
            There is no such step.
        """
        if step:
            raise UsageError(f"{self.path}: has step 0 alone; step {step} was asked for.")
        mesh = _read_quietly(self._place, self._line)
        for name in mesh.point_data:
            if re.search(r"\[\d+\] - \S+$", name):
                raise InputError(
                    f"{self.path}: holds several steps ({name!r} and more); steps of {self._line.name} files "
                    "are not read. Write one step alone, or the series as XDMF or VTU."
                )
        for block in mesh.cells:
            if block.type not in self._line.cell_types:
                raise InputError(
                    f"{self.path}: cells of type {block.type} in a {self._line.name} file are not known to "
                    "be read right. Convert the result to VTU or XDMF with the program that made it."
                )
        if np.any(mesh.point_data.get("nastran:ref", 0)):
            raise InputError(
                f"{self.path}: some GRID cards give their coordinates in a coordinate system of their "
                "own, which "
                "is not read. Convert the mesh to VTU with the program that made it."
            )
        return self._result(mesh)

    def _result(self, mesh: Any) -> Result:
        points = np.asarray(mesh.points)
        if points.ndim != 2 or points.shape[1] not in (1, 2, 3):
            raise InputError(f"{self.path}: the points have the shape {points.shape}; the file is damaged.")
        dimension = max(2, points.shape[1])
        if points.shape[1] < 3:
            missing = np.zeros((len(points), 3 - points.shape[1]), points.dtype)
            points = np.column_stack([points, missing])
        blocks = _blocks(mesh, len(points), self.path)
        blocks, notes = checked_order(points, blocks, f"{self.path}: ")
        point_data = {name: _flat(np.asarray(v)) for name, v in mesh.point_data.items()}
        numbers = NODE_NUMBERS.get(self._line.meshio_name)
        if numbers is not None:
            point_data.setdefault("node_id", numbers(self._place, points))
        if mesh.point_sets:
            notes = (*notes, "The node sets of the file are not kept.")
        if not self._line.has_arrays:
            notes = (
                *notes,
                f"{self._line.name} files hold a mesh and no results; give a displacement table.",
            )
        cell_data = {
            name: _flat(np.concatenate([np.asarray(v) for v in values]))
            for name, values in mesh.cell_data.items()
        }
        return Result(
            points,
            blocks,
            point_data,
            cell_data,
            groups=_groups(mesh, cell_data),
            path=self.path,
            format_name=self.format_name,
            point_dimension=dimension,
            notes=notes,
        )


def _read_quietly(path: Path, line: _Line) -> Any:
    import meshio
    from meshio._mesh import topological_dimension
    from meshio.med._med import med_to_meshio_type

    # meshio knows how many nodes these have and not their dimension, without which it holds them not.
    for cell_type, dimension in (("wedge15", 3), ("pyramid13", 3), ("triangle7", 2)):
        topological_dimension.setdefault(cell_type, dimension)
    # Source: MED 4.2, med_geometry_type, and the group names of its files: the quadratic cells meshio leaves out.
    for med_name, cell_type in (
        ("TR7", "triangle7"),
        ("QU9", "quad9"),
        ("P18", "wedge18"),
        ("H27", "hexahedron27"),
    ):
        med_to_meshio_type.setdefault(med_name, cell_type)
    if not path.is_file():
        raise InputError(f"{path}: there is no such file.")
    if line.meshio_name == "nastran":
        _check_complete(path)
    heard = io.StringIO()
    # meshio raises anything, and exits with status 1 or a text; a request to end the program has another status.
    try:
        with warnings.catch_warnings(), contextlib.redirect_stdout(heard), contextlib.redirect_stderr(heard):
            warnings.simplefilter("ignore")
            warnings.filterwarnings("error", message="string or file could not be read")
            return meshio.read(path, file_format=line.meshio_name)
    except (Exception, SystemExit) as error:
        if isinstance(error, SystemExit) and isinstance(error.code, int) and error.code > _SIGNALLED:
            raise
        reason = heard.getvalue().strip().splitlines()
        said = " ".join(reason[:2]) if isinstance(error, SystemExit) else f"{type(error).__name__}: {error}"
        raise InputError(
            f"{path}: cannot be read as {line.name} ({said[:200]}). The file is damaged, incomplete, "
            "or uses a "
            "part of the format that is not read: convert the result to VTU or XDMF."
        ) from error


def _check_complete(path: Path) -> None:
    """Refuse bulk data without its last line: meshio would read on for ever."""
    with path.open("rb") as file:
        if not any(row.startswith(b"ENDDATA") for row in file):
            raise InputError(
                f"{path}: the bulk data has no ENDDATA: the file is cut off. Write or copy it again."
            )


def _flat(values: Array) -> Array:
    return values.reshape(len(values), -1) if values.ndim > 2 else values


def _blocks(mesh: Any, n_points: int, where: str) -> tuple[CellBlock, ...]:
    """Return the cells by type and number of nodes; meshio's order of cells is the file's."""
    rows: dict[tuple[str, int], list[tuple[NDArray[np.int64], NDArray[np.int64]]]] = {}
    first = 0
    for block in mesh.cells:
        nodes = np.asarray(block.data)
        if nodes.ndim != 2 or nodes.dtype.kind not in "iu":
            raise InputError(f"{where}: the {block.type} cells are not rows of node numbers: damaged.")
        nodes = nodes.astype(np.int64)
        if nodes.size and (int(nodes.min()) < 0 or int(nodes.max()) >= n_points):
            raise InputError(
                f"{where}: a {block.type} cell refers to a node that is not in the file. "
                "The file is damaged or incomplete: write it again."
            )
        index = np.arange(first, first + len(nodes))
        rows.setdefault((block.type, nodes.shape[1]), []).append((nodes, index))
        first += len(nodes)
    return tuple(
        CellBlock(cell_type, np.concatenate([n for n, _ in parts]), np.concatenate([i for _, i in parts]))
        for (cell_type, _), parts in rows.items()
    )


def _groups(mesh: Any, cell_data: dict[str, Array]) -> dict[str, NDArray[np.int64]]:
    """Return cell sets, and the families of MED, as groups of cell positions."""
    starts = np.cumsum([0, *(len(block.data) for block in mesh.cells)])
    groups: dict[str, NDArray[np.int64]] = {}
    for name, parts in mesh.cell_sets.items():
        members = [np.asarray(p, np.int64) + s for p, s in zip(parts, starts) if p is not None and len(p)]
        groups[name] = np.concatenate(members) if members else np.empty(0, np.int64)
    tags = cell_data.get("cell_tags")
    for tag, names in getattr(mesh, "cell_tags", {}).items():
        for name in names:
            own = np.flatnonzero(tags == tag) if tags is not None else np.empty(0, np.int64)
            groups[name] = np.union1d(groups.get(name, np.empty(0, np.int64)), own)
    return groups
