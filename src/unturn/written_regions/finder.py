"""The regions of a limits file among the cells of one step."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from unturn.written_regions.kinds import REGION_KINDS, WHOLE, RegionSpec, region_words
from unturn.written_regions.select import Cells, Found, Mask, NoRegion


@dataclass(eq=False)
class RegionFinder:
    """Finds regions by name among the cells of a step, each once."""

    specs: Mapping[str, RegionSpec]
    cells: Cells
    _found: dict[str, Found | NoRegion] = field(default_factory=dict)

    def find(self, name: str) -> Found:
        """Return a region.

        Raises
        ------
        NoRegion
            It does not exist in this result, or has fewer cells than it must have.
        """
        if name not in self._found:
            try:
                self._found[name] = self._whole() if name == WHOLE else self._make(self.specs[name])
            except NoRegion as error:
                self._found[name] = NoRegion(f"region {name!r}: {error}")
        found = self._found[name]
        if isinstance(found, NoRegion):
            raise found
        return found

    def _whole(self) -> Found:
        whole = self.cells.dimension == self.cells.model.dimension
        return Found(whole, np.zeros(len(whole), dtype=bool), self.cells.missed, self.cells.computed & ~whole)

    def _make(self, spec: RegionSpec) -> Found:
        masks = {
            key: REGION_KINDS[key].select(self.cells, value, self.find)
            for key, value in spec.conditions.items()
        }
        named: Mask = np.logical_and.reduce(
            [m for key, m in masks.items() if key != "none_of"] or [self._every()]
        )
        missed: Mask = named & self.cells.missed
        named = named & self.cells.computed
        highest = self.cells.dimension == self.cells.dimension[named].max(initial=0)
        lower: Mask = named & ~highest
        named = named & highest
        inside = named & masks["none_of"] if "none_of" in masks else named
        left_out = named & ~inside
        for key in ("all_of", "any_of"):
            for name in spec.conditions.get(key, ()):
                part = self.find(name)
                left_out = left_out | part.left_out & ~inside
                missed = missed | part.not_computed
        n = int(inside.sum())
        if n < spec.cells_at_least:
            raise NoRegion(
                f"it holds {n} computed cell{'s' * (n != 1)} and must hold {spec.cells_at_least} ({region_words(spec)})"
            )
        return Found(inside, left_out, missed, lower)

    def _every(self) -> Mask:
        return np.ones(len(self.cells.dimension), dtype=bool)
