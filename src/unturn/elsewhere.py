"""Extremes at nodes and on free surfaces, with how far to trust them, beside those at centroids."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.gradient import sample_points
from unturn.kinematics._finite import BASES
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.model import Model
from unturn.nodal import NodeFields
from unturn.numbering import node_numbers
from unturn.peaks import Peak, Peaks
from unturn.pipeline import Computed
from unturn.recovery import NodeShares
from unturn.regions import Region
from unturn.result import Result
from unturn.surface import Faces, SurfaceFields
from unturn.trust import MOST_CHANGE, strain_error

BASE_WORDS = {
    "": "",
    "_mechanical": ", mechanical",
    "_green_lagrange": ", Green-Lagrange",
    "_hencky": ", Hencky",
    "_biot": ", Biot",
    "_almansi": ", Almansi",
}
"""What stands behind the name of a statistic, by the ending of its array."""


@dataclass(frozen=True)
class ElsewhereExtreme:
    """One extreme of a region.

    Attributes
    ----------
    region, label, array
        The region's name, what it is in words, and the array with its component.
    value, plus_minus
        The value, and the bound of its error; NaN where it is not known.
    place
        ``{"point": ..., "node": ...}`` or ``{"cell": ..., "element": ..., "face": ...}``: our positions and the solver's
        numbers.
    at
        Reference coordinates.
    """

    region: str
    label: str
    array: str
    value: float
    plus_minus: float
    place: dict[str, int | None]
    at: tuple[float, ...]


@dataclass(frozen=True)
class Growth:
    """A peak at centroids that keeps growing towards a node, and the next one away from it.

    Attributes
    ----------
    region, label, array
        As of `ElsewhereExtreme`.
    peak
        The peak.
    node
        The solver's number of the node, where the file holds them.
    next_cell, next_value
        -1 and NaN for none.
    """

    region: str
    label: str
    array: str
    peak: Peak
    node: int | None
    next_cell: int
    next_value: float


@dataclass(frozen=True)
class Elsewhere:
    """Extremes at another place than centroids.

    Attributes
    ----------
    title
        ``nodes`` or ``free surfaces``.
    extremes
        Region by region.
    growths
        Peaks that are suspected singular.
    error_percent
        Region -> estimated global error of its strain in percent.
    notes
        Sentences on how the values came about.
    """

    title: str
    extremes: tuple[ElsewhereExtreme, ...]
    growths: tuple[Growth, ...] = ()
    error_percent: dict[str, float] | None = None
    notes: tuple[str, ...] = ()


def find_elsewhere(
    computed: Computed,
    regions: Sequence[Region],
    numbers: NDArray[np.int64] | None,
    threads: int | None = None,
) -> Elsewhere | None:
    """Return the extremes at nodes or on free surfaces, or None when values live at cells or quadrature points.

    Parameters
    ----------
    computed
        Computed with ``diagnose=True``.
    regions
        The regions of the summary, each with the cells that count.
    numbers
        The solver's element numbers, `(n_cells,)`.
    threads
        None: all processors.
    """
    if computed.nodes is not None:
        return _Nodes(computed, computed.nodes, threads).find(regions)
    if computed.surface is not None:
        extremes = tuple(e for r in regions for e in _on_surface(computed.surface, r, numbers))
        return Elsewhere("free surfaces", extremes, notes=_surface_notes(computed.surface))
    return None


@dataclass(frozen=True)
class _Row:
    """One extreme to look for: label, array, which component, the smallest or the largest, measure it is of."""

    label: str
    array: str
    column: int | None
    smallest: bool
    kind: str

    def component(self, values: Floats) -> tuple[str, Floats]:
        """Return the name of the component and its values."""
        if self.column is None:
            return self.array, values
        return f"{self.array}_{self.column % values.shape[1] + 1}", values[:, self.column]

    def pick(self, values: Floats, among: NDArray[np.bool_] | None = None) -> int:
        """Return where the extreme is; -1 for none."""
        usable = np.flatnonzero(np.isfinite(values) if among is None else among & np.isfinite(values))
        if not len(usable):
            return -1
        return int(usable[values[usable].argmin() if self.smallest else values[usable].argmax()])


def _rows(names: Collection[str], prefix: str = "") -> list[_Row]:
    found = []
    for suffix, words in BASE_WORDS.items():
        principal, equivalent = f"{prefix}principal_strain{suffix}", f"{prefix}equivalent_strain{suffix}"
        if principal in names:
            found.append(_Row(f"largest principal{words}", principal, 0, False, "principal_strain"))
            found.append(_Row(f"smallest principal{words}", principal, -1, True, "principal_strain"))
        if equivalent in names:
            found.append(_Row(f"equivalent, largest{words}", equivalent, None, False, "equivalent_strain"))
    return found


def _base(array: str) -> str:
    return next((b for b in BASES if array.endswith(f"_{b}")), "")


class _Nodes:
    """Looks for extremes at nodes."""

    def __init__(self, computed: Computed, nodes: NodeFields, threads: int | None) -> None:
        assert computed.fields.diagnostics is not None
        self.computed, self.nodes, self.diagnostics = computed, nodes, computed.fields.diagnostics
        numbering = node_numbers(computed.fields.model.result)
        self.numbers = None if numbering is None else numbering.numbers
        self.rows = _rows(nodes.arrays)
        strains = [n for n in nodes.arrays if MEASURES[n].unit == "strain"]
        bases = list(dict.fromkeys(_base(n) for n in strains)) or [""]
        self.errors = {
            b: strain_error(nodes.of_finite if b else nodes.recovered, threads, b)
            for b in dict.fromkeys([bases[0], *(_base(r.array) for r in self.rows)])
        }
        self.main = bases[0]

    def find(self, regions: Sequence[Region]) -> Elsewhere:
        error = self.errors[self.main]
        return Elsewhere(
            "nodes",
            tuple(e for r in regions for e in self._extremes(r)),
            tuple(g for r in regions for g in self._growths(r)),
            {r.name: error.percentage(r.cells) for r in regions},
            self.nodes.recovered.notes,
        )

    def _node(self, point: int) -> int | None:
        return None if self.numbers is None else int(self.numbers[point])

    def _extremes(self, region: Region) -> list[ElsewhereExtreme]:
        """Return the extremes of a region's own side of its nodes; on borders others may have been written."""
        points = self.computed.fields.model.points
        effective = self.computed.equivalent_poisson
        found = []
        for row in self.rows:
            shares = self.nodes.behind(row.array).shares
            own = _shares_of(shares, region.cells)
            name, values = row.component(self.nodes.at_shares(row.array, own, effective))
            pick = row.pick(values)
            if pick < 0:
                continue
            at = int(shares.point[own[pick]])
            change = MOST_CHANGE[row.kind]
            if row.kind == "equivalent_strain" and effective is not None:
                change *= 1.5 / (1.0 + effective)
            bound = change * float(self.errors[_base(row.array)].plus_minus_shares[own[pick]])
            place = {"point": at, "node": self._node(at)}
            found.append(
                ElsewhereExtreme(region.name, row.label, name, float(values[pick]), bound, place,
                                 tuple(float(x) for x in points[at]))
            )  # fmt: skip
        return found

    def _growths(self, region: Region) -> list[Growth]:
        """Return the principal peaks of a region that keep growing towards a node."""
        arrays = {n: a for n, a in self.computed.fields.arrays.items() if n.startswith("principal_strain")}
        if not arrays and not self.main:
            arrays = {"principal_strain": self.diagnostics.principal}
        found = []
        for row in (r for r in _rows(arrays) if r.column is not None):
            recovered = self.nodes.behind(row.array)
            peaks = Peaks(recovered, _middles(recovered.shares.model), self.diagnostics.volume)
            name, values = row.component(arrays[row.array])
            peak = peaks.find(values, region.cells, row.smallest)
            size = float(np.nanmax(np.abs(arrays[row.array][region.cells]), initial=0.0))
            negligible = abs(peak.value) < _NEGLIGIBLE * size
            if peak.cell >= 0 and peak.singular and not negligible and not self._resolved(row, region, peak):
                after = peaks.next_peak(values, region.cells, peak, row.smallest)
                node = self._node(peak.point)
                found.append(Growth(region.name, row.label, name, peak, node, after.cell, after.value))
        return found

    def _resolved(self, row: _Row, region: Region, peak: Peak) -> bool:
        """Return whether the elements around the node of a peak agree with what is recovered there.

        At a singular point they never do: what recovery changes there stays in proportion to the peak, however fine the
        mesh. A steep smooth field, such as bending across a thin part, they follow.
        """
        shares = self.nodes.behind(row.array).shares
        own = _shares_of(shares, region.cells)
        here = own[shares.point[own] == peak.point]
        return bool(
            (self.errors[_base(row.array)].plus_minus_shares[here] < _RESOLVED * abs(peak.value)).all()
        )


