"""The values of one step that limits are of, and where they are."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.elements import element
from unturn.errors import close_matches
from unturn.frames import parse_frame, turned_components
from unturn.gradient import sample_points
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.numbering import element_numbers, node_numbers
from unturn.pipeline import Computed
from unturn.result import Result
from unturn.verdicts.columns import Column, Ints, NoValues, Selection, one_component
from unturn.verdicts.finding import Place
from unturn.verdicts.limit import Quantity
from unturn.verdicts.step_fields import StepFields, group_of
from unturn.verdicts.wording import place_text
from unturn.written_regions.select import Mask


class Step(StepFields):
    """One step; see `StepFields` for what it is made of."""

    @cached_property
    def _columns(self) -> dict[Quantity, Column]:
        return {}

    @cached_property
    def _largest(self) -> dict[str, float]:
        return {}

    @cached_property
    def _selections(self) -> dict[tuple[Quantity, str, bool], Selection]:
        return {}

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
            self._selections[key] = Selection(
                column, index, values, weights, missing, np.flatnonzero(mask), region
            )
        return self._selections[key]

    def _places(self, column: Column, mask: Mask) -> tuple[Ints, Floats]:
        """Return which positions of a column belong to some cells, and their weights."""
        volume = self.diagnostics.volume
        if column.on == "cells":
            index = np.flatnonzero(mask)
            return index, volume[index]
        if column.on == "faces":
            found = column.surface.cell_data
            index = np.flatnonzero(mask[found["parent_cell"]])
            return index, np.asarray(found["area"], dtype=np.float64)[index]
        blocks = self.model.blocks
        nodes_of: list[NDArray[Any]] = [b.connectivity for b in blocks]
        n = self.result.n_points
        if column.on == "shares":
            shares = column.shares
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

    def largest_strain(self, selection: Selection) -> float:
        """Return the largest principal strain of the cells of a selection, without its sign."""
        key = selection.region
        if key not in self._largest:
            principal = self.diagnostics.principal[selection.cells]
            finite = principal[np.isfinite(principal)]
            self._largest[key] = float(max(finite.max(initial=0.0), -finite.min(initial=0.0)))
        return self._largest[key]

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
            point = int(column.owners(np.array([at]))[0])
            node = None if self._nodes is None else int(self._nodes[point])
            return Place(point=point, node=node, at=_three(self.model.points[point]), **when)
        cell, where = at, self.diagnostics.centroid[at] if column.on == "cells" else None
        if column.on == "faces":
            cell, where = int(column.owners(np.array([at]))[0]), _middle(column.surface, at)
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
    block = next(b for b in surface.blocks if b.index[0] <= face <= b.index[-1] and face in b.index)
    row = element(block.cell_type, block.connectivity.shape[1])
    nodes = block.connectivity[int(np.flatnonzero(block.index == face)[0])]
    middle: Floats = sample_points(row, "centroid").functions[0] @ surface.points[nodes]
    return middle
