"""Extremes at nodes and on free surfaces, with how far to trust them, beside those at centroids."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from unturn.around import Asked, Trust, groups_of, trust_on
from unturn.borders import BorderJump, border_jump
from unturn.gradient import sample_points
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES, base_of
from unturn.nodal import FOLD, NodeFields
from unturn.node_errors import NodeErrors
from unturn.numbering import node_numbers
from unturn.pipeline import Computed
from unturn.recovery import NodeShares, sheets
from unturn.regions import Region
from unturn.surface import Faces, SurfaceFields, faces_model
from unturn.trusted import BASE_WORDS, Growth, node_of


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
class Elsewhere:
    """Extremes at another place than centroids.

    Attributes
    ----------
    title
        ``nodes`` or ``free surfaces``.
    extremes
        Region by region.
    growths
        Those of free surfaces that are suspected singular.
    error_percent
        Region -> estimated global error of its strain in percent.
    notes
        Sentences on how the values came about.
    border
        The largest jump of the strain between two regions at a node.
    """

    title: str
    extremes: tuple[ElsewhereExtreme, ...]
    growths: tuple[Growth, ...] = ()
    error_percent: dict[str, float] | None = None
    notes: tuple[str, ...] = ()
    border: Border | None = None


@dataclass(frozen=True)
class Border:
    """The largest jump between the strains of two regions at a node, the solver's number of the node, and its place."""

    jump: BorderJump
    node: int | None
    at: tuple[float, ...]


