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
SPACING = 60.0  # of the places where arrows are drawn, in units of the page


def arrow_places(picture: Picture) -> list[Place]:
    """Return where arrows are drawn: at seen cells, or at their nodes."""
    assert picture.arrows is not None
    found = places(seen_cells(picture), picture.frame.box, unit_of(picture.size))
    return found if picture.arrows.association == "cell" else [_at_node(picture, place) for place in found]


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


def places(seen: Ints, box: Box, unit: float) -> list[Place]:
    """Return where arrows are drawn: on a grid of pixels, each cell once, nearest to the middle of its places."""
    height = seen.shape[0]
    step = SPACING * unit
    columns = np.arange(box[0] + step / 2, box[1], step).astype(int)
    rows = np.arange(height - box[3] + step / 2, height - box[2], step).astype(int)
    if not len(columns) or not len(rows):
        return []
    row, column = (g.reshape(-1) for g in np.meshgrid(rows, columns, indexing="ij"))
    cell = seen[row, column]
    found = []
    for position in np.unique(cell[cell >= 0]):
        of = np.flatnonzero(cell == position)
        pixels = np.stack([column[of], height - row[of]], axis=1).astype(np.float64)
        nearest = np.argmin(np.linalg.norm(pixels - pixels.mean(axis=0), axis=1))
        found.append(Place(pixels[nearest], int(position)))
    return found
