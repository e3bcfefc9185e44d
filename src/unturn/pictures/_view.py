"""From a wish to a camera: direction, what must fit, what is looked at closely."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.picture_wishes import CameraWish, CutPlane
from unturn.pictures._camera import Camera, directions, fit
from unturn.pictures._scene import Box

Floats = NDArray[np.float64]
_EDGE_ON = 0.05
CLOSE = 4.0  # a close-up spans the model's diagonal over this


@dataclass(frozen=True)
class Frame:
    """Where the model is drawn in the picture: the whole part of it, and the part that the model is fitted into."""

    size: tuple[int, int]
    box: Box
    inner: Box


def through(plane: CutPlane, points: Floats) -> Floats:
    """Return the point of a cut plane; the middle of the model where none is given."""
    if plane.point is not None:
        return np.array(plane.point)
    return np.asarray((points.min(axis=0) + points.max(axis=0)) / 2)


def chosen_direction(
    wish: CameraWish | None, plane: CutPlane | None, extent: Floats
) -> tuple[Floats, Floats] | None:
    """Return direction and up where they do not depend on what is seen; None: the best of `directions`.

    Raises
    ------
    UsageError
        The plane is seen edge-on.
    """
    if wish is not None:
        axes = _axes(wish)
    elif plane is not None:
        normal = np.array(plane.normal) / np.linalg.norm(plane.normal)
        axes = max(directions(extent), key=lambda a: abs(a[0] @ normal))
    else:
        return None
    if plane is not None and abs(axes[0] @ np.array(plane.normal)) < _EDGE_ON * np.linalg.norm(plane.normal):
        raise UsageError(
            f"the cut {plane.text!r} is seen edge-on from this camera: nothing of its face would show. Give another "
            "camera."
        )
    return axes


def _axes(wish: CameraWish) -> tuple[Floats, Floats]:
    """Return unit direction, and unit up at right angles to it."""
    toward = np.array(wish.direction) / np.linalg.norm(wish.direction)
    up = np.array(wish.up) - toward * (np.array(wish.up) @ toward)
    return toward, up / np.linalg.norm(up)


def facing(plane: CutPlane, direction: Floats) -> Floats:
    """Return the unit normal of a plane that points to the eye."""
    normal = np.array(plane.normal) / np.linalg.norm(plane.normal)
    return np.asarray(normal if normal @ direction > 0 else -normal)


def camera_for(
    axes: tuple[Floats, Floats],
    shown: Floats,
    frame: Frame,
    point: Floats | None = None,
    width: float | None = None,
) -> Camera:
    """Return the camera that fits `shown` `(n, 3)` into the frame, or has `point` in its middle and spans `width`."""
    camera = fit(shown, *axes, frame.size, frame.inner)
    if point is None and width is None:
        return camera
    left, right, bottom, top = frame.inner
    pixel = camera.pixel if width is None else width / (right - left)
    focus = (shown.min(axis=0) + shown.max(axis=0)) / 2 if point is None else point
    aside = ((left + right - frame.size[0]) / 2, (bottom + top - frame.size[1]) / 2)
    direction, up = axes
    moved = focus - pixel * (aside[0] * np.cross(up, direction) + aside[1] * up)
    return Camera(
        camera.direction, camera.up, (float(moved[0]), float(moved[1]), float(moved[2])), pixel, frame.size
    )


def camera_words(camera: Camera, frame: Frame) -> str:
    """Return the text that asks for a camera again, whatever the model then does."""
    left, right, bottom, top = frame.inner
    aside = ((left + right - frame.size[0]) / 2, (bottom + top - frame.size[1]) / 2)
    point = np.array(camera.focus) + camera.pixel * (aside[0] * camera.right + aside[1] * np.array(camera.up))
    return (
        f"{_three(np.array(camera.direction))} up {_three(np.array(camera.up))} at {_three(point)} "
        f"width {camera.pixel * (right - left):.6g}"
    )


def _three(vector: Floats) -> str:
    return ",".join(f"{x:.6g}" for x in np.round(vector, 15) + 0.0)
