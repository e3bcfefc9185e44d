"""Where the model is seen from: parallel projection, so that lengths can be read off the picture."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
_FLAT = 1e-6  # share of the largest extent below which a model is flat in that direction


@dataclass(frozen=True)
class Camera:
    """A parallel view.

    Parameters
    ----------
    direction
        Unit vector from the model towards the eye.
    up
        Unit vector that points up in the picture, at right angles to `direction`.
    focus
        Point that is seen in the middle of the picture.
    pixel
        Length that one pixel spans, in the length unit of the file.
    size
        Width and height in pixels.
    """

    direction: tuple[float, float, float]
    up: tuple[float, float, float]
    focus: tuple[float, float, float]
    pixel: float
    size: tuple[int, int]

    @property
    def right(self) -> Floats:
        """Unit vector that points right in the picture."""
        return np.asarray(np.cross(self.up, self.direction))

    def pixels(self, points: Floats) -> Floats:
        """Return `(n, 2)` column and row, from the top left corner, of where points `(n, 3)` are seen."""
        away = (np.asarray(points, dtype=np.float64) - np.array(self.focus)) / self.pixel
        column = self.size[0] / 2 + away @ self.right
        row = self.size[1] / 2 - away @ np.array(self.up)
        return np.stack([column, row], axis=-1)


def directions(extent: Floats) -> list[tuple[Floats, Floats]]:
    """Return `(direction, up)` pairs, the best first, from which a model of this extent shows most.

    A flat mesh is seen straight on; anything else aslant, more onto its largest side.
    """
    largest = float(extent.max()) or 1.0
    thin = int(np.argmin(extent))
    if extent[thin] <= _FLAT * largest:
        straight = np.zeros(3)
        straight[thin] = -1.0 if thin == 1 else 1.0
        up = np.array([0.0, 1.0, 0.0]) if thin == 2 else np.array([0.0, 0.0, 1.0])
        return [(straight, up)]
    share = extent / largest
    weight = 0.42 + 0.58 * (1.0 - share)
    weight[2] *= 0.8  # eyes look slightly down on things
    order = [
        (1, -1, 1),
        (-1, -1, 1),
        (1, 1, 1),
        (-1, 1, 1),
        (1, -1, -1),
        (-1, -1, -1),
        (1, 1, -1),
        (-1, 1, -1),
    ]
    found = []
    for signs in order:
        toward = weight * np.array(signs) * np.array([0.8, 1.0, 1.0])
        toward /= np.linalg.norm(toward)
        top = np.array([0.0, 1.0, 0.0]) if abs(toward[2]) > 0.85 else np.array([0.0, 0.0, 1.0])
        up = top - toward * (top @ toward)
        found.append((toward, up / np.linalg.norm(up)))
    return found


def fit(
    points: Floats,
    direction: Floats,
    up: Floats,
    size: tuple[int, int],
    box: tuple[float, float, float, float],
) -> Camera:
    """Return the camera that shows `points` as large as they fit into `box` (left, right, bottom, top; pixels)."""
    right = np.cross(up, direction)
    across, along, deep = points @ right, points @ up, points @ direction
    low = np.array([across.min(), along.min()])
    high = np.array([across.max(), along.max()])
    room = np.array([box[1] - box[0], box[3] - box[2]])
    pixel = float(np.max((high - low) / room)) or 1.0
    middle = (low + high) / 2
    # the middle of the box is not the middle of the picture: shift the view
    shift = np.array([box[0] + box[1] - size[0], box[2] + box[3] - size[1]]) / 2 * pixel
    centre = middle - shift
    focus = centre[0] * right + centre[1] * up + (deep.min() + deep.max()) / 2 * direction
    return Camera(_three(direction), _three(up), _three(focus), pixel, size)


def _three(vector: Floats) -> tuple[float, float, float]:
    return (float(vector[0]), float(vector[1]), float(vector[2]))
