"""The extremes in the picture: which cell, whether it can be seen, and where its label fits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._surface import POSITION

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Mark:
    """An extreme that is marked in the picture.

    Parameters
    ----------
    kind
        ``largest`` or ``smallest``.
    position
        Zero-based file position of the cell or point.
    value
        In the unit of the array.
    point
        The place that is marked, on the deformed shape: the middle of the cell, or the point.
    pixel
        Column and row, from the top left corner, of the ring.
    visible
        Whether the place can be seen, or lies inside or behind the model.
    """

    kind: str
    position: int
    value: float
    point: tuple[float, float, float]
    pixel: tuple[float, float]
    visible: bool


def extremes(values: Floats) -> list[tuple[str, int]]:
    """Return kind and position of the extremes: the largest, and the smallest where it is negative."""
    if not np.isfinite(values).any():
        return []
    found = [("largest", int(np.nanargmax(np.where(np.isfinite(values), values, np.nan))))]
    low = int(np.nanargmin(np.where(np.isfinite(values), values, np.nan)))
    if values[low] < 0 and low != found[0][1]:
        found.append(("smallest", low))
    return found


class Sight:
    """Tells what of a surface can be seen from a direction."""

    def __init__(self, surface: Any, reach: float) -> None:
        from vtkmodules.util.numpy_support import vtk_to_numpy
        from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator

        self._surface = surface
        self._own = vtk_to_numpy(surface.GetCellData().GetArray(POSITION))
        self._reach = reach
        self._locator = vtkStaticCellLocator()
        self._locator.SetDataSet(surface)
        self._locator.BuildLocator()

    def cell(self, position: int, near: Floats, direction: Floats) -> Floats | None:
        """Return the seen place of a mesh cell that lies closest to `near` in the picture, or None."""
        pieces = np.flatnonzero(self._own == position)
        middles = np.array([self._middle(int(piece)) for piece in pieces]).reshape(-1, 3)
        away = middles - near
        away = away - np.outer(away @ direction, direction)
        order = np.argsort(np.linalg.norm(away, axis=1), kind="stable")
        for k in order[:200]:
            hit = self._first_hit(middles[k], direction)
            if hit >= 0 and self._own[hit] == position:
                return np.asarray(middles[k])
        return None

    def point(self, place: Floats, direction: Floats) -> bool:
        """Return whether nothing lies in front of a place on the surface."""
        return self._first_hit(place, direction, 1e-4 * self._reach) < 0

    def _middle(self, piece: int) -> Floats:
        points = self._surface.GetCell(piece).GetPoints()
        return np.mean([points.GetPoint(k) for k in range(points.GetNumberOfPoints())], axis=0)

    def _first_hit(self, place: Floats, direction: Floats, start: float | None = None) -> int:
        from vtkmodules.vtkCommonCore import mutable, reference
        from vtkmodules.vtkCommonDataModel import vtkGenericCell

        eye = place + direction * 2 * self._reach
        end = place - direction * 1e-6 * self._reach if start is None else place + direction * start
        t, sub, cell = mutable(0.0), mutable(0), reference(-1)
        hit, pcoords = [0.0] * 3, [0.0] * 3
        found = self._locator.IntersectWithLine(eye, end, 0.0, t, hit, pcoords, sub, cell, vtkGenericCell())
        return int(cell) if found else -1


def free_place(
    taken: NDArray[np.bool_], pixel: tuple[float, float], width: float, height: float, gap: float
) -> tuple[float, float]:
    """Return left and top of the label box closest to `pixel` that covers the fewest taken pixels.

    `taken` `(rows, columns)` marks what must not be covered; positions outside it are not used.
    """
    rows, columns = taken.shape
    total = np.zeros((rows + 1, columns + 1), dtype=np.int64)
    total[1:, 1:] = np.cumsum(np.cumsum(taken, axis=0), axis=1)
    best: tuple[float, float, float] = (np.inf, 0.0, 0.0)
    for distance in np.arange(gap, max(rows, columns), gap / 2):
        for angle in np.linspace(0, 2 * np.pi, 32, endpoint=False) + 0.6:
            x = pixel[0] + distance * np.cos(angle)
            y = pixel[1] - distance * np.sin(angle)
            left = x if np.cos(angle) >= 0 else x - width
            top = y - height / 2
            if left < 0 or top < 0 or left + width > columns or top + height > rows:
                continue
            a, b, c, d = int(top), int(np.ceil(top + height)), int(left), int(np.ceil(left + width))
            covered = total[b, d] - total[a, d] - total[b, c] + total[a, c]
            cost = float(covered) + 0.5 * distance
            if cost < best[0]:
                best = (cost, left, top)
        if best[0] < 0.5 * distance:
            break
    return best[1], best[2]