def find_elsewhere(
    computed: Computed,
    regions: Sequence[Region],
    numbers: NDArray[np.int64] | None,
    threads: int | None = None,
    groups: Sequence[Region] | None = None,
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
    groups
        What `find_regions` returns for all computed cells, where it is at hand.
    """
    if computed.nodes is not None:
        return _Nodes(computed, computed.nodes, threads).find(regions)
    if computed.surface is not None:
        return _Surface(computed, computed.surface, numbers, threads, groups).find(regions)
    return None


@dataclass(frozen=True)
class _Row:
    """One extreme to look for: label, array, which component, the smallest or the largest."""

    label: str
    array: str
    column: int | None
    smallest: bool

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
            found.append(_Row(f"largest principal{words}", principal, 0, False))
            found.append(_Row(f"smallest principal{words}", principal, -1, True))
        if equivalent in names:
            found.append(_Row(f"equivalent, largest{words}", equivalent, None, False))
    return found


class _Nodes:
    """Looks for extremes at nodes."""

    def __init__(self, computed: Computed, nodes: NodeFields, threads: int | None) -> None:
        self.computed, self.nodes = computed, nodes
        self.numbering = node_numbers(computed.fields.model.result)
        self.rows = _rows(nodes.arrays)
        self.main = next((base_of(n) for n in nodes.arrays if MEASURES[n].unit == "strain"), "")
        self.behind = nodes.of_finite if self.main else nodes.recovered
        self.errors = NodeErrors(nodes, computed.equivalent_poisson, threads)

    def find(self, regions: Sequence[Region]) -> Elsewhere:
        error = self.errors.error(self.behind, self.main)
        return Elsewhere(
            "nodes",
            tuple(e for r in regions for e in self._extremes(r)),
            error_percent={r.name: error.percentage(r.cells) for r in regions},
            notes=self.nodes.recovered.notes,
            border=self._border(regions),
        )

    def _border(self, regions: Sequence[Region]) -> Border | None:
        jump = border_jump(self.behind, regions, self.main)
        if jump is None:
            return None
        at = self.computed.fields.model.points[jump.point]
        return Border(jump, node_of(self.numbering, jump.point), tuple(float(x) for x in at))

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
            value = float(values[pick])
            bound = self.errors.plus_minus(row.array, int(own[pick]), value)
            place = {"point": at, "node": node_of(self.numbering, at)}
            coordinates = tuple(float(x) for x in points[at])
            found.append(ElsewhereExtreme(region.name, row.label, name, value, bound, place, coordinates))
        return found


def _shares_of(shares: NodeShares, cells: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the shares of the nodes that some cells (file positions) have."""
    asked = np.zeros(shares.model.result.n_cells, dtype=bool)
    asked[cells] = True
    mask = np.zeros(len(shares), dtype=bool)
    for block, own in zip(shares.model.blocks, shares.cells):
        mask[own[asked[block.index]]] = True
    return np.flatnonzero(mask)


def trust_on_faces(
    computed: Computed,
    surface: SurfaceFields,
    asked: Sequence[Asked],
    regions: Sequence[Region] | None = None,
    threads: int | None = None,
) -> list[Trust]:
    """Return how far to trust values on free faces, whose cells are faces; see `unturn.around.trust_of`."""
    model = faces_model(surface.faces, computed.request.get("poisson"))
    whole = groups_of(computed.fields.model, regions)
    groups = sheets(model, whole[np.asarray(surface.result.cell_data["parent_cell"])], FOLD)
    area = np.asarray(surface.result.cell_data["area"])
    return trust_on(model, area, groups, asked, computed.equivalent_poisson, threads=threads)


class _Surface:
    """Looks for extremes on free surfaces: each face is a cell of the mesh of all of them."""

    def __init__(
        self,
        computed: Computed,
        surface: SurfaceFields,
        numbers: NDArray[np.int64] | None,
        threads: int | None,
        groups: Sequence[Region] | None,
    ) -> None:
        self.computed, self.surface, self.numbers = computed, surface, numbers
        self.threads, self.groups = threads, groups
        self.parents = np.asarray(surface.result.cell_data["parent_cell"])
        self.numbering = node_numbers(computed.fields.model.result)

    def find(self, regions: Sequence[Region]) -> Elsewhere:
        """Return the extremes of the faces of each region's cells."""
        result, n_cells = self.surface.result, self.surface.faces.model.result.n_cells
        rows = _rows(result.cell_data, "surface_")
        picked: list[tuple[Region, _Row, str, Asked]] = []
        for region in regions:
            mask = np.zeros(n_cells, dtype=bool)
            mask[region.cells] = True
            faces = np.flatnonzero(mask[self.parents])
            of_region = []
            for row in rows:
                name, values = row.component(np.asarray(result.cell_data[row.array]))
                at = row.pick(values, mask[self.parents])
                if at >= 0:
                    of_region.append((row, name, values, at))
            size = max((abs(float(values[at])) for _, _, values, at in of_region), default=0.0)
            picked += [
                (region, row, name, Asked(row.array, values, faces, at, row.smallest, size))
                for row, name, values, at in of_region
            ]
        trusts = trust_on_faces(
            self.computed, self.surface, [asked for *_, asked in picked], self.groups, self.threads
        )
        return Elsewhere(
            "free surfaces",
            tuple(self._extreme(*p, trust) for p, trust in zip(picked, trusts)),
            tuple(self._growth(*p, trust) for p, trust in zip(picked, trusts) if trust.singular),
            notes=_surface_notes(self.surface),
        )

    def _extreme(self, region: Region, row: _Row, name: str, asked: Asked, trust: Trust) -> ElsewhereExtreme:
        cell = int(self.parents[asked.cell])
        place: dict[str, int | None] = {
            "cell": cell,
            "element": None if self.numbers is None else int(self.numbers[cell]),
            "face": int(self.surface.result.cell_data["parent_face"][asked.cell]),
        }
        value = float(asked.values[asked.cell])
        at = _middle(self.surface.faces, asked.cell)
        return ElsewhereExtreme(region.name, _in_plane(row), name, value, trust.plus_minus, place, at)

    def _growth(self, region: Region, row: _Row, name: str, asked: Asked, trust: Trust) -> Growth:
        after = int(self.parents[trust.next_cell]) if trust.next_cell >= 0 else -1
        return Growth(
            "free surfaces",
            region.name,
            _in_plane(row),
            name,
            "minimum" if row.smallest else "maximum",
            int(self.parents[asked.cell]),
            float(asked.values[asked.cell]),
            node_of(self.numbering, trust.point),
            replace(trust, next_cell=after),
        )


def _in_plane(row: _Row) -> str:
    return row.label if row.column is None else f"{row.label}, in plane"


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
    between = int(np.sum(surface.result.cell_data.get("between_groups", 0)))
    note += f"; {between} of them between regions" if between else ""
    return (note + (f"; {left} without values" if left else ""),)
