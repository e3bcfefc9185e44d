"""Reading XDMF: grids and steps of the index, and the `Result` of one step."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.io._node_order import checked_order
from unturn.io.xdmf_attributes import Kept
from unturn.io.xdmf_items import ItemReader
from unturn.io.xdmf_merge import merge, read_part
from unturn.io.xdmf_tree import MAX_DEPTH, XdmfTree
from unturn.io.xdmf_xml import Node, attribute, fault, local_name
from unturn.result import Array, Association, Result, Steps

# Source: VTK 9.7, vtkDataSetAttributes.h, CellGhostTypes.
_GHOSTS, _GHOST_BITS = "vtkGhostType", {1: "ghost", 8: "refined", 32: "hidden"}
_MAX_GRIDS = 200_000
_IN_GRID = {"Topology", "Geometry", "Attribute", "Set", "Time", "Information", "DataItem"}


@dataclass(frozen=True, eq=False)
class XdmfCarrier:
    """What a `Result` does not hold of the XDMF file it came from.

    Parameters
    ----------
    forms
        ``(association, array name)`` -> AttributeType and the shape of one row, as in the file.
    connectivity_dtype
        Number type of the connectivity.
    kept
        Elements that are written back as they were.
    information
        ``(where, attributes, text)`` of Information elements; where: ``Xdmf``, ``Domain`` or ``Grid``.
    """

    forms: Mapping[tuple[Association, str], tuple[str, tuple[int, ...]]] = field(default_factory=dict)
    connectivity_dtype: str = "int64"
    kept: tuple[Kept, ...] = ()
    information: tuple[tuple[str, Mapping[str, str], str], ...] = ()


class XdmfFile:
    """An opened XDMF file; see `unturn.io._format.ResultFile`.

    Parameters
    ----------
    path
        The index, ``.xdmf`` or ``.xmf``.

    Raises
    ------
    InputError
        The index cannot be read, or has a layout that is not read.
    """

    format_name = "XDMF"

    def __init__(self, path: Path) -> None:
        self.path = str(path)
        self._tree = XdmfTree(path)
        self._notes: list[str] = []
        self._walked = 0
        self._still, series = self._sort_grids()
        self._steps = _join_series(series)
        values = tuple(self._steps)
        if series:
            self.steps: tuple[float, ...] | None = values
        else:
            times = {t for t in (self._time(g) for g in self._still) if t is not None}
            if len(times) > 1:
                raise fault(
                    self._tree.root,
                    f"grids of different times ({', '.join(map(str, sorted(times)[:3]))} ...) side by side. "
                    'Put them into a Grid with CollectionType="Temporal".',
                )
            self.steps = tuple(times) or None

    def read(self, step: int = 0) -> Result:
        """Return one step (zero-based) as a `Result`.

        Raises
        ------
        InputError
            Data is missing, damaged, or of a kind that is not read.
        UsageError
            There is no such step.
        """
        n_steps = len(self.steps or (0.0,))
        if not 0 <= step < n_steps:
            raise UsageError(f"{self.path}: has steps 0 to {n_steps - 1}; step {step} was asked for.")
        items = ItemReader(self._tree)
        still = [read_part(items, g) for g in self._still]
        moving = [read_part(items, g) for g in list(self._steps.values())[step]] if self._steps else []
        if moving:
            shared = {p.geometry_key for p in moving}
            for part in still:
                if part.geometry_key not in shared:
                    self._note(
                        f"The grid {part.name!r} lies outside the time steps on points of its own: left out."
                    )
            still = [p for p in still if p.geometry_key in shared]
        merged = merge([*moving, *still], items)
        arrays = merged.arrays
        arrays["blocks"], repaired = checked_order(arrays["points"], arrays["blocks"], f"{self.path}: ")
        return Result(
            **arrays,
            left_out=_left_out(arrays["cell_data"].get(_GHOSTS)),
            steps=Steps(self.steps, step) if self.steps else None,
            path=self.path,
            format_name=self.format_name,
            point_dimension=merged.point_dimension,
            notes=(*self._notes, *items.notes, *repaired),
            carrier=XdmfCarrier(
                merged.forms, merged.connectivity_dtype, merged.kept, self._information(step)
            ),
        )

    def _note(self, text: str) -> None:
        if text not in self._notes:
            self._notes.append(text)

    def _information(self, step: int) -> tuple[tuple[str, Mapping[str, str], str], ...]:
        root = self._tree.root
        grids = [*self._still, *(list(self._steps.values())[step] if self._steps else [])]
        places = [("Xdmf", root), *(("Domain", d) for d in root if local_name(d) == "Domain")]
        places += [("Grid", g) for g in grids[:1]]
        return tuple(
            (where, dict(node.attrib), node.text or "")
            for where, parent in places
            for node in parent
            if local_name(node) == "Information"
        )

    def _sort_grids(self) -> tuple[list[Node], list[list[tuple[float, list[Node]]]]]:
        """Return the grids outside of any time series, and the time series."""
        domains = [c for c in self._tree.children(self._tree.root) if local_name(c) == "Domain"]
        if len(domains) != 1:
            raise fault(self._tree.root, f"{len(domains)} Domains; one is expected.")
        still: list[Node] = []
        series: list[list[tuple[float, list[Node]]]] = []
        for grid in self._grids(domains[0]):
            if _is_temporal(grid):
                series.append(self._series(grid))
            else:
                still.extend(self._uniform(grid, 0))
        if not still and not any(series):
            raise fault(domains[0], "the Domain holds no Grid. The file is incomplete: write it again.")
        return still, series

    def _grids(self, node: Node) -> Iterator[Node]:
        for child in self._tree.children(node):
            if local_name(child) == "Grid":
                yield self._tree.resolve(child)

    def _uniform(self, grid: Node, depth: int) -> Iterator[Node]:
        self._walked += 1
        if depth > MAX_DEPTH or self._walked > _MAX_GRIDS:
            raise fault(
                grid, f"Grids nested more than {MAX_DEPTH} deep, more than {_MAX_GRIDS}, or in a circle."
            )
        kind = attribute(grid, "GridType", default="Uniform").lower()
        if kind == "uniform":
            for child in self._tree.children(grid):
                if local_name(child) not in _IN_GRID:
                    raise fault(child, f"<{local_name(child)}> in a Grid is not read.")
            yield grid
        elif kind == "tree" or (kind == "collection" and not _is_temporal(grid)):
            for child in self._grids(grid):
                yield from self._uniform(child, depth + 1)
        else:
            what = (
                "a series inside a step"
                if kind == "collection"
                else f"GridType={attribute(grid, 'GridType')!r}"
            )
            raise fault(grid, f"the Grid {attribute(grid, 'Name')!r} is {what}, which is not read.")

    def _series(self, collection: Node) -> list[tuple[float, list[Node]]]:
        grids = list(self._grids(collection))
        if not grids:
            raise fault(collection, f"the series {attribute(collection, 'Name')!r} holds no step.")
        listed = self._listed_times(collection, len(grids))
        steps: list[tuple[float, list[Node]]] = []
        for number, grid in enumerate(grids):
            inside = list(self._uniform(grid, 0))
            if not inside:
                raise fault(grid, f"step {number} of the series holds no Grid.")
            value = listed[number] if listed else self._time(grid)
            if value is None:
                value = self._time(inside[0])
            if value is None:
                self._note("The series states no times; its steps are numbered from 0.")
                value = float(number)
            steps.append((value, inside))
        return steps

    def _listed_times(self, collection: Node, n: int) -> list[float] | None:
        """Return the times stated for the whole series, or None."""
        time = self._tree.child(collection, "Time")
        if time is None:
            return None
        kind = attribute(time, "TimeType", "Type", default="Single").lower()
        if kind not in ("list", "hyperslab"):
            raise fault(
                time, f"TimeType={attribute(time, 'TimeType')!r} for a series is not read; List or HyperSlab."
            )
        numbers = [float(v) for v in ItemReader(self._tree).only(time).ravel()]
        if kind == "hyperslab" and len(numbers) == 3:
            start, stride, count = numbers
            numbers = [start + stride * k for k in range(n if count == n else 0)]
        if len(numbers) != n or not np.isfinite(numbers).all():
            raise fault(time, f"the series has {n} steps and {len(numbers)} usable times.")
        return numbers

    def _time(self, grid: Node) -> float | None:
        time = self._tree.child(grid, "Time")
        if time is None:
            return None
        kind = attribute(time, "TimeType", "Type", default="Single").lower()
        text = attribute(time, "Value")
        if kind != "single":
            raise fault(time, f"TimeType={kind!r} for a single step is not read; it needs a Value.")
        if not text:
            values = ItemReader(self._tree).only(time).ravel()
            text = str(float(values[0])) if len(values) == 1 else ""
        if not re.fullmatch(r"[-+]?(\d+\.?\d*|\.\d+)([eE][-+]?\d{1,3})?", text):
            raise fault(time, f"the time {text!r} is not a number.")
        return float(text)


def _left_out(flags: Array | None) -> dict[str, NDArray[np.int64]]:
    """Return the cells that do not count, by reason."""
    if flags is None or flags.dtype.kind not in "iu" or flags.ndim != 1:
        return {}
    found = {reason: np.flatnonzero(flags & bit) for bit, reason in _GHOST_BITS.items()}
    return {reason: cells for reason, cells in found.items() if len(cells)}


def _is_temporal(grid: Node) -> bool:
    return (
        attribute(grid, "GridType").lower() == "collection"
        and attribute(grid, "CollectionType", default="Spatial").lower() == "temporal"
    )


def _join_series(series: list[list[tuple[float, list[Node]]]]) -> dict[float, list[Node]]:
    """Return the grids of each time; several series (one for each array) are joined by their times."""
    steps: dict[float, list[Node]] = {}
    for one in series:
        seen: set[float] = set()
        for value, grids in one:
            if value in seen:
                raise fault(
                    grids[0], f"two steps of one series have the time {value}; each step needs its own."
                )
            seen.add(value)
            steps.setdefault(value, []).extend(grids)
    return dict(sorted(steps.items())) if len(series) > 1 else steps


def open_file(path: Path) -> XdmfFile:
    """Return an opened XDMF file; only its index is read.

    Raises
    ------
    InputError
        The index cannot be read, or has a layout that is not read.
    """
    return XdmfFile(path)
