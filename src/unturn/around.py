"""How far to trust a value at a cell, from the elements around it alone: the whole mesh is not recovered.

Plus and minus of a cell depend on the gradients that are recovered at its nodes, and these on the cells within a few rings
around it. Such cells are cut out of the mesh, those of all values together, and recovered as a mesh of their own: what
comes out is what a recovery of the whole mesh gives.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.cutout import Cutter
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, base_of
from unturn.model import Model
from unturn.neighbourhood import Location, Surroundings
from unturn.nodal import FOLD
from unturn.pipeline import Computed
from unturn.recovery import sheets
from unturn.regions import Region, find_regions
from unturn.rigid_parts import computed_cells
from unturn.trust import MOST_CHANGE

Ints = NDArray[np.int64]

VALUES, PEAKS = 4, 6
"""Rings of cells on which the plus and minus of a cell depends, and whether it is a peak that is suspected.

Recovered values at the nodes of a cell depend on three rings, by patches of corners two cells away that stand in at
borders; on four where the nodes lie on a border, by the nodes beside them. A peak looks at the nodes of two more rings.
"""
_TAKEN = (
    16,
    128,
    1024,
    8192,
)  # cells of a region among which the next peak is looked for, more if there is none
_MOST = 250_000  # cells around them that are worth it


@dataclass(frozen=True, eq=False)
class Asked:
    """A value at a cell: an extreme of a region, or any other.

    Attributes
    ----------
    measure
        Name of its array without component (``principal_strain``), or ``stretch`` or ``angle_of_turn``.
    values
        `(n_cells,)` of the component, file order.
    cells
        File positions of the region: where the next peak is looked for.
    cell
        The cell; -1 for none.
    smallest
        Whether it is the smallest of the region, not the largest.
    size
        Largest strain of the region: an extreme below a thousandth of it is no peak.
    """

    measure: str
    values: Floats
    cells: Ints
    cell: int
    smallest: bool = False
    size: float = 0.0


@dataclass(frozen=True)
class Trust:
    """How far to trust a value.

    Attributes
    ----------
    plus_minus
        Bound of the error of the value as one for the whole element, see `unturn.trust.StrainError`. NaN where it is not
        known: for an element without neighbours, and for measures of which `bound_of` knows none.
    singular
        Whether it keeps growing towards a node that the mesh does not resolve: suspected singular.
    point
        That node, position in the file; -1 for none.
    growth
        Exponent a of `value ~ distance^-a` towards it.
    next_cell, next_value, next_plus_minus
        The next peak of the region away from it that is not suspected; -1 and NaN for none.
    """

    plus_minus: float
    singular: bool = False
    point: int = -1
    growth: float = math.nan
    next_cell: int = -1
    next_value: float = math.nan
    next_plus_minus: float = math.nan


@dataclass(frozen=True)
class Bound:
    """How the bound of a measure follows from that of tensors.

    Attributes
    ----------
    bases
        The tensors, as `base` of `strain_error`; their bounds are added.
    change
        How much the measure changes at most when a tensor changes by one that has norm one.
    kind
        ``strain``, whose peaks may be singular, ``other``, or one whose change is no multiple: ``angle``, of the rotation R,
        and ``ratio``, whose logarithm changes.
    """

    bases: tuple[str, ...]
    change: float
    kind: Literal["strain", "other", "angle", "ratio"] = "strain"

    def of(self, plus_minus: float, value: float) -> float:
        """Return the bound of the measure, from that of the tensors, at a value."""
        change = self.change * plus_minus
        if self.kind == "angle":
            return 2.0 * math.asin(min(0.5 * change, 1.0))
        return abs(value) * math.expm1(min(change, 700.0)) if self.kind == "ratio" else change


_MOTION = {
    "rotation": Bound(("rotation",), 1.0, "other"),
    "rotation_angle": Bound(("rotation",), 1.0, "other"),
    "small_strain_error": Bound(("", "biot"), 1.0, "other"),
    "finite_rotation_angle": Bound(("turn",), 1.0, "angle"),
    "angle_of_turn": Bound(("turn",), 1.0, "angle"),
    "stretch": Bound(("biot",), 1.0, "other"),
    "det_f": Bound(("hencky",), 3.0**0.5, "ratio"),
}


def bound_of(
    measure: str, poisson: float | None = None, equivalent_poisson: float | None = None
) -> Bound | None:
    """Return how the bound of a measure comes about, or None where none is known.

    Parameters
    ----------
    measure
        As of `Asked`.
    poisson
        Poisson's ratio behind the equivalent strain of free surfaces.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain.

    Notes
    -----
    Strain: `MOST_CHANGE`. The rotation vector bounds its components and its length. Stretches are the eigenvalues of U and
    change by no more than its norm (Weyl 1912). The angle of R is its distance from the identity, and changes by no more
    than the angle between two rotations, `2 asin(norm(R* - R)/sqrt 8)`. `ln det F` is the trace of `ln U`. The error of the
    small strain, `norm(e - (U - I))`, changes by no more than e and U together. On free surfaces the small strain along the
    normal, `-k (e_1 + e_2)` with `k = nu/(1-nu)`, adds to that within the surface, of which the norm is: the whole tensor
    changes by up to sqrt(1 + 2 k^2) times as much.
    """
    if measure in _MOTION:
        return _MOTION[measure]
    row = MEASURES.get(measure.removeprefix("surface_"))
    if row is None:
        return None
    base = base_of(measure)
    small = row.base if base else row.name.replace("mechanical_strain", "strain").removesuffix("_mechanical")
    if small not in MOST_CHANGE:
        return None
    change = MOST_CHANGE[small]
    if small == "equivalent_strain" and equivalent_poisson is not None:
        change *= 1.5 / (1.0 + equivalent_poisson)
    if measure == "surface_equivalent_strain" and poisson is not None:
        change *= math.sqrt(1.0 + 2.0 * (poisson / (1.0 - poisson)) ** 2)
    return Bound((base,), change)


def trust_of(
    computed: Computed,
    asked: Sequence[Asked],
    regions: Sequence[Region] | None = None,
    threads: int | None = None,
) -> list[Trust]:
    """Return how far to trust values at cells, in the order they are asked for.

    Parameters
    ----------
    computed
        Computed with ``diagnose=True``.
    asked
        The values; many at once cost little more than one.
    regions
        What `find_regions` returns for all computed cells, where it is at hand: nothing is recovered across their borders.
    threads
        None: all processors.

    Notes
    -----
    The free thermal strain counts as known: mechanical strain has the bound of the total. With a zero step finite measures
    are judged on the motion since then.
    """
    d = computed.fields.diagnostics
    assert d is not None
    model, finite = computed.fields.model, computed.finite_model
    groups = groups_of(model, regions)
    at: Location = "mean" if computed.request.get("at") == "mean" else "centroid"
    judged = computed.request.get("solve") != "linear"  # the turn is then that of the motion

    def of_motion(a: Asked) -> bool:
        row = MEASURES.get(a.measure)
        return a.measure == "stretch" or (
            judged if a.measure == "angle_of_turn" else row is not None and row.finite
        )

    found = [Trust(math.nan)] * len(asked)
    for behind in (model,) if finite is None else (model, finite):
        mine = [k for k, a in enumerate(asked) if finite is None or of_motion(a) is (behind is finite)]
        part = [asked[k] for k in mine]
        answers = trust_on(behind, d.volume, groups, part, computed.equivalent_poisson, at, threads)
        for k, answer in zip(mine, answers):
            found[k] = answer
    return found


def groups_of(model: Model, regions: Sequence[Region] | None = None) -> Ints:
    """Return the groups `(n_cells,)` across whose borders nothing is recovered: regions, and sheets of folded surfaces."""
    if regions is None:
        regions = find_regions(model, computed_cells(model))
    groups = np.zeros(model.result.n_cells, dtype=np.int64)
    for number, region in enumerate(regions, 1):
        groups[region.cells] = number
    bent = any(b.kind in ("surface", "line") and len(b.active) for b in model.blocks)
    return sheets(model, groups, FOLD) if bent else groups


def trust_on(
    model: Model,
    volume: Floats,
    groups: Ints,
    asked: Sequence[Asked],
    equivalent_poisson: float | None = None,
    at: Location = "centroid",
    threads: int | None = None,
) -> list[Trust]:
    """Return what `trust_of` does, on any model.

    Parameters
    ----------
    model, volume, groups
        The model; `(n_cells,)` weights and `(n_cells,)` groups across which nothing is recovered.
    asked, equivalent_poisson, threads
        As of `trust_of` and of its fields.
    at
        Where the values live.
    """
    found = [Trust(math.nan)] * len(asked)
    bounds = {k: bound_of(a.measure, model.poisson, equivalent_poisson) for k, a in enumerate(asked)}
    there = computed_cells(model)
    known = {k: b for k, b in bounds.items() if b is not None and asked[k].cell >= 0 and there[asked[k].cell]}
    if not known:
        return found
    mesh = Surroundings(Cutter(model), volume, groups, at, threads)
    near = mesh.around([asked[k].cell for k in known], VALUES)
    growing = []
    for k, bound in known.items():
        a = asked[k]
        found[k] = Trust(bound.of(near.plus_minus(bound.bases, a.cell), float(a.values[a.cell])))
        if bound.kind == "strain" and near.grows(near.peak(a.values, a.cell, a.smallest), a.size):
            growing.append(k)
    if growing:
        near = mesh.around([asked[k].cell for k in growing], PEAKS)
        for k in growing:
            a = asked[k]
            peak = near.peak(a.values, a.cell, a.smallest)
            if near.suspected(peak, known[k].bases[0], a.size):
                point = int(near.part.points[peak.point])
                found[k] = replace(found[k], singular=True, point=point, growth=peak.growth)
        _find_next(mesh, asked, known, found, len(near.part.cells))
    return found


def _find_next(
    mesh: Surroundings, asked: Sequence[Asked], bounds: dict[int, Bound], found: list[Trust], near: int
) -> None:
    """Add the next peaks to those that are suspected: among ever more cells, while what lies around is not too much.

    `near` is the number of cells that were recovered anyway.
    """
    todo = [k for k, trust in enumerate(found) if trust.singular]
    for taken in _TAKEN:
        among = {k: _foremost(asked[k], mesh.volume, taken) for k in todo}
        if not among:
            return
        cells = mesh.cutter.around(np.unique(np.concatenate(list(among.values()))), PEAKS)
        if len(cells) > max(_MOST, near):
            return
        wide = mesh.of(cells)
        for k in todo:
            a, bound = asked[k], bounds[k]
            after, value = wide.next_peak(a.values, a.cell, among[k], a.smallest, bound.bases[0], a.size)
            if after >= 0:
                more = bound.of(wide.plus_minus(bound.bases, after), value)
                found[k] = replace(found[k], next_cell=after, next_value=value, next_plus_minus=more)
        todo = [k for k in todo if found[k].next_cell < 0 and len(among[k]) > taken]


def _foremost(asked: Asked, volume: Floats, count: int) -> Ints:
    """Return the cell and those of its region whose values come first, rising; all of them when there are no more."""
    cells = asked.cells[np.isfinite(asked.values[asked.cells]) & np.isfinite(volume[asked.cells])]
    if len(cells) > count:
        signed = asked.values[cells] if asked.smallest else -asked.values[cells]
        cells = np.append(cells[np.argpartition(signed, count)[: count + 1]], asked.cell)
    return np.unique(cells)
