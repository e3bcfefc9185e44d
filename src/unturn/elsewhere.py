"""Extremes at nodes and on free surfaces, with how far to trust them, beside those at centroids."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.fields import CellDiagnostics
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, Split
from unturn.numbering import node_numbers
from unturn.peaks import Peak, Peaks
from unturn.pipeline import Computed
from unturn.recovery import Recovered
from unturn.regions import Region
from unturn.result import Result
from unturn.surface import SurfaceFields
from unturn.trust import StrainError, strain_error

_EQUIVALENT = math.sqrt(2.0 / 3.0)  # of the norm of a deviator; that of a tensor is no smaller


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
    """A peak at centroids that keeps growing towards a node, and the next one away from it; `next_cell` -1 for none."""

    region: str
    label: str
    peak: Peak
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
        assert computed.fields.diagnostics is not None
        recovered = computed.nodes.recovered
        error = strain_error(recovered, threads)
        return Elsewhere(
            "nodes",
            tuple(e for r in regions for e in _at_nodes(computed, recovered, error, r)),
            tuple(g for r in regions for g in _growths(recovered, computed.fields.diagnostics, r)),
            {r.name: error.percentage(r.cells) for r in regions},
            recovered.notes,
        )
    if computed.surface is not None:
        extremes = tuple(e for r in regions for e in _on_surface(computed.surface, r, numbers))
        return Elsewhere("free surfaces", extremes, notes=_surface_notes(computed.surface))
    return None


def _columns(arrays: dict[str, Floats], prefix: str = "") -> list[tuple[str, str, Floats, bool, float]]:
    """Return label, array, values, whether the smallest is meant, and the share of the norm that bounds the error."""
    found = []
    for name, values in arrays.items():
        if name.startswith(f"{prefix}principal_strain"):
            last = values.shape[1]
            found.append(("largest principal", f"{name}_1", values[:, 0], False, 1.0))
            found.append(("smallest principal", f"{name}_{last}", values[:, -1], True, 1.0))
        elif name.startswith(f"{prefix}equivalent_strain"):
            found.append(("equivalent, largest", name, values, False, _EQUIVALENT))
    return sorted(found, key=lambda f: _ORDER.index(f[0]))


_NEGLIGIBLE = 1e-3  # of the largest principal strain of the region: a smaller extreme is no peak
_ORDER = ["largest principal", "smallest principal", "equivalent, largest"]


def _at_nodes(
    computed: Computed, recovered: Recovered, error: StrainError, region: Region
) -> list[ElsewhereExtreme]:
    """Return the extremes of a region's own side of its nodes; on borders others may have been written."""
    assert computed.nodes is not None
    model, shares = computed.fields.model, recovered.shares
    own = np.flatnonzero(np.isin(shares.group, np.unique(computed.nodes.groups[region.cells])))
    split = Split(recovered.values[:, :, own], computed.equivalent_poisson)
    arrays = {}
    for name in computed.nodes.arrays:
        if name.startswith(("principal_strain", "equivalent_strain")) and not MEASURES[name].mechanical:
            with np.errstate(invalid="ignore", divide="ignore"):
                arrays[name] = np.ascontiguousarray(MEASURES[name].compute(split).T)
    nodes = node_numbers(model.result)
    found = []
    for label, name, values, smallest, share in _columns(arrays):
        usable = np.flatnonzero(np.isfinite(values))
        if not len(usable):
            continue
        pick = int(usable[values[usable].argmin() if smallest else values[usable].argmax()])
        at = int(shares.point[own[pick]])
        found.append(
            ElsewhereExtreme(
                region.name, label, name, float(values[pick]), share * float(error.plus_minus_nodes[at]),
                {"point": at, "node": None if nodes is None else int(nodes.numbers[at])},
                tuple(float(x) for x in model.points[at]),
            )
        )  # fmt: skip
    return found


def _growths(recovered: Recovered, d: CellDiagnostics, region: Region) -> list[Growth]:
    """Return the principal peaks of a region that keep growing towards a node."""
    peaks = Peaks(recovered, d.centroid, d.volume)
    found = []
    for label, values, smallest in (
        ("largest principal", d.principal[:, 0], False),
        ("smallest principal", d.principal[:, 1], True),
    ):
        peak = peaks.find(values, region.cells, smallest)
        negligible = abs(peak.value) < _NEGLIGIBLE * float(
            np.nanmax(np.abs(d.principal[region.cells]), initial=0.0)
        )
        if peak.cell >= 0 and peak.singular and not negligible:
            after = peaks.next_peak(values, region.cells, peak, smallest)
            found.append(Growth(region.name, label, peak, after.cell, after.value))
    return found


def _on_surface(
    surface: SurfaceFields, region: Region, numbers: NDArray[np.int64] | None
) -> list[ElsewhereExtreme]:
    result: Result = surface.result
    parents = np.asarray(result.cell_data["parent_cell"])
    mask = np.zeros(int(max(parents.max(initial=0), region.cells.max(initial=0))) + 1, dtype=bool)
    mask[region.cells] = True
    arrays = {n: np.asarray(a) for n, a in result.cell_data.items() if n.startswith("surface_")}
    found = []
    for label, name, values, smallest, _ in _columns(arrays, "surface_"):
        usable = np.flatnonzero(mask[parents] & np.isfinite(values))
        if not len(usable):
            continue
        at = int(usable[values[usable].argmin() if smallest else values[usable].argmax()])
        cell = int(parents[at])
        place: dict[str, int | None] = {
            "cell": cell,
            "element": None if numbers is None else int(numbers[cell]),
            "face": int(result.cell_data["parent_face"][at]),
        }
        found.append(
            ElsewhereExtreme(region.name, f"{label}, in plane" if "principal" in name else label, name, float(values[at]),
                             math.nan, place, _middle(result, at))
        )  # fmt: skip
    return found


def _middle(result: Result, cell: int) -> tuple[float, ...]:
    for block in result.blocks:
        at = np.flatnonzero(block.index == cell)
        if len(at):
            corners = result.points[block.connectivity[at[0]]]
            return tuple(float(x) for x in corners.mean(axis=0))
    return (math.nan,) * 3


def _surface_notes(surface: SurfaceFields) -> tuple[str, ...]:
    faces = surface.result.n_cells
    left = sum(len(cells) for cells in surface.left_out.values())
    note = f"free surfaces: {faces} faces, strain from the face's own nodes at its centroid"
    return (note + (f"; {left} without values" if left else ""),)
