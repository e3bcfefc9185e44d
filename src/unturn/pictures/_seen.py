"""Which cell is seen in each pixel, and where arrows are drawn because of that."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from unturn.pictures import _close, _scene
from unturn.pictures._arrows import Place
from unturn.pictures._page import unit_of
from unturn.pictures._scene import Box
from unturn.pictures._surface import POSITION
from unturn.pictures._window import capture, make_window

if TYPE_CHECKING:
    from unturn.pictures._picture import Picture

Ints = NDArray[np.int64]
SPACING = 52.0  # of the places where arrows are drawn, in units of the page


def arrow_places(picture: Picture) -> list[Place]:
    """Return where arrows are drawn: at seen cells, or at their nodes; the largest values find their places first."""
    arrows = picture.arrows
    assert arrows is not None
    size = np.nan_to_num(np.abs(arrows.values)).max(axis=1)
    if arrows.association == "point":
        of_cells = np.zeros(picture.stage.result.n_cells)
        for block in picture.stage.result.blocks:
            of_cells[block.index] = size[block.connectivity].max(axis=1)
        size = of_cells
    found = places(seen_cells(picture), picture.frame.box, SPACING * unit_of(picture.size), size)
    return found if arrows.association == "cell" else [_at_node(picture, place) for place in found]


def _at_node(picture: Picture, place: Place) -> Place:
    """Return the node nearest to a place in the cell that is seen there."""
    nodes = _close.nodes(picture.subject, place.position)
    seen = picture.camera.pixels(picture.shape.points[nodes])
    seen[:, 1] = picture.size[1] - seen[:, 1]
    k = int(np.argmin(np.linalg.norm(seen - place.at, axis=1)))
    return Place(seen[k], int(nodes[k]))


def seen_cells(picture: Picture) -> Ints:
    """Return `(height, width)` the cell that is seen in each pixel of a picture, -1 where there is none."""
    from vtkmodules.util.numpy_support import vtk_to_numpy

    window, _, front, _ = make_window(picture.size, ground=(0.0, 0.0, 0.0))
    _scene.look(front, picture.camera, picture.stage.origin, picture.reach, picture.frame.box)
    surface = picture.skin.surface
    cells = vtk_to_numpy(surface.GetCellData().GetArray(POSITION))
    _scene.add_coded(front, surface, code_colours(cells))
    pixels = capture(window, single=True)
    window.Finalize()
    return decoded(pixels, picture.stage.result.n_cells)


def decoded(pixels: NDArray[np.uint8], n_cells: int) -> Ints:
    """Return `(height, width)` the cells behind the pixels of a picture in `code_colours`; -1 where there is none."""
    code = pixels.astype(np.int64) @ np.array([65536, 256, 1]) - 1
    return np.where((code >= 0) & (code < n_cells), code, -1)


def code_colours(cells: Ints) -> NDArray[np.uint8]:
    """Return colours `(n, 3)` that tell cells apart; none is black."""
    code = cells + 1
    return np.stack([code >> 16 & 255, code >> 8 & 255, code & 255], axis=1).astype(np.uint8)


def places(seen: Ints, box: Box, spacing: float, size: NDArray[np.float64]) -> list[Place]:
    """Return the middles of seen cells, no two nearer to each other than `spacing`; large ones of `size` come first."""
    height = seen.shape[0]
    row, column = np.nonzero(seen >= 0)
    keep = (column >= box[0]) & (column < box[1]) & (row >= height - box[3]) & (row < height - box[2])
    row, column = row[keep], column[keep]
    cells, which, count = np.unique(seen[row, column], return_inverse=True, return_counts=True)
    middle = np.stack([np.bincount(which, column), np.bincount(which, row)], axis=1) / count[:, None]
    taken: dict[tuple[int, int], list[NDArray[np.float64]]] = {}
    found = []
    for k in np.argsort(-size[cells], kind="stable"):
        a, b = (int(x // spacing) for x in middle[k])
        near = [q for i in (a - 1, a, a + 1) for j in (b - 1, b, b + 1) for q in taken.get((i, j), ())]
        if any(np.hypot(*(q - middle[k])) < spacing for q in near):
            continue
        taken.setdefault((a, b), []).append(middle[k])
        found.append(Place(_on_itself(seen, int(cells[k]), middle[k]), int(cells[k])))
    return found


def _on_itself(seen: Ints, cell: int, middle: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the middle of what is seen of a cell, from the lower left corner; its nearest pixel where it lies outside."""
    column, row = middle
    if seen[int(row), int(column)] != cell:
        rows, columns = np.nonzero(seen == cell)
        k = int(np.argmin(np.hypot(columns - column, rows - row)))
        column, row = columns[k], rows[k]
    return np.array([column + 0.5, seen.shape[0] - row - 0.5])
