"""Cells cut out of a model with the rings of cells around them, as a model of their own."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from unturn.gradient import NodalFields
from unturn.model import Model, ModelBlock
from unturn.recovery import coincident_points
from unturn.regions import merge_coincident
from unturn.result import CellBlock, Result

Ints = NDArray[np.int64]

_WHOLE = 0.3  # share of the cells above which it is not worth cutting


@dataclass(frozen=True, eq=False)
class Cut:
    """Some cells of a model.

    Attributes
    ----------
    model
        A model of these cells alone.
    cells
        `(n_cells,)` file positions of its cells, rising.
    points
        `(n_points,)` positions of its points in the file, rising; of coincident ones the first.
    """

    model: Model
    cells: Ints
    points: Ints


class Cutter:
    """Cuts cells out of a model. Coincident points count as one, as in recovery.

    Parameters
    ----------
    model
        See `build_model`.

    Attributes
    ----------
    count
        Number of its computed cells.
    """

    def __init__(self, model: Model) -> None:
        self.model = model
        self._blocks = [b for b in model.blocks if b.row is not None and len(b.active)]
        self.count = sum(len(b.active) for b in self._blocks)

    @cached_property
    def everything(self) -> Ints:
        """File positions of all computed cells, rising."""
        return np.sort(np.concatenate([b.index for b in self._blocks]))

    @cached_property
    def _label(self) -> Ints | None:
        """The first of the points that coincide with each; None where none does."""
        used = np.zeros(len(self.model.points), dtype=bool)
        for block in self._blocks:
            used[block.connectivity] = True
        same, _ = merge_coincident(self.model.points[used])
        return None if (same == np.arange(len(same))).all() else coincident_points(self.model)

    def around(self, cells: Ints, rings: int) -> Ints:
        """Return file positions, rising, of these cells and of some rings around them.

        The first ring is the cells that share a node with these, the second those that share one with the first, and so
        on. Where that is a large part of the model all its cells are returned.

        Parameters
        ----------
        cells
            File positions.
        rings
            How many.
        """
        most = _WHOLE * self.count
        inside = np.zeros(self.model.result.n_cells, dtype=bool)
        inside[cells] = True
        for _ in range(rings):
            touched = np.zeros(self.model.result.n_points, dtype=bool)
            for block in self._blocks:
                touched[block.connectivity[inside[block.index]]] = True
            if self._label is not None:
                touched[self._label[touched]] = True
                touched = touched[self._label]
            for block in self._blocks:
                hit = np.zeros(len(block.active), dtype=bool)
                for column in block.connectivity.T:
                    hit |= touched[column]
                inside[block.index] |= hit
            if np.count_nonzero(inside) > most:
                return self.everything
        return np.flatnonzero(inside)

    def cut(self, cells: Ints) -> Cut:
        """Return a model of these cells (file positions, rising) alone."""
        model = self.model
        new = np.full(model.result.n_cells, -1, dtype=np.int64)
        new[cells] = np.arange(len(cells))
        used = np.zeros(model.result.n_points, dtype=bool)
        parts = []
        for block in self._blocks:
            chosen = new[block.index] >= 0
            if chosen.any():
                connectivity = block.connectivity[chosen]
                if self._label is not None:
                    connectivity = self._label[connectivity]
                used[connectivity] = True
                parts.append((block, connectivity, new[block.index[chosen]]))
        number = np.cumsum(used) - 1
        blocks = tuple(
            ModelBlock(CellBlock(b.cells.cell_type, number[c], index), b.row, b.kind, np.arange(len(index)))
            for b, c, index in parts
        )
        rows = model.fields.rows[:, used]
        points = model.points[used]
        small = Model(
            Result(points, tuple(b.cells for b in blocks), path=model.result.path),
            model.displacement,
            points,
            NodalFields(rows[:3].T, rows[3:].T),
            blocks,
            model.plane,
            back=model.back,
            back_of=None if model.back_of is None else model.back_of[cells],
            poisson=model.poisson,
        )
        return Cut(small, cells, np.flatnonzero(used))
