"""One picture of one array on the deformed shape, drawn without a screen."""

from __future__ import annotations

from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.io._atomic import replacing
from unturn.picture_keys import PictureRequest
from unturn.pictures._camera import Camera
from unturn.pictures._colours import Range
from unturn.pictures._marks import Mark
from unturn.pictures._picture import Picture
from unturn.pictures._range import choose_range
from unturn.pictures._stage import Stage
from unturn.pictures._subject import Subject
from unturn.pictures._values import values_of
from unturn.pictures._view import camera_words
from unturn.pictures._window import usable_window, write_png
from unturn.pictures._words import made_from
from unturn.result import Association, Result

Floats = NDArray[np.float64]
_SMALLEST, _LARGEST = 480, 4_000


@dataclass(frozen=True)
class Drawing:
    """What was drawn.

    Attributes
    ----------
    path
        The picture.
    factor
        Displacements are drawn this many times as large; 0 without a displacement.
    colour_range
        Values at the two ends of the colour bar, in the unit of the array.
    above, below, missing
        Number of cells (or points) above and below the range, and without a finite value.
    camera
        Where the model is seen from.
    marks
        The extremes that are marked.
    camera_words
        The text that asks for this camera again.
    """

    path: str
    factor: float
    colour_range: tuple[float, float]
    above: int
    below: int
    missing: int
    camera: Camera
    marks: tuple[Mark, ...]
    camera_words: str = ""

    @property
    def out_of_range(self) -> int:
        """Number of cells (or points) outside the colour range."""
        return self.above + self.below


def draw(
    result: Result,
    array: str,
    path: str | PathLike[str],
    *,
    displacement: Floats | None = None,
    association: Association = "cell",
    component: int | str | None = None,
    factor: float | None = None,
    title: str = "",
    legend: str = "",
    unit: str = "",
    location: str = "",
    numbers: NDArray[Any] | None = None,
    colour_range: tuple[float, float] | None = None,
    camera: Camera | None = None,
    size: tuple[int, int] = (1600, 1000),
) -> Drawing:
    """Return what was drawn into a PNG file: one array on the deformed shape.

    Parameters
    ----------
    result
        The mesh with the array.
    array, association, component
        Which numbers: a cell or point array, and which of its components (name or zero-based position).
    path
        The picture; written whole or not at all.
    displacement
        `(n_points, 3)`, length unit of the file; None draws the undeformed shape.
    factor
        How many times the displacement is drawn; None fits it so that the largest one is 5 % of the model, or
        takes 1 where it is larger than that already.
    title, legend
        Words above the picture and above the colour bar; made from the array's name when empty. Lines of
        the legend after its first are remarks.
    unit
        ``strain`` (shown as microstrain), ``radian``, ``1``, or the name of any unit, shown as it is.
        Empty: looked up by the array's name.
    location
        Where the values live, for the legend; empty for ``at element centroids`` or ``at the nodes``.
    numbers
        `(n_cells,)` or `(n_points,)`: the solver's own numbers, told beside ours.
    colour_range
        Values at the ends of the colour bar, in the unit of the array; chosen by `choose_range` when None.
    camera
        The camera of an earlier `Drawing` of this size, to compare pictures.
    size
        Width and height in pixels.

    Raises
    ------
    UsageError
        Not a PNG name, no such array or component, a displacement, factor, range, camera or size that does not
        fit, or a place that cannot be written to.
    MissingExtraError
        No graphics library; the message names the package.

    Notes
    -----
    Colours are not shaded: the colour of a pixel is the colour of its value in the bar.
    """
    request = PictureRequest(factor=factor, title=title, size=(size[0], size[1]))
    target = Path(path)
    _check(target, size)
    if camera is not None and camera.size != tuple(size):
        raise UsageError(
            f"the camera was made for {camera.size[0]} x {camera.size[1]} pixels, not {size[0]} x {size[1]}."
        )
    values = values_of(result, array, association, component, legend, unit)
    where = location or ("at element centroids" if association == "cell" else "at the nodes")
    stage = Stage(result, displacement)
    subject = Subject(stage, values, "cell" if association == "cell" else "point", where, numbers)
    stage.shape(factor)
    usable_window()
    return draw_subject(subject, request, choose_range(values.numbers, colour_range), target, camera)


def draw_subject(
    subject: Subject,
    request: PictureRequest,
    found: Range,
    target: Path,
    camera: Camera | None = None,
    title: str = "",
) -> Drawing:
    """Return what was drawn into a PNG file.

    Parameters
    ----------
    subject, request, found
        What is drawn, how, and in which colours.
    target
        The picture; written whole or not at all.
    camera
        The camera of another picture of this size, instead of the one that is asked for.
    title
        Stands before that of the request.
    """
    picture = Picture(subject, request, found, camera)
    with replacing(target) as work:
        words = full_title(subject, request, title)
        write_png(picture.render(words, made_from(subject.stage.result)), work, request.dpi)
    return Drawing(
        str(target),
        picture.shape.factor,
        (found.low, found.high),
        found.above,
        found.below,
        found.missing,
        picture.camera,
        picture.marks,
        camera_words(picture.camera, picture.frame),
    )


def full_title(subject: Subject, request: PictureRequest, title: str = "") -> str:
    """Return the words above a picture: `title` first, then what was asked for or the name of the number."""
    name = subject.values.name.splitlines()[0]
    own = request.title or name[:1].upper() + name[1:]
    return f"{title}: {own}" if title else own


def _check(target: Path, size: tuple[int, int]) -> None:
    if target.suffix.lower() != ".png":
        raise UsageError(f"{target}: pictures are written as PNG; give a name that ends in .png.")
    if not all(_SMALLEST <= side <= _LARGEST for side in size):
        raise UsageError(
            f"a picture of {size[0]} x {size[1]} pixels; each side must be {_SMALLEST} to {_LARGEST}."
        )
