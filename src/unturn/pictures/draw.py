"""One picture of one array on the deformed shape, drawn without a screen."""

from __future__ import annotations

from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.io._atomic import replacing
from unturn.pictures import _legend, _marks, _scene, _surface
from unturn.pictures._camera import Camera, directions, fit
from unturn.pictures._colours import INK, Range, choose_range
from unturn.pictures._marks import Mark
from unturn.pictures._numbers import written
from unturn.pictures._page import Page
from unturn.pictures._values import Shape, Values, shape_of, values_of
from unturn.pictures._window import capture, check_graphics, make_window, pixels, write_png
from unturn.result import Association, Result

Floats = NDArray[np.float64]
_EDGES_BELOW = 20_000
_SMALLEST, _LARGEST = 320, 8_000


@dataclass(frozen=True)
class Drawing:
    """What was drawn.

    Attributes
    ----------
    path
        The picture.
    factor
        Displacements are drawn this many times as large; 0 without a displacement.
    colour_range
        Values at the two ends of the colour bar, in the unit of the array.
    above, below, missing
        Number of cells (or points) above and below the range, and without a finite value.
    camera
        Where the model is seen from.
    marks
        The extremes that are marked.
    """

    path: str
    factor: float
    colour_range: tuple[float, float]
    above: int
    below: int
    missing: int
    camera: Camera
    marks: tuple[Mark, ...]

    @property
    def out_of_range(self) -> int:
        """Number of cells (or points) outside the colour range."""
        return self.above + self.below


def draw(
    result: Result,
    array: str,
    path: str | PathLike[str],
    *,
    displacement: Floats | None = None,
    association: Association = "cell",
    component: int | str | None = None,
    factor: float | None = None,
    title: str = "",
    legend: str = "",
    unit: str = "",
    location: str = "",
    numbers: NDArray[Any] | None = None,
    colour_range: tuple[float, float] | None = None,
    camera: Camera | None = None,
    size: tuple[int, int] = (1600, 1000),
) -> Drawing:
    """Return what was drawn into a PNG file: one array on the deformed shape.

    Parameters
    ----------
    result
        The mesh with the array.
    array, association, component
        Which numbers: a cell or point array, and which of its components (name or zero-based position).
    path
        The picture; written whole or not at all.
    displacement
        `(n_points, 3)`, length unit of the file; None draws the undeformed shape.
    factor
        How many times the displacement is drawn; None fits it so that the largest one is 5 % of the model, or
        takes 1 where it is larger than that already.
    title, legend
        Words above the picture and above the colour bar; made from the array's name when empty.
    unit
        ``strain`` (shown as microstrain), ``radian``, ``1``, or the name of any unit, shown as it is.
        Empty: looked up by the array's name.
    location
        Where the values live, for the legend; empty for ``at element centroids`` or ``at the nodes``.
    numbers
        `(n_cells,)` or `(n_points,)`: the solver's own numbers, told beside ours.
    colour_range
        Values at the ends of the colour bar, in the unit of the array; chosen by `choose_range` when None.
    camera
        The camera of an earlier `Drawing` of this size, to compare pictures.
    size
        Width and height in pixels.

    Raises
    ------
    UsageError
        Not a PNG name, no such array, a size that makes no picture, or a place that cannot be written to.
    MissingExtraError
        No graphics library; the message names the package.

    Notes
    -----
    Colours are not shaded: the colour of a pixel is the colour of its value in the bar.
    """
    target = Path(path)
    _check(target, size)
    values = values_of(result, array, association, component, legend, unit)
    shape = shape_of(result, displacement, factor)
    check_graphics()
    picture = _Picture(result, values, shape, association, choose_range(values.numbers, colour_range), size)
    with replacing(target) as work:
        image = picture.draw(camera, title, location, numbers)
        write_png(image, work)
    found = picture.range
    return Drawing(
        str(path),
        shape.factor,
        (found.low, found.high),
        found.above,
        found.below,
        found.missing,
        picture.camera,
        tuple(picture.marks),
    )


