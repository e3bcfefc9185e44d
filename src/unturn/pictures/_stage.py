"""A mesh with its displacement, and what was found of its shape for the pictures before."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._cut import DISTANCE, cut, section_of
from unturn.pictures._marks import Sight
from unturn.pictures._surface import Faces, Skin, outline_of
from unturn.pictures._values import Shape, shape_of
from unturn.result import Result, used_points

Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]


class Stage:
    """A mesh that pictures are made of.

    Parameters
    ----------
    result
        The mesh.
    displacement
        `(n_points, 3)`, or None.
    points
        `(n_points, 3)` undeformed, where they are not those of the result.

    Raises
    ------
    UsageError, InputError
        See `shape_of`.
    """

    def __init__(self, result: Result, displacement: Floats | None, points: Floats | None = None) -> None:
        self.result, self._displacement = result, displacement
        self.rest = np.asarray(result.points if points is None else points, dtype=np.float64)
        self.faces = Faces(result)
        self._shapes: dict[float | None, Shape] = {}
        self._skins: dict[tuple[object, ...], tuple[Skin, dict[str, Floats]]] = {}
        self._sights: dict[int, Sight] = {}
        self._outlines: dict[tuple[int, bytes], Any] = {}
        self._placed: Mask = np.asarray(np.isfinite(self.rest).all(axis=1))
        self.there = self._cells_there()
        used: Mask = used_points(result.blocks, result.n_points) & self._placed
        middle = self.rest[used] if used.any() else np.zeros((1, 3))
        self.origin = (middle.min(axis=0) + middle.max(axis=0)) / 2
        """The middle of the model: everything is drawn relative to it, where single precision suffices."""

    def _cells_there(self) -> Mask:
        """Return the cells that can be drawn: all but those that do not count, or that have no place."""
        there = np.ones(self.result.n_cells, dtype=bool)
        for cells in self.result.left_out.values():
            there[cells] = False
        if not self._placed.all():
            for block in self.result.blocks:
                there[block.index[~self._placed[block.connectivity].all(axis=1)]] = False
        return there

    def shape(self, factor: float | None) -> Shape:
        """Return the deformed points, the displacement drawn `factor` times; None: fitted."""
        if factor not in self._shapes:
            self._shapes[factor] = shape_of(self.result, self.rest, self._displacement, factor)
        return self._shapes[factor]

    def nodes(self, cells: Mask) -> Mask:
        """Return which nodes belong to some cells, `(n_points,)`."""
        found = np.zeros(self.result.n_points, dtype=bool)
        for block in self.result.blocks:
            inside = cells[block.index]
            found[block.connectivity if inside.all() else block.connectivity[inside]] = True
        return found

    def skin(
        self,
        shape: Shape,
        keep: Mask,
        nodal: Mapping[str, Floats],
        edges: bool,
        plane: tuple[Floats, Floats] | None = None,
    ) -> Skin:
        """Return what is seen of some cells.

        Parameters
        ----------
        shape
            Where the points are.
        keep
            Which cells.
        nodal
            Values at the nodes that the surface carries.
        edges
            Whether the edges of cells are found.
        plane
            Normal and point of a cut in undeformed coordinates; what the normal points to is taken away.
        """
        key = (
            shape.factor, np.packbits(keep).tobytes(), tuple(id(v) for v in nodal.values()), edges,
            None if plane is None else np.concatenate(plane).tobytes(),
        )  # fmt: skip
        if key not in self._skins:
            points, held = shape.points - self.origin, dict(nodal)
            if plane is not None:
                held[DISTANCE] = (self.rest - plane[1]) @ plane[0]
            skin = self.faces.skin(points, keep, held, edges)
            if plane is not None:
                skin = cut(skin, section_of(self.result, keep, points, held))
            self._skins[key] = skin, held  # the values are kept, for the key holds their identity
        return self._skins[key][0]

    def sight(self, skin: Skin, reach: float) -> Sight:
        """Return what can be seen of a skin from where; nothing is farther from the middle than `reach`."""
        if id(skin) not in self._sights:
            self._sights[id(skin)] = Sight(skin.surface, reach)
        return self._sights[id(skin)]

    def outline(self, skin: Skin, direction: Floats, reach: float) -> Any:
        """Return the outline of a skin seen from `direction`; nothing is farther from the middle than `reach`."""
        key = (id(skin), direction.tobytes())
        if key not in self._outlines:
            self._outlines[key] = outline_of(skin.body, direction, reach)
        return self._outlines[key]
