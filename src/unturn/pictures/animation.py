"""An animated picture of a series: one camera, one factor, one colour range."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.io._atomic import replacing
from unturn.picture_keys import PictureRequest
from unturn.pictures._camera import Camera
from unturn.pictures._picture import Picture
from unturn.pictures._range import Ends
from unturn.pictures._subject import Subject
from unturn.pictures._view import camera_for, camera_words
from unturn.pictures._window import usable_window
from unturn.pictures._words import made_from
from unturn.pictures.computing import Step
from unturn.pictures.draw import full_title
from unturn.pictures.drawing import of_steps, ranged

Floats = NDArray[np.float64]
_FRAME_MS, _LAST_MS = 400, 1600


@dataclass(frozen=True, eq=False)
class Animation:
    """What was drawn: the file, its frames, what was asked for with the factor used, the last step's subject, the range."""

    path: str
    frames: int
    request: PictureRequest
    subject: Subject
    colour_range: tuple[float, float]
    camera_words: str


def draw_series(
    step: Callable[[int], Step], n_steps: int, request: PictureRequest, target: Path, title: str = ""
) -> Animation:
    """Return what was drawn into an animated GIF.

    Parameters
    ----------
    step
        Returns a step by its number, made for this request; each is asked for three times.
    n_steps
        How many there are.
    request
        What is drawn; a fitted factor is the smallest of those of the steps.
    target
        The file; written whole or not at all.
    title
        Stands before the title.

    Raises
    ------
    UsageError, MissingExtraError, InputError
        As for a single picture.
    """
    usable_window()
    found = [
        (s.ends(request), s.subject(request).stage.shape(request.factor).factor)
        for s in map(step, range(n_steps))
    ]
    ends, factor = of_steps([e for e, _ in found]), min(f for _, f in found)
    fixed = replace(request, factor=factor)
    camera = _camera(step, n_steps, fixed, ends)
    frames = []
    for k in range(n_steps):
        subject = step(k).subject(fixed)
        picture = Picture(subject, fixed, ranged(subject, fixed, ends), camera)
        frames.append(picture.render(full_title(subject, fixed, title), made_from(subject.stage.result)))
    with replacing(target) as work:
        _write(frames, work)
    last = step(n_steps - 1).subject(fixed)
    return Animation(
        str(target), n_steps, fixed, last, (ends.low, ends.high), camera_words(camera, picture.frame)
    )


def _camera(step: Callable[[int], Step], n_steps: int, request: PictureRequest, ends: Ends) -> Camera:
    """Return the camera of the last step, from so far away that all steps fit."""
    outermost: list[Floats] = []
    camera, frame = None, None
    for k in reversed(range(n_steps)):
        subject = step(k).subject(request)
        picture = Picture(subject, request, ranged(subject, request, ends), camera)
        camera, frame = camera or picture.camera, frame or picture.frame
        if picture.focus is not None or (request.camera is not None and request.camera.width is not None):
            return camera
        across = picture.extent @ np.stack([camera.right, camera.up, camera.direction], axis=1)
        outermost += [picture.extent[i] for i in (*across.argmin(axis=0), *across.argmax(axis=0))]
    assert camera is not None
    assert frame is not None
    return camera_for((np.array(camera.direction), np.array(camera.up)), np.array(outermost), frame)


def _write(frames: list[NDArray[np.uint8]], path: Path) -> None:
    """Write frames with one palette, to the nearest of whose colours each pixel is rounded."""
    from PIL import Image
    from scipy.spatial import cKDTree

    narrow = np.concatenate([frame[::3, ::3] for frame in frames[:: max(1, len(frames) // 8)]])
    found = Image.fromarray(narrow).quantize(255, dither=Image.Dither.NONE).getpalette() or []
    palette = np.vstack([np.full(3, 255), np.array(found, dtype=np.int64).reshape(-1, 3)])[:256]
    tree = cKDTree(palette)
    images = []
    for frame in frames:
        code: NDArray[np.int64] = frame.astype(np.int64) @ np.array([65536, 256, 1])
        colours, place = np.unique(code, return_inverse=True)
        nearest = np.asarray(
            tree.query(np.stack([colours >> 16, colours >> 8 & 255, colours & 255], axis=1))[1]
        )
        image = Image.frombytes(
            "P", frame.shape[1::-1], nearest.astype(np.uint8)[place.reshape(-1)].tobytes()
        )
        image.putpalette(palette.reshape(-1).tolist())
        images.append(image)
    times = [_FRAME_MS] * (len(images) - 1) + [_LAST_MS]
    images[0].save(
        path, format="GIF", save_all=True, append_images=images[1:], duration=times, loop=0, optimize=False
    )