def _check(target: Path, size: tuple[int, int]) -> None:
    if target.suffix.lower() != ".png":
        raise UsageError(f"{target}: pictures are written as PNG; give a name that ends in .png.")
    if not all(_SMALLEST <= side <= _LARGEST for side in size):
        raise UsageError(f"a picture of {size[0]} x {size[1]} pixels; each side must be {_SMALLEST} to {_LARGEST}.")


class _Picture:
    """The parts of a picture while it is made."""

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
        self.association = association
        self.size = size
        used = np.unique(np.concatenate([b.connectivity.ravel() for b in result.blocks]))
        used = used[np.isfinite(shape.rest[used]).all(axis=1)]
        self.seen = np.concatenate([shape.rest[used], shape.points[used]])
        self.origin = (self.seen.min(axis=0) + self.seen.max(axis=0)) / 2
        self.reach = float(np.linalg.norm(np.ptp(self.seen, axis=0))) or 1.0
        nodal = values.numbers if association == "point" else None
        grid = _surface.grid_of(result)
        keep = self._kept()
        edges = result.n_cells <= _EDGES_BELOW
        self.skin = _surface.skin_of(grid, shape.points - self.origin, keep, nodal, edges)
        self.rest = None
        if shape.factor:
            self.rest = _surface.skin_of(grid, shape.rest - self.origin, keep, None, False)
        self.marks: list[Mark] = []
        self.camera: Camera

    def _kept(self) -> NDArray[np.bool_]:
        keep = np.ones(self.result.n_cells, dtype=bool)
        for cells in self.result.left_out.values():
            keep[cells] = False
        for block in self.result.blocks:
            bad = ~np.isfinite(self.shape.rest[block.connectivity]).all(axis=(1, 2))
            keep[block.index[bad]] = False
        return keep

    def draw(self, camera: Camera | None, title: str, location: str, numbers: NDArray[Any] | None) -> Any:
        sight = _marks.Sight(self.skin.surface, self.reach)
        self.camera = camera or self._choose_camera(sight)
        self.marks = [self._mark(kind, at, sight) for kind, at in _marks.extremes(self.values.numbers)]
        window, renderer = make_window(self.size)
        _scene.look(renderer, self.camera, self.origin, self.reach)
        self._model(renderer)
        page = Page(window, renderer, self.size)
        what = "cells" if self.association == "cell" else "nodes"
        where = location or ("at element centroids" if self.association == "cell" else "at the nodes")
        _legend.head(page, title or f"{self.values.name}", self._subtitle())
        _legend.colour_bar(page, self.values, self.range, where, what)
        _legend.foot(page, self.camera, self._about_shape())
        taken = (pixels(capture(window)) < 250).any(axis=2)
        taken[:, int(self.size[0] - _legend.LEGEND_WIDTH * page.unit) :] = True
        for mark in self.marks:
            self._label(page, mark, taken, numbers)
        image = capture(window)
        window.Finalize()
        return image

    def _model(self, renderer: Any) -> None:
        u = min(self.size[0] / 1600, self.size[1] / 1000)
        direction = np.array(self.camera.direction)
        if self.rest is not None:
            _scene.add_ghost(renderer, _surface.outline_of(self.rest.body, direction, self.reach), 1.4 * u)
        cells = self.values.numbers if self.association == "cell" else None
        _scene.add_surface(renderer, self.skin.surface, cells, self.range)
        if self.skin.edges is not None:
            _scene.add_edges(renderer, self.skin.edges, 1.0 * u, False)
        _scene.add_edges(renderer, _surface.outline_of(self.skin.body, direction, self.reach), 1.6 * u, True)

    def _choose_camera(self, sight: _marks.Sight) -> Camera:
        rest = self.seen[: len(self.seen) // 2]
        extent = np.ptp(rest, axis=0)
        candidates = directions(extent, False)
        found = _marks.extremes(self.values.numbers)
        chosen = candidates[0]
        if found:
            near = self._place(found[0][1])
            chosen = next((c for c in candidates if self._seen(sight, found[0][1], near, c[0]) is not None), chosen)
        u = min(self.size[0] / 1600, self.size[1] / 1000)
        width, height = self.size
        box = (60 * u, width - (_legend.LEGEND_WIDTH + 30) * u, (_legend.FOOT + 30) * u, height - (_legend.HEAD + 30) * u)
        return fit(self.seen, *chosen, self.size, box)

    def _place(self, position: int) -> Floats:
        if self.association == "point":
            return self.shape.points[position]
        for block in self.result.blocks:
            row = np.flatnonzero(block.index == position)
            if len(row):
                return np.asarray(self.shape.points[np.unique(block.connectivity[row[0]])].mean(axis=0))
        raise AssertionError(position)

    def _seen(self, sight: _marks.Sight, position: int, place: Floats, direction: Floats) -> Floats | None:
        local = place - self.origin
        if self.association == "point":
            return place if sight.point(local, direction) else None
        hit = sight.cell(position, local, direction)
        return None if hit is None else hit + self.origin

    def _mark(self, kind: str, position: int, sight: _marks.Sight) -> Mark:
        place = self._place(position)
        seen = self._seen(sight, position, place, np.array(self.camera.direction))
        shown = place if seen is None else seen
        column, row = self.camera.pixels(shown[None])[0]
        return Mark(
            kind,
            position,
            float(self.values.numbers[position]),
            (float(place[0]), float(place[1]), float(place[2])),
            (float(column), float(row)),
            seen is not None,
        )

    def _label(self, page: Page, mark: Mark, taken: NDArray[np.bool_], numbers: NDArray[Any] | None) -> None:
        u, height = page.unit, self.size[1]
        noun = "cell" if self.association == "cell" else "node"
        own = f"{noun} {mark.position} (counted from 0)"
        lines = [f"{mark.kind} {written(mark.value * self.values.scale, 4)} {self.values.short_unit}".rstrip()]
        if numbers is not None:
            lines.append(f"{'element' if noun == 'cell' else 'node'} {numbers[mark.position]} in the file")
        lines.append(own)
        if not mark.visible:
            lines.append("hidden from this side")
        sizes = [17 * u] + [14 * u] * (len(lines) - 1)
        wide = max(page.width(t, s, k == 0) for k, (t, s) in enumerate(zip(lines, sizes))) + 16 * u
        tall = (24 + 20 * (len(lines) - 1) + 12) * u
        left, top = _marks.free_place(taken, mark.pixel, wide, tall, 50 * u)
        taken[int(top) : int(top + tall) + 1, int(left) : int(left + wide) + 1] = True
        at = np.array([mark.pixel[0], height - mark.pixel[1]])
        corner = np.array([np.clip(at[0], left, left + wide), np.clip(at[1], height - top - tall, height - top)])
        way = (corner - at) / (np.linalg.norm(corner - at) or 1.0)
        page.line(np.array([at + way * 9 * u, corner]), (1.0, 1.0, 1.0), 4 * u)
        page.line(np.array([at + way * 9 * u, corner]), INK, 1.5 * u)
        page.ring(at, 9 * u, (1.0, 1.0, 1.0), 5 * u)
        page.ring(at, 9 * u, INK, 2.2 * u)
        page.box(left, height - top - tall, left + wide, height - top, (1.0, 1.0, 1.0))
        edge = np.array([[left, height - top - tall], [left + wide, height - top - tall], [left + wide, height - top], [left, height - top]])
        page.line(np.vstack([edge, edge[:1]]), INK, 1.2 * u)
        y = height - top - 28 * u
        for k, (words, letter) in enumerate(zip(lines, sizes)):
            page.text(words, left + 8 * u, y, letter, bold=k == 0)
            y -= 20 * u if k else 22 * u

    def _subtitle(self) -> str:
        parts = [Path(self.result.path).name] if self.result.path else []
        steps = self.result.steps
        if steps is not None:
            parts.append(f"step {steps.current + 1} of {len(steps.values)} (t = {written(steps.values[steps.current], 4)})")
        parts.append(f"{self.result.n_cells} cells")
        return "    ".join(parts)

    def _about_shape(self) -> str:
        shape = self.shape
        if not shape.factor:
            return "undeformed shape"
        times = written(shape.factor, 3)
        if shape.factor == 1.0:
            return "displacement drawn × 1 (true to scale); grey lines: undeformed"
        how = "fitted to be seen" if shape.fitted else "as asked for"
        return f"displacement drawn × {times} ({how}); grey lines: undeformed"