_NEGLIGIBLE = 1e-3  # of the largest principal strain of the region: a smaller extreme is no peak
_RESOLVED = 0.5
"""Plus and minus at the node of a peak, as a share of it, below which the mesh resolves it: 0.5 to 28 was seen at corners,
cracks, punches and point loads on eleven elements; less at nine of ten holes and cavities with eight cells across a
quarter, and at all with twelve."""


def _shares_of(shares: NodeShares, cells: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the shares of the nodes that some cells (file positions) have."""
    asked = np.zeros(shares.model.result.n_cells, dtype=bool)
    asked[cells] = True
    mask = np.zeros(len(shares), dtype=bool)
    for block, own in zip(shares.model.blocks, shares.cells):
        mask[own[asked[block.index]]] = True
    return np.flatnonzero(mask)


def _middles(model: Model) -> Floats:
    """Return the middle of the corners of every cell where the gradient is taken `(n_cells, 3)`; NaN if not computed."""
    middles = np.full((model.result.n_cells, 3), np.nan)
    for block in model.blocks:
        if block.row is not None:
            middles[block.index] = model.points[block.connectivity[:, : block.row.n_corners]].mean(axis=1)
    return middles


def _on_surface(
    surface: SurfaceFields, region: Region, numbers: NDArray[np.int64] | None
) -> list[ElsewhereExtreme]:
    result: Result = surface.result
    parents = np.asarray(result.cell_data["parent_cell"])
    mask = np.zeros(surface.faces.model.result.n_cells, dtype=bool)
    mask[region.cells] = True
    found = []
    for row in _rows(result.cell_data, "surface_"):
        name, values = row.component(np.asarray(result.cell_data[row.array]))
        at = row.pick(values, mask[parents])
        if at < 0:
            continue
        cell = int(parents[at])
        place: dict[str, int | None] = {
            "cell": cell,
            "element": None if numbers is None else int(numbers[cell]),
            "face": int(result.cell_data["parent_face"][at]),
        }
        label = row.label if row.column is None else f"{row.label}, in plane"
        found.append(
            ElsewhereExtreme(region.name, label, name, float(values[at]), math.nan, place,
                             _middle(surface.faces, at))
        )  # fmt: skip
    return found


def _middle(faces: Faces, face: int) -> tuple[float, ...]:
    """Return the centroid of a face."""
    for block in faces.blocks:
        if face < len(block):
            functions = sample_points(block.row, "centroid").functions[0]
            return tuple(float(x) for x in functions @ faces.model.points[block.connectivity[face]])
        face -= len(block)
    raise AssertionError(face)


def _surface_notes(surface: SurfaceFields) -> tuple[str, ...]:
    faces = surface.result.n_cells
    left = sum(len(cells) for cells in surface.left_out.values())
    note = f"free surfaces: {faces} faces, strain from the face's own nodes at its centroid"
    return (note + (f"; {left} without values" if left else ""),)
