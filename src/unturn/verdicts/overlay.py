"""A result laid over its reference: values of the one at the places of the other."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.regions import Region
from unturn.result import Array
from unturn.verdicts.differences import Where
from unturn.verdicts.mesh_match import MeshMatch
from unturn.verdicts.mesh_view import MeshView
from unturn.verdicts.sampling import Sampled, sample


@dataclass(frozen=True, eq=False)
class Placed:
    """Values at the places of the reference, by how much the way there leaves them open, and places that are not there."""

    values: Array
    left_open: Any = 0.0
    outside: NDArray[np.bool_] | None = None


@dataclass(frozen=True, eq=False)
class Overlay:
    """A mesh on its reference.

    Parameters
    ----------
    mesh, base
        Of the result and of the reference.
    match
        Whether they are one mesh.
    """

    mesh: MeshView
    base: MeshView
    match: MeshMatch
    _searched: dict[str, Sampled] = field(default_factory=dict)

    def again(self, mesh: MeshView, base: MeshView) -> Overlay:
        """Return the overlay of other states on these meshes; nothing is searched again."""
        return Overlay(mesh, base, self.match, self._searched)

    @property
    def differ(self) -> bool:
        """Whether the meshes are different ones."""
        return self.match.kind == "different"

    def placed(self, where: Where, values: Array) -> Placed:
        """Return values `(n, components)` of the result at the points or cells of the reference."""
        if where == "field":
            return Placed(values)
        if self.differ:
            if where == "cell":
                return Placed(self.cells.of_cells(values), outside=self.cells.outside)
            return Placed(*self.points.of_points(values), self.points.outside)
        order = self.match.point_of if where == "point" else self.match.cell_of
        assert order is not None
        return Placed(values[order], outside=order < 0)

    def known(self, where: Where) -> NDArray[np.bool_] | None:
        """Return the places of the reference that another mesh could have: those of cells that have an element."""
        if where == "field" or not self.differ:
            return None
        known: NDArray[np.bool_] = (self.base.dimension if where == "cell" else self.base.point_dimension) > 0
        return known

    @property
    def cells(self) -> Sampled:
        """Where the middles of the reference's cells lie in the other mesh."""
        if "cells" not in self._searched:
            parts = [(theirs.cells, ours.cells) for theirs, ours in self._shared_parts]
            self._searched["cells"] = sample(self.mesh, self.base.centroid, self.base.dimension, parts)
        return self._searched["cells"]

    @property
    def points(self) -> Sampled:
        """Where the reference's points lie in the other mesh."""
        if "points" not in self._searched:
            parts = [(self.base.points_of(theirs.cells), ours.cells) for theirs, ours in self._shared_parts]
            self._searched["points"] = sample(self.mesh, self.base.points, self.base.point_dimension, parts)
        return self._searched["points"]

    @property
    def back(self) -> Sampled:
        """Where the middles of the result's cells lie in the reference."""
        if "back" not in self._searched:
            self._searched["back"] = sample(self.base, self.mesh.centroid, self.mesh.dimension, [])
        return self._searched["back"]

    @cached_property
    def _shared_parts(self) -> list[tuple[Region, Region]]:
        ours = {r.name: r for r in self.mesh.regions()}
        return [(r, ours[r.name]) for r in self.base.regions() if r.name in ours]
