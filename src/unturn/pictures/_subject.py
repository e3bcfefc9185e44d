"""What a picture is of: a mesh on its stage, one number of it, and where its parts are."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.picture_keys import PictureRequest
from unturn.pictures._stage import Mask, Stage
from unturn.pictures._values import Values

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def _no_regions(name: str) -> Ints:
    raise UsageError(f"no region is called {name!r}: nothing is known of regions here.")


@dataclass(frozen=True, eq=False)
class Arrows:
    """Directions that are drawn: `vectors` `(n, k, 3)` of unit length, `values` `(n, k)` with sign, the unit shown.

    They live on cells or on points, whatever the number that is drawn lives on. `words` says what they are.
    """

    kind: Literal["principal", "rotation"]
    association: Literal["cell", "point"]
    vectors: Floats
    values: Floats
    scale: float
    short_unit: str
    words: str


@dataclass(frozen=True, eq=False)
class Subject:
    """What a picture is of.

    Attributes
    ----------
    stage
        The mesh and its shape.
    values
        The number that is drawn.
    association
        Whether it lives on cells or points.
    location
        The same in words, for the legend.
    numbers
        The solver's own numbers of cells or points, or None.
    weights
        `(n_cells,)` volumes for percentiles, or None.
    region
        Returns the cells of a region by its name.
    arrows
        Directions, where they are asked for.
    of_faces
        Whether the cells are faces of solids.
    """

    stage: Stage
    values: Values
    association: Literal["cell", "point"] = "cell"
    location: str = ""
    numbers: NDArray[Any] | None = None
    weights: Floats | None = None
    region: Callable[[str], Ints] = _no_regions
    arrows: Arrows | None = None
    of_faces: bool = False

    @property
    def noun(self) -> str:
        """What values belong to."""
        return "node" if self.association == "point" else "face" if self.of_faces else "cell"

    def shown(self, request: PictureRequest) -> Mask:
        """Return the cells that are drawn with their values.

        Raises
        ------
        UsageError
            No such region, or nothing is left.
        """
        keep = self.stage.there.copy()
        if request.only:
            keep &= self._union(request.only)
        keep &= ~self._union((*request.leave_out, *request.faint))
        if not keep.any() and self.stage.there.any():
            raise UsageError("the regions that are asked for leave nothing to draw.")
        return keep

    def faint(self, request: PictureRequest) -> Mask:
        """Return the cells that are drawn pale."""
        return self._union(request.faint) & self.stage.there

    def _union(self, names: tuple[str, ...]) -> Mask:
        inside = np.zeros(self.stage.result.n_cells, dtype=bool)
        for name in names:
            inside[self.region(name)] = True
        return inside

    def which(self, cells: Mask) -> Mask:
        """Return the values that belong to some cells: the cells themselves, or their nodes."""
        return self.on(self.association, cells)

    def on(self, association: Literal["cell", "point"], cells: Mask) -> Mask:
        """Return some cells, or their nodes."""
        return cells if association == "cell" else self.stage.nodes(cells)
