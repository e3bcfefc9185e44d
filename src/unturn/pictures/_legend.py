"""The words of a picture: title, colour bar, what is outside the range, how the shape is drawn, scale and axes."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from unturn.pictures._camera import Camera
from unturn.pictures._colours import ABOVE, BELOW, INK, NO_VALUE, Range
from unturn.pictures._numbers import nice_step, ticks, written
from unturn.pictures._page import Page, unit_of
from unturn.pictures._values import Values

_SOFT = (0.32, 0.33, 0.37)
_RULE = (0.8, 0.8, 0.82)
LEGEND_WIDTH = 330
HEAD = 118
_FOOT = 112
_LINE = 22
_LEFT = 190  # where the words below the model start


def foot_height(n_lines: int) -> float:
    """Return the height of what is below the model, in units of the page."""
    return _FOOT + _LINE * (max(n_lines, 1) - 1)


def letters(size: tuple[int, int]) -> int:
    """Return how many letters a line below the model holds."""
    return round((size[0] / unit_of(size) - _LEFT - 40) / 9.0)


def head(page: Page, title: str, subtitle: str) -> None:
    """Write the title and what the picture was made from."""
    u, (width, height) = page.unit, page.size
    page.text(title, 40 * u, height - 58 * u, 27 * u, bold=True, room=width - 80 * u)
    page.text(subtitle, 40 * u, height - 92 * u, 17 * u, colour=_SOFT, room=width - 80 * u)
    page.line(np.array([[40 * u, height - 106 * u], [width - 40 * u, height - 106 * u]]), _RULE, u)


def colour_bar(page: Page, values: Values, found: Range, location: str, noun: str, bottom: float) -> None:
    """Draw the colour bar with name, unit and place, and what lies outside; `noun` is counted, `bottom` left free."""
    u, (width, height) = page.unit, page.size
    left, room = width - (LEGEND_WIDTH - 20) * u, (LEGEND_WIDTH - 60) * u
    name, *remarks = values.name.splitlines()
    y = height - 150 * u
    for line in page.wrapped(name, 20 * u, room, bold=True):
        page.text(line, left, y, 20 * u, bold=True, room=room)
        y -= 27 * u
    for line in (*remarks, values.unit, location, found.words):
        for part in page.wrapped(line, 16 * u, room):
            page.text(part, left, y, 16 * u, colour=_SOFT, room=room)
            y -= 22 * u
    y -= 8 * u
    if found.above:
        words = f"above {written(found.high * values.scale)}: {_counted(found.above, noun)}"
        y = _swatch(page, left, y, ABOVE, words, room) - 8 * u
    low = (bottom + 58 + 28 * ((found.below > 0) + (found.missing > 0))) * u
    if found.above + found.below + found.missing < found.count:
        _bar(page, values, found, (left, low, y))
        y = low - 24 * u
    if found.below:
        words = f"below {written(found.low * values.scale)}: {_counted(found.below, noun)}"
        y = _swatch(page, left, y, BELOW, words, room)
    if found.missing:
        _swatch(page, left, y, NO_VALUE, f"no value: {_counted(found.missing, noun)}", room)


def _counted(count: int, noun: str) -> str:
    return f"{count:,} {noun}{'s' * (count != 1)}".replace(",", " ")


def _swatch(
    page: Page, left: float, top: float, colour: tuple[float, float, float], words: str, room: float
) -> float:
    u = page.unit
    page.box(left, top - 18 * u, left + 34 * u, top, colour)
    page.text(words, left + 44 * u, top - 18 * u, 15 * u, room=room - 44 * u)
    return top - 28 * u


def _bar(page: Page, values: Values, found: Range, place: tuple[float, float, float]) -> None:
    u = page.unit
    left, low, high = place
    right = left + 34 * u
    colours = found.colours
    marks = ticks(found.low * values.scale, found.high * values.scale)
    if len(marks) == 1:
        page.areas(_strips(left, right, np.array([low, high])), colours[:1])
        page.text(written(marks[0]), right + 14 * u, (low + high) / 2 - 9 * u, 16 * u)
        return
    page.areas(_strips(left, right, np.linspace(low, high, len(colours) + 1)), colours)
    page.line(np.array([[left, low], [right, low], [right, high], [left, high], [left, low]]), INK, u)
    for mark in marks:
        y = low + (mark - marks[0]) / (marks[-1] - marks[0]) * (high - low)
        page.line(np.array([[right, y], [right + 8 * u, y]]), INK, u)
        page.text(written(mark), right + 14 * u, y - 10 * u, 16 * u)


def _strips(left: float, right: float, levels: np.ndarray) -> np.ndarray:
    low, high = levels[:-1], levels[1:]
    x = np.full_like(low, left), np.full_like(low, right)
    corners = [(x[0], low), (x[1], low), (x[1], high), (x[0], high)]
    return np.stack([np.stack(c, axis=1) for c in corners], axis=1)


def border(page: Page, box: tuple[int, int, int, int]) -> None:
    """Draw the border of a view that does not show the whole model."""
    left, right, low, high = box
    page.line(
        np.array([[left, low], [right, low], [right, high], [left, high], [left, low]]), _RULE, page.unit
    )


def aside(page: Page, box: tuple[int, int, int, int], lines: Sequence[str]) -> None:
    """Say in the upper left corner of the view which extremes lie outside of it."""
    u, (left, _, _, high) = page.unit, box
    for k, words in enumerate(f"outside this view: {line}" for line in lines):
        base = high - (30 + 28 * k) * u
        page.box(
            left + 8 * u,
            base - 7 * u,
            left + 22 * u + page.width(words, 15 * u),
            base + 20 * u,
            (1, 1, 1),
            0.85,
        )
        page.text(words, left + 15 * u, base, 15 * u)


def foot(page: Page, camera: Camera, lines: Sequence[str]) -> None:
    """Draw axes, a scale bar, and what is said below the model."""
    u, (width, _) = page.unit, page.size
    raised = (foot_height(len(lines)) - _FOOT) * u
    _axes(page, camera, (92 * u, 66 * u + raised / 2))
    left = _LEFT * u
    length = nice_step(200 * u * camera.pixel, 1) if camera.pixel > 0 else 0.0
    if length > 200 * u * camera.pixel * 1.6:
        length /= 2
    across = length / camera.pixel
    base = 70 * u + raised
    page.line(
        np.array([[left, base + 6 * u], [left, base], [left + across, base], [left + across, base + 6 * u]]),
        INK,
        2 * u,
    )
    page.text(f"{written(length)} (length unit of the file)", left, base - 27 * u, 15 * u, colour=_SOFT)
    for k, words in enumerate(reversed(lines)):
        page.text(words, left, (20 + _LINE * k) * u, 16 * u, room=width - left - 40 * u)


def _axes(page: Page, camera: Camera, centre: tuple[float, float]) -> None:
    u = page.unit
    start = np.array(centre)
    for name, axis in zip("xyz", np.eye(3)):
        along = np.array([axis @ camera.right, axis @ np.array(camera.up)])
        seen = float(np.linalg.norm(along))
        if seen < 0.15:
            continue
        end = start + along * 46 * u
        page.line(np.array([start, end]), INK, 2 * u)
        tip, side = along / seen, np.array([-along[1], along[0]]) / seen
        back = end - tip * 9 * u
        page.areas(
            np.array([[end, back + side * 4 * u, back - side * 4 * u]]), np.array([[31, 33, 41]], np.uint8)
        )
        label = end + tip * 13 * u
        page.text(name, label[0], label[1] - 9 * u, 16 * u, anchor="centre")
