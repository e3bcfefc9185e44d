"""What a close-up looks at."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.picture_keys import PictureRequest
from unturn.pictures._marks import extremes
from unturn.pictures._subject import Subject
from unturn.pictures._values import Shape
from unturn.pictures._view import CLOSE

Floats = NDArray[np.float64]
_CELLS = 5.0  # a close-up spans this many times the cell that it looks at


@dataclass(frozen=True, eq=False)
class Focus:
    """What is looked at closely.

    Attributes
    ----------
    point, width
        The middle and the length across, on the deformed shape; None: as `points` need.
    points
        What must fit.
    position
        A cell or point that should be seen.
    cells
        The cells among which extremes are marked, or None for all that are shown.
    """

    point: Floats | None
    width: float | None
    points: Floats | None = None
    position: int | None = None
    cells: NDArray[np.bool_] | None = None


def find(subject: Subject, request: PictureRequest, shape: Shape, shown: NDArray[np.bool_]) -> Focus | None:
    """Return what a picture looks at closely, or None.

    Raises
    ------
    UsageError
        No such region, element or extreme.
    """
    wish = request.close_up
    if wish is None:
        return None
    size = float(np.linalg.norm(np.ptp(shape.points[subject.stage.nodes(shown)], axis=0)))
    width = size / CLOSE if wish.width is None else wish.width
    if wish.what == "point":
        assert wish.point is not None
        return Focus(np.array(wish.point), width)
    if wish.what == "region":
        cells = np.zeros(len(shown), dtype=bool)
        cells[subject.region(wish.name)] = True
        if not (cells & shown).any():
            raise UsageError(f"the close-up is of region {wish.name!r}, of which nothing is drawn.")
        return Focus(None, wish.width, shape.points[subject.stage.nodes(cells & shown)], cells=cells)
    if wish.what == "element":
        position, cell = _cell(subject, wish.name), True
    else:
        numbers = np.where(subject.which(shown), subject.values.numbers, np.nan)
        found = [position for kind, position in extremes(numbers, both=True) if kind == wish.what]
        if not found:
            raise UsageError("the close-up is of an extreme, and no cell that is drawn has a finite value.")
        position, cell = found[0], subject.association == "cell"
    if not cell:
        return Focus(place(subject, shape, position), width, position=position)
    corners = shape.points[nodes(subject, position)]
    if wish.width is None:
        width = max(width, _CELLS * float(np.ptp(corners, axis=0).max()))
    seen = position if subject.association == "cell" else None
    return Focus(corners.mean(axis=0), width, position=seen)


def _cell(subject: Subject, name: str) -> int:
    """Return the position of a cell by the number that the picture tells: the solver's, else ours."""
    try:
        number = int(name)
    except ValueError:
        raise UsageError(f"the close-up of element {name!r}: give its number.") from None
    numbers = subject.numbers if subject.association == "cell" else None
    n = subject.stage.result.n_cells
    if numbers is None:
        if not 0 <= number < n:
            raise UsageError(f"there is no cell {number}; cells are counted from 0 to {n - 1}.")
        return number
    found = np.flatnonzero(numbers == number)
    if not len(found):
        raise UsageError(f"no element has the number {number}; the numbers are those that the file holds.")
    return int(found[0])


def nodes(subject: Subject, cell: int) -> NDArray[np.int64]:
    """Return the nodes of a cell."""
    for block in subject.stage.result.blocks:
        there = np.flatnonzero(block.index == cell)
        if len(there):
            return np.unique(block.connectivity[there[0]])
    raise AssertionError(cell)  # every cell has a place


def place(subject: Subject, shape: Shape, position: int) -> Floats:
    """Return the middle of a cell, or a point, on the deformed shape."""
    if subject.association == "point":
        return np.asarray(shape.points[position])
    return np.asarray(shape.points[nodes(subject, position)].mean(axis=0))
