"""The values of one step that limits are of: computed fields, arrays of the file, and what they are in a region."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UnturnError, close_matches
from unturn.fields import CellDiagnostics
from unturn.frames import parse_frame, turned_components
from unturn.gradient import sample_points
from unturn.kinematics._symmetric import Floats
from unturn.measures import FULL, MEASURES, TENSOR, VECTOR
from unturn.model import Model
from unturn.numbering import element_numbers, node_numbers
from unturn.pipeline import Computed, StrainOptions, compute
from unturn.regions import Region
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.surface import SURFACE_MEASURES
from unturn.verdict import Verdict, judge
from unturn.verdicts.finding import Place
from unturn.verdicts.limit import Limits, Quantity
from unturn.verdicts.region_kinds import Cells, Mask, RegionFinder
from unturn.verdicts.wording import place_text

Group = tuple[str, str | None, str]
Ints = NDArray[np.int64]
MAGNITUDE = "magnitude"


class NoValues(Exception):
    """What a limit is of cannot be had from a result; the text says why."""


def group_of(quantity: Quantity) -> Group:
    """Return which quantities are computed together: location, frame and, on free surfaces, base."""
    at = quantity.at or "centroid"
    return at, quantity.frame, quantity.base if at == "surface" else "small"


def measures_by_group(limits: Limits) -> dict[Group, list[str]]:
    """Return what must be computed, in the order of the file."""
    found: dict[Group, list[str]] = {}
    for quantity in (limit.quantity for limit in limits.limits if limit.quantity.measure):
        names = found.setdefault(group_of(quantity), [])
        name = SURFACE_MEASURES[quantity.name].replaces if quantity.at == "surface" else quantity.name
        if name not in names:
            names.append(name)
    return found or {("centroid", None, "small"): ["element_volume"]}


@dataclass(frozen=True, eq=False)
class Column:
    """One number for each cell, node, share of a node or face.

    Attributes
    ----------
    values
        `(n,)`.
    on
        What they are on.
    computed
        What they come from; None for arrays of the file.
    """

    values: Floats
    on: Literal["cells", "points", "shares", "faces"]
    computed: Computed | None


@dataclass(frozen=True, eq=False)
class Selection:
    """The values of a column in a region.

    Attributes
    ----------
    column
        The column.
    index
        `(n,)` positions in it.
    values, weights
        `(n,)` finite ones.
    missing
        How many values are left out because they are not finite.
    cells
        `(m,)` the cells of the region.
    """

    column: Column
    index: Ints
    values: Floats
    weights: Floats
    missing: int
    cells: Ints


class Step:
    """One step of a result, with everything that limits need computed once.

    Parameters
    ----------
    number, time
        Position in the series and its time.
    result
        As read.
    limits
        See `Limits`.
    options
        How it is read.
    zero
        The step from which displacements are measured.
    previous
        Motions of the step before.
    threads
        None: all processors.

    Raises
    ------
    InputError
        The step cannot be used.
    """

    def __init__(
        self,
        number: int,
        time: float | None,
        result: Result,
        limits: Limits,
        options: StrainOptions,
        zero: Result | None = None,
        previous: Sequence[RigidMotion] = (),
        threads: int | None = None,
    ) -> None:
        self.number, self.time, self.result = number, time, result
        self.shown = None if time is None else number
        self._options, self.threads = replace(options, threads=threads), threads
        self._solve = options.solve
        self._zero, self._previous = zero, previous
        self._asked = measures_by_group(limits)
        self._computed: dict[Group, Computed | UnturnError] = {}
        self._columns: dict[Quantity, Column] = {}
        self._selections: dict[tuple[Quantity, str, bool], Selection] = {}
        self._verdicts: dict[str, Verdict] = {}
        self.base = self._first()
        self.finder = RegionFinder(
            limits.regions, Cells(self.model, self.diagnostics.centroid, self.diagnostics.dimension)
        )

    def _first(self) -> Computed:
        """Return the first group that can be computed: geometry and verdicts are the same in all."""
        error: UnturnError | None = None
        for group in self._asked:
            try:
                return self.computed(group)
            except UnturnError as found:
                error = found
        assert error is not None
        raise error

    def computed(self, group: Group) -> Computed:
        """Return the fields of a group.

        Raises
        ------
        UnturnError
            They cannot be computed.
        """
        if group not in self._computed:
            at, frame, base = group
            options = replace(self._options, measures=self._asked[group], base=base, at=at, frame=frame)  # type: ignore[arg-type]
            try:
                found: Computed | UnturnError = compute(
                    self.result, options, zero=self._zero, diagnose=True, previous=self._previous
                )
            except UnturnError as error:
                found = error
            self._computed[group] = found
        made = self._computed[group]
        if isinstance(made, UnturnError):
            raise made
        return made

    def largest_strain(self, cells: Ints) -> float:
        """Return the largest principal strain of some cells, without its sign."""
        principal = np.abs(self.diagnostics.principal[cells])
        return float(np.max(principal, where=np.isfinite(principal), initial=0.0))

    @property
    def model(self) -> Model:
        """The model."""
        return self.base.fields.model

    @property
    def diagnostics(self) -> CellDiagnostics:
        """What is known of every cell."""
        found = self.base.fields.diagnostics
        assert found is not None
        return found

    @property
    def motions(self) -> tuple[RigidMotion, ...]:
        """The rigid motions that were taken out."""
        return tuple(r.motion for r in self.base.removals)

    @cached_property
    def mid_surface(self) -> Mask | None:
        """Which cells show strain of their mid-surface or axis only; None when none does."""
        mask = np.zeros(self.result.n_cells, dtype=bool)
        for block in self.model.blocks:
            if block.kind in ("surface", "line"):
                mask[block.index] = True
        return mask if mask.any() else None

    def verdict(self, region: str) -> Verdict:
        """Return whether the small strain holds in a region."""
        if region not in self._verdicts:
            cells = np.flatnonzero(self.finder.find(region).inside)
            self._verdicts[region] = judge(self.diagnostics, Region(region, cells, "group"), self._solve)
        return self._verdicts[region]

    # --- columns ------------------------------------------------------------------------------------------------------

    def column(self, quantity: Quantity) -> Column:
        """Return the numbers that a limit is of.

        Raises
        ------
        NoValues
            The file has no such array or component.
        UnturnError
            They cannot be computed.
        """
        if quantity not in self._columns:
            self._columns[quantity] = (
                self._of_measure(quantity) if quantity.measure else self._of_array(quantity)
            )
        return self._columns[quantity]

    def _of_measure(self, quantity: Quantity) -> Column:
        computed = self.computed(group_of(quantity))
        name = quantity.name
        if quantity.at == "surface":
            assert computed.surface is not None
            found = computed.surface.result
            labels = found.component_names.get(("cell", name), ())
            return Column(
                one_component(found.cell_data[name], labels, quantity.component, name), "faces", computed
            )
        if quantity.at == "nodes":
            return Column(self._at_shares(computed, quantity), "shares", computed)
        labels = computed.fields.components.get(name, ())
        return Column(
            one_component(computed.fields.arrays[name], labels, quantity.component, name), "cells", computed
        )

    def _at_shares(self, computed: Computed, quantity: Quantity) -> Floats:
        """Return a measure on every share of the nodes: on borders between regions each side has its own."""
        assert computed.nodes is not None
        shares = computed.nodes.behind(quantity.name).shares
        values = computed.nodes.at_shares(quantity.name, np.arange(len(shares)), computed.equivalent_poisson)
        if quantity.frame is not None and MEASURES[quantity.name].turns:
            frame = parse_frame(quantity.frame, self.result)
            axes = frame.axes(self.model.points[shares.point].T, shares.point, None)
            values = turned_components(np.ascontiguousarray(values.T), axes).T
        labels = computed.nodes.components.get(quantity.name, ())
        return one_component(values, labels, quantity.component, quantity.name)

    def _of_array(self, quantity: Quantity) -> Column:
        name, result = quantity.name, self.result
        on_cells, on_points = name in result.cell_data, name in result.point_data
        if quantity.at is None and on_cells and on_points:
            raise NoValues(
                f'both cells and nodes have an array {name!r}: say which with at = "centroid" or "nodes"'
            )
        if on_cells and quantity.at != "nodes":
            labels = result.component_names.get(("cell", name), ())
            return Column(
                one_component(result.cell_data[name], labels, quantity.component, name), "cells", None
            )
        if not on_points or quantity.at == "centroid":
            known = {
                "centroid": [*result.cell_data],
                "nodes": [*result.point_data],
                None: [*result.cell_data, *result.point_data],
            }
            where = {"centroid": "cell ", "nodes": "point ", None: ""}[quantity.at]
            have = known[quantity.at]
            raise NoValues(
                f"the file has no {where}array {name!r}.{close_matches(name, have)} Arrays: {', '.join(have) or 'none'}"
            )
        labels = result.component_names.get(("point", name), ())
        return Column(
            one_component(result.point_data[name], labels, quantity.component, name), "points", None
        )

    def tensor(self, quantity: Quantity) -> Floats:
        """Return a strain tensor `(n_cells, 6)`, axes of the file."""
        return self.computed(group_of(quantity)).fields.arrays[quantity.name]

    def replace_column(self, quantity: Quantity, column: Column) -> None:
        """Put other numbers in place of a quantity: those over all steps."""
        self._columns[quantity] = column
        self._selections = {key: s for key, s in self._selections.items() if key[0] != quantity}

    # --- selections ---------------------------------------------------------------------------------------------------

    def select(self, quantity: Quantity, region: str, left_out: bool = False) -> Selection:
        """Return the finite values of a quantity in a region, or in what the region names and leaves out.

        Raises
        ------
        NoRegion, NoValues, UnturnError
            There are none.
        """
        key = quantity, region, left_out
        if key not in self._selections:
            found = self.finder.find(region)
            mask = found.left_out if left_out else found.inside
            column = self.column(quantity)
            index, weights = self._places(column, mask)
            values = column.values[index]
            finite = np.isfinite(values) & np.isfinite(weights)
            missing = len(finite) - int(finite.sum())
            if missing:
                index, values, weights = index[finite], values[finite], weights[finite]
            self._selections[key] = Selection(column, index, values, weights, missing, np.flatnonzero(mask))
        return self._selections[key]

    def _places(self, column: Column, mask: Mask) -> tuple[Ints, Floats]:
        """Return which positions of a column belong to some cells, and their weights."""
        volume = self.diagnostics.volume
        if column.on == "cells":
            index = np.flatnonzero(mask)
            return index, volume[index]
        if column.on == "faces":
            found = self._surface(column).cell_data
            index = np.flatnonzero(mask[found["parent_cell"]])
            return index, np.asarray(found["area"], dtype=np.float64)[index]
        blocks = self.model.blocks
        nodes_of: list[NDArray[Any]] = [b.connectivity for b in blocks]
        n = self.result.n_points
        if column.on == "shares":
            assert column.computed is not None
            assert column.computed.nodes is not None
            shares = column.computed.nodes.recovered.shares
            blocks, nodes_of, n = shares.model.blocks, list(shares.cells), len(shares)
        weight, met = np.zeros(n), np.zeros(n, dtype=bool)
        for block, nodes in zip(blocks, nodes_of):
            inside = mask[block.index]
            chosen = nodes[inside]
            if chosen.size:
                each = np.nan_to_num(volume[block.index[inside]]) / chosen.shape[1]
                weight += np.bincount(chosen.reshape(-1), np.repeat(each, chosen.shape[1]), n)
                met[chosen] = True
        index = np.flatnonzero(met)
        return index, weight[index]

    def owners(self, column: Column, index: Ints) -> Ints:
        """Return the cell or point of the file behind each position of a column."""
        if column.on == "shares":
            assert column.computed is not None
            assert column.computed.nodes is not None
            return np.asarray(column.computed.nodes.recovered.shares.point)[index]
        if column.on == "faces":
            return np.asarray(self._surface(column).cell_data["parent_cell"])[index]
        return index

    def _surface(self, column: Column) -> Result:
        assert column.computed is not None
        assert column.computed.surface is not None
        return column.computed.surface.result

    # --- places -------------------------------------------------------------------------------------------------------

    @cached_property
    def _elements(self) -> NDArray[np.int64] | None:
        found = element_numbers(self.result)
        return None if found is None else found.numbers

    @cached_property
    def _nodes(self) -> NDArray[np.int64] | None:
        found = node_numbers(self.result)
        return None if found is None else found.numbers

    def place(self, column: Column, at: int) -> Place:
        """Return where a position of a column is."""
        when = Place(step=self.shown, time=self.time)
        if column.on in ("points", "shares"):
            point = int(self.owners(column, np.array([at]))[0])
            node = None if self._nodes is None else int(self._nodes[point])
            return Place(point=point, node=node, at=_three(self.model.points[point]), **when)
        cell, where = at, self.diagnostics.centroid[at] if column.on == "cells" else None
        if column.on == "faces":
            cell, where = int(self.owners(column, np.array([at]))[0]), _middle(self._surface(column), at)
        element = None if self._elements is None else int(self._elements[cell])
        assert where is not None
        return Place(cell=cell, element=element, at=_three(where), **when)

    def cell_words(self, cell: int) -> str:
        """Return a cell in words."""
        return place_text(
            {"cell": cell, "element": None if self._elements is None else int(self._elements[cell])}
        )

    def node_words(self, point: int) -> str:
        """Return a node in words, with its coordinates."""
        return place_text(
            {
                "point": point,
                "node": None if self._nodes is None else int(self._nodes[point]),
                "at": _three(self.model.points[point]),
            }
        )


def _three(at: Floats) -> tuple[float, float, float]:
    return float(at[0]), float(at[1]), float(at[2])


def _middle(surface: Result, face: int) -> Floats:
    """Return the centroid of a face."""
    from unturn.elements import element

    block = next(b for b in surface.blocks if b.index[0] <= face <= b.index[-1] and face in b.index)
    row = element(block.cell_type, block.connectivity.shape[1])
    nodes = block.connectivity[int(np.flatnonzero(block.index == face)[0])]
    middle: Floats = sample_points(row, "centroid").functions[0] @ surface.points[nodes]
    return middle


def one_component(values: NDArray[Any], labels: tuple[str, ...], component: str, name: str) -> Floats:
    """Return one component of an array, or the length of a vector.

    Raises
    ------
    NoValues
        It has no such component, or holds no numbers.
    """
    if values.dtype.kind not in "iufb":
        raise NoValues(f"the array {name!r} holds no real numbers")
    if values.ndim == 1 or values[:1].size == 1:
        if component:
            raise NoValues(f"the array {name!r} is one number each and has no component {component!r}")
        return values.reshape(len(values)).astype(np.float64, copy=False)
    values = values.reshape(len(values), -1)
    n = values.shape[1]
    if component == MAGNITUDE and n <= len(VECTOR):
        length: Floats = np.sqrt(np.square(values.astype(np.float64, copy=False)).sum(axis=1))
        return length
    usual = {2: VECTOR[:2], 3: VECTOR, 6: TENSOR, 9: FULL}.get(n, ())
    known = labels if len(labels) == n else usual
    names = [*known, *(str(k + 1) for k in range(n))]
    if component not in names:
        more = [MAGNITUDE] if n <= len(VECTOR) else []
        raise NoValues(
            f"the array {name!r} has components: name one of {', '.join(dict.fromkeys([*names, *more]))}"
            + (f", not {component!r}" if component else "")
        )
    column: Floats = values[:, names.index(component) % n].astype(np.float64, copy=False)
    return column
