"""The parts of a picture while it is made."""

from __future__ import annotations

from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.pictures import _legend, _scene, _surface
from unturn.pictures._camera import Camera, directions, fit
from unturn.pictures._colours import Range
from unturn.pictures._label import add_label, words_of
from unturn.pictures._marks import Mark, Sight, extremes
from unturn.pictures._numbers import written
from unturn.pictures._page import Page, unit_of
from unturn.pictures._values import Shape, Values
from unturn.pictures._window import capture, make_window
from unturn.result import Association, Result

Floats = NDArray[np.float64]
_LABEL_ROOM = 90  # above the model, where a label finds a place if nowhere else
_EDGES_BELOW = 20_000  # cells up to which their edges are drawn


class Picture:
    """One picture: mesh, values and shape brought together, seen by a camera.

    Everything is drawn relative to the middle of the model, where numbers of single precision suffice.
    """

    def __init__(
        self,
        result: Result,
        values: Values,
        shape: Shape,
        association: Association,
        found: Range,
        size: tuple[int, int],
    ) -> None:
        self.result, self.values, self.shape, self.range = result, values, shape, found
        self.association, self.size = association, size
        used = np.unique(np.concatenate([b.connectivity.ravel() for b in result.blocks]))
        used = used[np.isfinite(shape.rest[used]).all(axis=1)]
        self.rest = shape.rest[used]
        self.shown = np.concatenate([self.rest, shape.points[used]])
        self.origin = (self.shown.min(axis=0) + self.shown.max(axis=0)) / 2
        self.reach = float(np.linalg.norm(np.ptp(self.shown, axis=0))) or 1.0
        nodal = values.numbers if association == "point" else None
        self.grid, self.keep = _surface.grid_of(result), self._kept()
        edges = result.n_cells <= _EDGES_BELOW
        self.skin = _surface.skin_of(self.grid, shape.points - self.origin, self.keep, nodal, edges)
        self.sight = Sight(self.skin.surface, self.reach)
        self.extremes = extremes(values.numbers)

    def _kept(self) -> NDArray[np.bool_]:
        """Return the cells that are drawn: all but those that do not count, or that have no place."""
        keep = np.ones(self.result.n_cells, dtype=bool)
        for cells in self.result.left_out.values():
            keep[cells] = False
        for block in self.result.blocks:
            placed = np.isfinite(self.shape.rest[block.connectivity]).all(axis=(1, 2))
            keep[block.index[~placed]] = False
        return keep

    @cached_property
    def camera(self) -> Camera:
        """The camera that shows most, and the extreme if any does."""
        candidates = directions(np.ptp(self.rest, axis=0))
        chosen = candidates[0]
        if self.extremes:
            _, position = self.extremes[0]
            chosen = next((c for c in candidates if self._seen(position, c[0]) is not None), chosen)
        u, (width, height) = unit_of(self.size), self.size
        right, top = width - (_legend.LEGEND_WIDTH + 30) * u, height - (_legend.HEAD + _LABEL_ROOM) * u
        return fit(self.shown, *chosen, self.size, (60 * u, right, (_legend.FOOT + 30) * u, top))

    @cached_property
    def marks(self) -> tuple[Mark, ...]:
        """The extremes as they are seen."""
        return tuple(self._mark(kind, position) for kind, position in self.extremes)

    def render(self, title: str, location: str, numbers: NDArray[Any] | None) -> NDArray[np.uint8]:
        """Return the picture, `(height, width, 3)` bytes, top row first."""
        window, back, front = make_window(self.size)
        for renderer in (back, front):
            _scene.look(renderer, self.camera, self.origin, self.reach)
        self._add_model(back, front)
        taken = self._taken(capture(window))
        page = Page(front, self.size)
        cells = self.association == "cell"
        _legend.head(page, title or self._name(), self._made_from())
        where = location or ("at element centroids" if cells else "at the nodes")
        _legend.colour_bar(page, self.values, self.range, where, "cell" if cells else "node")
        _legend.foot(page, self.camera, self._about_shape())
        for mark in self.marks:
            add_label(page, mark, words_of(mark, self.values, "cell" if cells else "node", numbers), taken)
        picture = capture(window)
        window.Finalize()
        return picture

    def _add_model(self, back: Any, front: Any) -> None:
        u, direction = unit_of(self.size), np.array(self.camera.direction)
        if self.shape.factor:
            points = self.shape.rest - self.origin
            body = _surface.skin_of(self.grid, points, self.keep, None, False).body
            _scene.add_ghost(back, body, _surface.outline_of(body, direction, self.reach), 1.2 * u)
        cells = self.values.numbers if self.association == "cell" else None
        _scene.add_surface(front, self.skin.surface, cells, self.range)
        if self.skin.edges is not None:
            _scene.add_lines(front, self.skin.edges, 0.8 * u, 0.4)
        _scene.add_lines(front, _surface.outline_of(self.skin.body, direction, self.reach), 1.6 * u)

    def _taken(self, picture: NDArray[np.uint8]) -> NDArray[np.bool_]:
        """Return what labels should leave seen: the model, the rings, the margins."""
        u, (width, height) = unit_of(self.size), self.size
        ghost = round(_scene.GHOST_FACE[0] * 255) - 1
        taken = np.asarray((picture < ghost).any(axis=2))
        taken[: int(_legend.HEAD * u)] = True
        taken[:, : int(36 * u)] = True
        taken[int(height - _legend.FOOT * u) :] = True
        taken[:, int(width - _legend.LEGEND_WIDTH * u) :] = True
        for mark in self.marks:
            column, row = (round(x) for x in mark.pixel)
            reach = round(20 * u)
            taken[max(0, row - reach) : row + reach, max(0, column - reach) : column + reach] = True
        return taken

    def _place(self, position: int) -> Floats:
        """Return the middle of a cell, or a point, on the deformed shape."""
        if self.association == "point":
            return np.asarray(self.shape.points[position])
        block = next(b for b in self.result.blocks if (b.index == position).any())
        nodes = block.connectivity[np.flatnonzero(block.index == position)[0]]
        return np.asarray(self.shape.points[np.unique(nodes)].mean(axis=0))

    def _seen(self, position: int, direction: Floats) -> Floats | None:
        """Return the place of a cell or point that is seen from `direction`, or None when it is hidden."""
        place = self._place(position)
        if self.association == "point":
            return place if self.sight.point(place - self.origin, direction) else None
        hit = self.sight.cell(position, place - self.origin, direction)
        return None if hit is None else hit + self.origin

    def _mark(self, kind: str, position: int) -> Mark:
        place = self._place(position)
        seen = self._seen(position, np.array(self.camera.direction))
        column, row = self.camera.pixels(place if seen is None else seen)
        value, (x, y, z) = float(self.values.numbers[position]), place.tolist()
        return Mark(kind, position, value, (x, y, z), (float(column), float(row)), seen is not None)

    def _name(self) -> str:
        name = self.values.name.splitlines()[0]
        return name[:1].upper() + name[1:]

    def _made_from(self) -> str:
        parts = [Path(self.result.path).name] if self.result.path else []
        steps = self.result.steps
        if steps is not None:
            value = written(steps.values[steps.current], 4)
            parts.append(f"step {steps.current + 1} of {len(steps.values)} (at {value})")
        parts.append(f"{self.result.n_cells:,} cells".replace(",", " "))
        return "    ".join(parts)

    def _about_shape(self) -> str:
        factor = self.shape.factor
        if not factor:
            return "undeformed shape"
        if factor == 1.0:
            return "displacement drawn × 1, true to scale; pale behind: undeformed"
        how = "chosen to be seen" if self.shape.fitted else "as asked for"
        return f"displacement drawn × {written(factor)}, {how}; pale behind: undeformed"
