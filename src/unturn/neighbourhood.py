"""Cells with those around them, the gradient recovered at their nodes: bounds of strain, and peaks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.cutout import Cut, Cutter
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.peaks import GROWING, Peak, Peaks
from unturn.recovery import Recovered, recover_gradient
from unturn.trust import StrainError, strain_error

Ints = NDArray[np.int64]
Location = Literal["centroid", "mean"]

_NEGLIGIBLE = 1e-3  # of the largest strain of the region: a smaller extreme is no peak
RESOLVED = 0.4
"""Plus and minus at the node of a peak, as a share of the strain of its cell, below which the mesh resolves it: 0.5 to 3.5
was seen at corners and point loads on eleven elements, less at holes, bores, cavities and in bending."""


@dataclass(eq=False)
class Surroundings:
    """A model of which parts are recovered.

    Parameters
    ----------
    cutter
        Cuts them out.
    volume, groups
        `(n_cells,)` weights, and groups across which nothing is recovered.
    at
        Where the values live.
    threads
        None: all processors.
    """

    cutter: Cutter
    volume: Floats
    groups: Ints
    at: Location = "centroid"
    threads: int | None = None

    def around(self, cells: Sequence[int], rings: int) -> Neighbourhood:
        """Return these cells (file positions) with some rings around them."""
        return self.of(self.cutter.around(np.asarray(cells, dtype=np.int64), rings))

    def of(self, cells: Ints) -> Neighbourhood:
        """Return these cells (file positions, rising) alone."""
        return self.whole if len(cells) == self.cutter.count else self._of(cells)

    @cached_property
    def whole(self) -> Neighbourhood:
        """All computed cells."""
        return self._of(self.cutter.everything)

    def _of(self, cells: Ints) -> Neighbourhood:
        cut = self.cutter.cut(cells)
        recovered = recover_gradient(cut.model, self.groups[cells], "patch", self.threads)
        return Neighbourhood(cut, recovered, self.volume[cells], self.at, self.threads)


@dataclass(frozen=True, eq=False)
class Neighbourhood:
    """Cells that were cut out, with the gradient recovered at their nodes.

    Cells and points are named by their positions in the file, but for those of peaks: these are positions in the cut.
    """

    part: Cut
    recovered: Recovered
    volume: Floats
    at: Location
    threads: int | None
    _errors: dict[str, StrainError] = field(default_factory=dict)
    _taken: dict[int, Floats] = field(default_factory=dict)

    def own(self, cells: Ints | Sequence[int]) -> Ints:
        """Return the positions of cells in the cut."""
        return np.searchsorted(self.part.cells, cells)

    def values(self, values: Floats) -> Floats:
        """Return the values of these cells, from those of all; taken once from an array that is asked for again."""
        if id(values) not in self._taken:
            self._taken[id(values)] = values[self.part.cells]
        return self._taken[id(values)]

    def error(self, base: str) -> StrainError:
        """Return the error of a tensor, `base` as in `strain_error`."""
        if base not in self._errors:
            self._errors[base] = strain_error(self.recovered, self.threads, base, self.at)
        return self._errors[base]

    def plus_minus(self, bases: Sequence[str], cell: int) -> float:
        """Return the sum of the bounds of some tensors at a cell."""
        own = self.own([cell])[0]
        return float(sum(self.error(base).plus_minus[own] for base in bases))

    @cached_property
    def peaks(self) -> Peaks:
        """The peaks of these cells."""
        return Peaks(self.recovered, middles(self.part.model), self.volume)

    def peak(self, values: Floats, cell: int, smallest: bool) -> Peak:
        """Return the value of a cell, `values` being those of all, as a peak."""
        return self.peaks.find(self.values(values), self.own([cell]), smallest)

    def grows(self, peak: Peak, size: float) -> bool:
        """Return whether a value grows towards a node, and is not negligible beside the strain of its region."""
        return peak.growth > GROWING and abs(peak.value) >= _NEGLIGIBLE * size

    def suspected(self, peak: Peak, base: str, size: float) -> bool:
        """Return whether a peak is suspected, not negligible, and not resolved.

        At a singular point the elements around never agree with what is recovered there: what recovery changes stays in
        proportion to the strain, however fine the mesh. A steep smooth field they follow.
        """
        if not peak.singular or not self.grows(peak, size):
            return False
        error = self.error(base)
        shares = self.peaks.corners[[peak.cell]].indices
        share = shares[self.recovered.shares.point[shares] == peak.point]
        strain = math.sqrt(error.strain_squared[peak.cell] / error.volume[peak.cell])
        return not (error.plus_minus_shares[share] < RESOLVED * strain).all()

    def next_peak(
        self, values: Floats, cell: int, among: Ints, smallest: bool, base: str, size: float
    ) -> tuple[int, float]:
        """Return cell and value of the most extreme peak among some cells, away from a suspected one; -1 for none."""
        after = self.peaks.next_peak(
            self.values(values),
            self.own(among),
            self.peak(values, cell, smallest),
            smallest,
            lambda peak: self.suspected(peak, base, size),
        )
        return (int(self.part.cells[after.cell]) if after.cell >= 0 else -1), after.value


def middles(model: Model) -> Floats:
    """Return the middle of the corners of every cell `(n_cells, 3)`; NaN where it is not computed."""
    found = np.full((model.result.n_cells, 3), np.nan)
    for block in model.blocks:
        if block.row is not None:
            found[block.index] = model.points[block.connectivity[:, : block.row.n_corners]].mean(axis=1)
    return found
