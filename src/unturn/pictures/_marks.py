"""The extremes in the picture: which cell, and whether it can be seen."""

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


def extremes(values: Floats, both: bool = False) -> list[tuple[str, int]]:
    """Return kind and position of the extremes: the largest if positive, the smallest if negative, or both."""
    finite = np.isfinite(values)
    if not finite.any():
        return []
    high = int(np.argmax(np.where(finite, values, -np.inf)))
    low = int(np.argmin(np.where(finite, values, np.inf)))
    found: list[tuple[str, int]] = []
    if values[high] == values[low] == 0.0 and not both:
        return found
    if both or values[high] > 0 or values[low] >= 0:
        found.append(("largest", high))
    if both or values[low] < 0:
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
        self._locator: Any = vtkStaticCellLocator()
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
            if hit < 0 or self._own[hit] == position:  # no ray hits a line or a vertex itself
                return np.asarray(middles[k])
        return None

    def point(self, place: Floats, direction: Floats) -> bool:
        """Return whether nothing lies in front of a place on the surface."""
        return self._first_hit(place, direction, 1e-4 * self._reach) < 0

    def _middle(self, piece: int) -> Floats:
        points = self._surface.GetCell(piece).GetPoints()
        return np.asarray(np.mean([points.GetPoint(k) for k in range(points.GetNumberOfPoints())], axis=0))

    def _first_hit(self, place: Floats, direction: Floats, start: float | None = None) -> int:
        from vtkmodules.vtkCommonCore import reference
        from vtkmodules.vtkCommonDataModel import vtkGenericCell

        eye = place + direction * 2 * self._reach
        end = place - direction * 1e-6 * self._reach if start is None else place + direction * start
        t, sub, cell = reference(0.0), reference(0), reference(-1)
        hit, pcoords = [0.0] * 3, [0.0] * 3
        found = self._locator.IntersectWithLine(eye, end, 0.0, t, hit, pcoords, sub, cell, vtkGenericCell())
        return int(cell) if found else -1
