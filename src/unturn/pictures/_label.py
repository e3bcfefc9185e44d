"""The ring around an extreme and the label that says what it is."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._colours import INK
from unturn.pictures._marks import Mark
from unturn.pictures._numbers import written
from unturn.pictures._page import Page
from unturn.pictures._scene import Box
from unturn.pictures._subject import Subject
from unturn.pictures._values import Values

RING = 9.0
_HEIGHTS = (17.0, 14.0)
_WHITE = (1.0, 1.0, 1.0)


def words_of(mark: Mark, values: Values, subject: Subject, hidden: str) -> list[str]:
    """Return the lines of a label; `hidden` says why the place is not seen."""
    lines = [f"{mark.kind} {written(mark.value * values.scale, 4)} {values.short_unit}".rstrip()]
    if subject.numbers is not None:
        of = "element" if subject.association == "cell" else "node"
        lines.append(f"{of} {subject.numbers[mark.position]} in the file")
    lines.append(f"{subject.noun} {mark.position}, counted from 0")
    if hidden:
        lines.append(hidden)
    return lines


def add_label(page: Page, mark: Mark, lines: list[str], taken: NDArray[np.bool_], box: Box) -> None:
    """Draw ring, leader and label where the label covers least of `box`; its place becomes taken."""
    u, height = page.unit, page.size[1]
    letters = [_HEIGHTS[min(k, 1)] * u for k in range(len(lines))]
    wide = max(page.width(t, s, k == 0) for k, (t, s) in enumerate(zip(lines, letters))) + 20 * u
    tall = (34 + 20 * (len(lines) - 1)) * u
    corner = (box[0], height - box[3])
    inside = taken[corner[1] : height - box[2], corner[0] : box[1]]
    left, top = free_place(
        inside, (mark.pixel[0] - corner[0], mark.pixel[1] - corner[1]), (wide, tall), 50 * u
    )
    left, top = left + corner[0], top + corner[1]
    rim = 8 * u
    taken[
        int(max(0, top - rim)) : int(top + tall + rim), int(max(0, left - rim)) : int(left + wide + rim)
    ] = True
    right, low, high = left + wide, height - top - tall, height - top
    at = np.array([mark.pixel[0], height - mark.pixel[1]])
    near = np.array([np.clip(at[0], left, right), np.clip(at[1], low, high)])
    away = near - at
    start = at + away / (np.linalg.norm(away) or 1.0) * RING * u
    for colour, width in ((_WHITE, 4.5), (INK, 1.5)):
        page.line(np.array([start, near]), colour, width * u)
    for colour, width in ((_WHITE, 5.5), (INK, 2.2)):
        page.ring(at, RING * u, colour, width * u)
    page.box(left, low, right, high, _WHITE)
    page.line(np.array([[left, low], [right, low], [right, high], [left, high], [left, low]]), INK, 1.2 * u)
    base = high - 28 * u
    for k, (words, letter) in enumerate(zip(lines, letters)):
        page.text(words, left + 10 * u, base, letter, bold=k == 0)
        base -= (20 if k else 21) * u


def free_place(
    taken: NDArray[np.bool_], pixel: tuple[float, float], size: tuple[float, float], gap: float
) -> tuple[float, float]:
    """Return left and top of the box nearest to `pixel` that covers the fewest taken pixels.

    `taken` `(rows, columns)` marks what should stay seen; a box never leaves it.
    """
    rows, columns = taken.shape
    width, height = size
    total = np.zeros((rows + 1, columns + 1), dtype=np.int64)
    total[1:, 1:] = np.cumsum(np.cumsum(taken, axis=0), axis=1)
    steps = np.arange(gap, max(rows, columns), gap / 2)
    distance = np.repeat(steps, 32)
    angle = np.tile(np.linspace(0, 2 * np.pi, 32, endpoint=False) + 0.6, len(steps))
    left = pixel[0] + distance * np.cos(angle) - np.where(np.cos(angle) < 0, width, 0.0)
    top = pixel[1] - distance * np.sin(angle) - height / 2
    fits = (left >= 0) & (top >= 0) & (left + width + 1 < columns) & (top + height + 1 < rows)
    if not fits.any():
        return max(0.0, min(pixel[0], columns - width - 1)), max(0.0, min(pixel[1], rows - height - 1))
    distance, left, top = distance[fits], left[fits], top[fits]
    a, b = top.astype(int), np.ceil(top + height).astype(int)
    c, d = left.astype(int), np.ceil(left + width).astype(int)
    covered = total[b, d] - total[a, d] - total[b, c] + total[a, c]
    best = int(np.argmin(covered + 0.5 * distance))
    return float(left[best]), float(top[best])
