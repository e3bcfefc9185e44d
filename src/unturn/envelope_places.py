"""Where the values of an envelope live, the same places in every state: cells, or nodes with the sides of their regions."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from unturn.borders import Layout
from unturn.extremes import Stored
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.nodal import FOLD
from unturn.pipeline import Computed
from unturn.recovery import Spots, node_shares, sheets
from unturn.regions import find_regions
from unturn.result import Association

Ints = NDArray[np.int64]
Arrays = dict[str, Floats]
Components = dict[str, tuple[str, ...]]


class CellPlaces:
    """Every cell of the file is a place.

    Attributes
    ----------
    on
        What the written arrays belong to: ``cell`` or ``point``.
    n
        Number of places.
    position
        `(n,)` file position of each.
    weight
        `(n,)` its weight in statistics: the volume of the cells that were computed in some state; NaN for none.
    at
        `(n, 3)` reference coordinates.
    """

    on: Association = "cell"

    def __init__(self, whole: Model) -> None:
        """`whole` is the model with every cell active that some state may compute."""
        self.n = whole.result.n_cells
        self.position: Ints = np.arange(self.n)
        self.weight, self.at = np.full(self.n, np.nan), np.full((self.n, 3), np.nan)

    def values(self, computed: Computed, names: Sequence[str]) -> tuple[Arrays, Components]:
        """Return the measures of a state at the places, `(n,)` or `(n, components)`, and names of components.

        At nodes the state is computed with ``borders="split"``.
        """
        return computed.fields.arrays, computed.fields.components

    def of(self, cells: Ints) -> Ints:
        """Return the places of some cells."""
        return cells

    def settle(self, volume: Floats, centroid: Floats) -> None:
        """Take the volumes and centroids of the cells, NaN for those that no state has computed so far."""
        self.weight, self.at = volume, centroid

    def written(self, values: Stored) -> Stored:
        """Return values at the places as an array of the file."""
        return values


class NodePlaces(CellPlaces):
    """Nodes, and on the border of regions every region's own side of a node.

    What is written holds the side with most volume among those of the highest dimension.
    """

    on: Association = "point"

    def __init__(self, whole: Model) -> None:
        self._whole = whole
        active = np.zeros(whole.result.n_cells, dtype=bool)
        for block in whole.blocks:
            active[block.index] = True
        groups = np.zeros(whole.result.n_cells, dtype=np.int64)
        for number, region in enumerate(find_regions(whole, active), 1):
            groups[region.cells] = number
        shares = node_shares(whole, sheets(whole, groups, FOLD))
        self._spots: Spots = shares.spots
        self._dimension = shares.dimension[self._spots.share]
        self.position = self._spots.point
        self.n = len(self.position)
        self.weight, self.at = np.zeros(self.n), whole.points[self.position]
        self._shown = np.full(whole.result.n_points, -1, dtype=np.int64)

    def values(self, computed: Computed, names: Sequence[str]) -> tuple[Arrays, Components]:
        nodes = computed.nodes
        assert nodes is not None
        row = self.row_of(computed.fields.model, nodes.layout)
        lost = row < 0
        arrays = {}
        for name in names:
            arrays[name] = nodes.arrays[name][row]
            arrays[name][lost] = np.nan
        return arrays, nodes.components

    def row_of(self, model: Model, layout: Layout) -> Ints:
        """Return which row of the values of a state each place is; -1 for none."""
        assert layout.cells is not None
        row = np.full(self.n, -1, dtype=np.int64)
        for block, whole, cells, spots in zip(
            model.blocks, self._whole.blocks, layout.cells, self._spots.cells
        ):
            position = np.full(len(whole.cells), -1, dtype=np.int64)
            position[whole.active] = np.arange(len(whole.active))
            known = position[block.active]
            row[spots[known[known >= 0]]] = cells[known >= 0]
        return row

    def of(self, cells: Ints) -> Ints:
        mask = np.zeros(self._whole.result.n_cells, dtype=bool)
        mask[cells] = True
        own = np.zeros(self.n, dtype=bool)
        for block, spots in zip(self._whole.blocks, self._spots.cells):
            own[spots[mask[block.index]]] = True
        return np.flatnonzero(own)

    def settle(self, volume: Floats, centroid: Floats) -> None:
        around, self.weight = np.zeros(self.n), np.zeros(self.n)
        for block, spots in zip(self._whole.blocks, self._spots.cells):
            each = np.repeat(np.nan_to_num(volume[block.index]), spots.shape[1])
            around += np.bincount(spots.reshape(-1), each, self.n)
            self.weight += np.bincount(spots.reshape(-1), each / spots.shape[1], self.n)
        self._shown[:] = -1
        used = np.flatnonzero(around > 0)
        order = np.lexsort((-used, around[used], self._dimension[used], self.position[used]))
        self._shown[self.position[used[order]]] = used[order]  # the last of each point stays

    def written(self, values: Stored) -> Stored:
        shape = (len(self._shown), *values.shape[1:])
        out = np.full(shape, -1 if values.dtype.kind == "i" else np.nan, dtype=values.dtype)
        shown = self._shown >= 0
        out[shown] = values[self._shown[shown]]
        return out
