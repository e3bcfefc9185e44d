"""The parts of a picture while it is made."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.picture_keys import PictureRequest
from unturn.pictures import _close, _legend, _scene, _words
from unturn.pictures._arrows import draw_arrows, longest
from unturn.pictures._camera import Camera, directions
from unturn.pictures._colours import Range
from unturn.pictures._label import add_label, words_of
from unturn.pictures._marks import Mark, Sight, extremes
from unturn.pictures._page import Page, unit_of
from unturn.pictures._seen import arrow_places
from unturn.pictures._subject import Arrows, Subject
from unturn.pictures._surface import VALUE, Skin
from unturn.pictures._view import Frame, camera_for, chosen_direction, facing, through
from unturn.pictures._window import capture, make_window

Floats = NDArray[np.float64]
_LABEL_ROOM = 90  # above the model, where a label finds a place if nowhere else
_EDGES_BELOW = 20_000  # cells up to which their edges are drawn


class Picture:
    """One picture: a subject as a request wants it seen, in the colours of a range."""

    def __init__(
        self, subject: Subject, request: PictureRequest, found: Range, camera: Camera | None = None
    ) -> None:
        self.subject, self.request, self.range, self._given = subject, request, found, camera
        self.stage, self.values = subject.stage, subject.values
        self.shape = self.stage.shape(request.factor)
        self.shown, self.faint = subject.shown(request), subject.faint(request)
        self.size = request.size
        drawn = self.stage.faces.nodes(self.shown | self.faint)
        self._rest = self.stage.rest[drawn]
        seen = [self.shape.points[drawn]]
        if request.undeformed and self.shape.factor:
            seen.append(self._rest)
        self.extent = np.concatenate(seen)
        around = np.concatenate([self.extent, self._rest]) - self.stage.origin
        self.reach = float(2 * np.linalg.norm(around, axis=1).max()) or 1.0
        self.focus = _close.find(subject, request, self.shape, self.shown)
        self.extremes = extremes(self._marked()) if request.extremes else []

    def _marked(self) -> Floats:
        """Return the values among which extremes are found, NaN elsewhere."""
        cells = (
            self.shown if self.focus is None or self.focus.cells is None else self.shown & self.focus.cells
        )
        return np.where(self.subject.which(cells), self.values.numbers, np.nan)

    @property
    def frame(self) -> Frame:
        """Where the model is drawn."""
        u, (width, height) = unit_of(self.size), self.size
        foot = _legend.foot_height(len(self.notes))
        box = (40.0, width / u - _legend.LEGEND_WIDTH, foot + 26, height / u - _legend.HEAD - 4)
        inner = (box[0] + 20, box[1] - 30, box[2] + 4, box[3] + 4 - _LABEL_ROOM)
        a, b, c, d = (round(x * u) for x in box)
        i, j, k, m = (round(x * u) for x in inner)
        return Frame(self.size, (a, b, c, d), (i, j, k, m))

    @cached_property
    def plane(self) -> tuple[Floats, Floats] | None:
        """Normal towards the eye and point of the cut."""
        cut = self.request.cut
        if cut is None:
            return None
        toward = self._axes[0] if self._given is None else np.array(self._given.direction)
        return facing(cut, toward), through(cut, self._rest)

    @cached_property
    def skin(self) -> Skin:
        """What is seen of the cells with values."""
        nodal = {VALUE: self.values.numbers} if self.subject.association == "point" else {}
        edges = self.request.edges
        if edges is None:
            edges = bool(self.shown.sum() <= _EDGES_BELOW)
        skin = self.stage.skin(self.shape, self.shown, nodal, edges, self.plane)
        if self.plane is not None and not skin.surface.GetNumberOfCells():
            raise UsageError(
                f"the cut {self.request.cut.text!r} takes everything away from this camera."  # type: ignore[union-attr]
            )
        return skin

    @cached_property
    def sight(self) -> Sight:
        """What can be seen from where."""
        return self.stage.sight(self.skin, self.reach)

    @cached_property
    def _axes(self) -> tuple[Floats, Floats]:
        """Direction and up: as asked for, else those that show most, and the extreme if any does."""
        extent = np.ptp(self._rest, axis=0)
        chosen = chosen_direction(self.request.camera, self.request.cut, extent)
        if chosen is not None:
            return chosen
        candidates = directions(extent)
        target = self.focus.position if self.focus is not None else None
        if target is None and self.extremes:
            target = self.extremes[0][1]
        if target is None:
            return candidates[0]
        return next((c for c in candidates if self._seen(target, c[0]) is not None), candidates[0])

    @cached_property
    def camera(self) -> Camera:
        """The camera."""
        if self._given is not None:
            return self._given
        wish, focus = self.request.camera, self.focus
        point = None if wish is None or wish.point is None else np.array(wish.point)
        width = None if wish is None else wish.width
        shown = self.extent
        if focus is not None:
            if focus.points is not None:
                shown = focus.points
            point, width = focus.point, focus.width
        return camera_for(self._axes, shown, self.frame, point, width)

    @cached_property
    def marks(self) -> tuple[Mark, ...]:
        """The extremes as they are seen."""
        return tuple(self._mark(kind, position) for kind, position in self.extremes)

    @cached_property
    def notes(self) -> list[str]:
        """What is said below the model, in lines."""
        return _words.notes(self)

    @property
    def arrows(self) -> Arrows | None:
        """Directions, if they are asked for."""
        return self.subject.arrows

    @cached_property
    def longest(self) -> float:
        """The value of the longest arrow: the largest of all that is drawn, from whatever side."""
        if self.arrows is None:
            return 0.0
        return longest(self.arrows, self.subject.on(self.arrows.association, self.shown))

    def render(self, title: str, made_from: str) -> NDArray[np.uint8]:
        """Return the picture, `(height, width, 3)` bytes, top row first."""
        window, back, front, flat = make_window(self.size)
        for renderer in (back, front):
            _scene.look(renderer, self.camera, self.stage.origin, self.reach, self.frame.box)
        self._add_model(back, front)
        taken = self._taken(capture(window))
        page = Page(flat, self.size)
        _legend.head(page, title, made_from)
        foot = _legend.foot_height(len(self.notes))
        _legend.colour_bar(page, self.values, self.range, self.subject.location, self.subject.noun, foot)
        _legend.foot(page, self.camera, self.notes)
        if self.arrows is not None:
            draw_arrows(page, self.camera, self.arrows, arrow_places(self), self.longest)
        if self.focus is not None:
            _legend.border(page, self.frame.box)
        labels = [
            (mark, words_of(mark, self.values, self.subject, self._hidden(mark))) for mark in self.marks
        ]
        _legend.aside(page, self.frame.box, [", ".join(w) for mark, w in labels if not self.inside(mark)])
        for mark, words in labels:
            if self.inside(mark):
                add_label(page, mark, words, taken, self.frame.box)
        picture = capture(window, over=flat)
        window.Finalize()
        return picture

    def _add_model(self, back: Any, front: Any) -> None:
        u, direction = unit_of(self.size), np.array(self.camera.direction)
        if self.shape.factor and self.request.undeformed:
            ghost = self.stage.skin(self.stage.shape(0.0), self.shown, {}, False)
            _scene.add_pale(back, ghost.body, self.stage.outline(ghost, direction, self.reach), 1.2 * u)
        if self.faint.any():
            faint = self.stage.skin(self.shape, self.faint, {}, False)
            outline = self.stage.outline(faint, direction, self.reach)
            _scene.add_pale(back, faint.body, outline, 1.2 * u, _scene.FAINT_FACE, _scene.FAINT_LINE)
        cells = self.values.numbers if self.subject.association == "cell" else None
        _scene.add_surface(front, self.skin.surface, cells, self.range)
        if self.skin.edges is not None:
            _scene.add_lines(front, self.skin.edges, 0.8 * u, 0.4)
        _scene.add_lines(front, self.stage.outline(self.skin, direction, self.reach), 1.6 * u)

    def _taken(self, picture: NDArray[np.uint8]) -> NDArray[np.bool_]:
        """Return what labels should leave seen: the model, the rings, the margins."""
        u, (_, height) = unit_of(self.size), self.size
        left, right, bottom, top = self.frame.box
        taken = np.ones(picture.shape[:2], dtype=bool)
        inside = (slice(height - top, height - bottom), slice(left, right))
        pale = round(_scene.FAINT_FACE[0] * 255) - 1
        taken[inside] = (picture[inside] < pale).any(axis=2)
        for mark in self.marks:
            column, row = (round(x) for x in mark.pixel)
            reach = round(20 * u)
            taken[max(0, row - reach) : row + reach, max(0, column - reach) : column + reach] = True
        return taken

    def inside(self, mark: Mark) -> bool:
        """Return whether a mark lies in the part of the picture where the model is drawn."""
        left, right, bottom, top = self.frame.box
        column, row = mark.pixel
        return left <= column <= right and bottom <= self.size[1] - row <= top

    def place(self, position: int) -> Floats:
        """Return the middle of a cell, or a point, on the deformed shape."""
        return _close.place(self.subject, self.shape, position)

    def _seen(self, position: int, direction: Floats) -> Floats | None:
        """Return the place of a cell or point that is seen from `direction`, or None when it is hidden."""
        origin, place = self.stage.origin, self.place(position)
        if self.subject.association == "point":
            return place if self.sight.point(place - origin, direction) else None
        hit = self.sight.cell(position, place - origin, direction)
        return None if hit is None else hit + origin

    def _hidden(self, mark: Mark) -> str:
        """Return why a mark is not seen, empty when it is."""
        if mark.visible:
            return ""
        if self.plane is not None:
            rest = _close.place(self.subject, self.stage.shape(0.0), mark.position)
            if (rest - self.plane[1]) @ self.plane[0] > 0:
                return "in the half that is cut away"
        return "not seen from this side"

    def _mark(self, kind: str, position: int) -> Mark:
        place = self.place(position)
        seen = self._seen(position, np.array(self.camera.direction))
        column, row = self.camera.pixels(place if seen is None else seen)
        value, (x, y, z) = float(self.values.numbers[position]), place.tolist()
        return Mark(kind, position, value, (x, y, z), (float(column), float(row)), seen is not None)
