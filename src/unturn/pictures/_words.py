"""What a picture says about itself: what it was made from, how the shape is drawn, what is missing in it."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._legend import letters
from unturn.pictures._marks import extremes
from unturn.pictures._numbers import written

if TYPE_CHECKING:
    from unturn.pictures._picture import Picture
    from unturn.result import Result


def made_from(result: Result) -> str:
    """Return file, step and size of a mesh."""
    parts = [Path(result.path).name] if result.path else []
    steps = result.steps
    if steps is not None:
        value = written(steps.values[steps.current], 4)
        parts.append(f"step {steps.current} (of 0 to {len(steps.values) - 1}), t = {value}")
    parts.append(f"{result.n_cells:,} cells".replace(",", " "))
    return "    ".join(parts)


def notes(picture: Picture) -> list[str]:
    """Return the lines below the model."""
    said = [about_shape(picture), *_about_regions(picture), *_about_cut(picture), *_about_arrows(picture)]
    return textwrap.wrap("; ".join(said), letters(picture.size))


def about_shape(picture: Picture) -> str:
    """Return how the displacement is drawn."""
    factor = picture.shape.factor
    if not factor:
        return "undeformed shape"
    behind = "; pale behind: undeformed" if picture.request.undeformed else ""
    if factor == 1.0:
        return f"displacement drawn × 1, true to scale{behind}"
    how = "chosen to be seen" if picture.shape.fitted else "as asked for"
    return f"displacement drawn × {written(factor)}, {how}{behind}"


def _about_regions(picture: Picture) -> list[str]:
    request, there = picture.request, picture.stage.there
    said = []
    if request.only:
        said.append(f"drawn: {', '.join(request.only)} only{_peak_there(picture, there & ~picture.shown)}")
    if request.faint:
        said.append(f"pale, without colours: {', '.join(request.faint)}{_peak_there(picture, picture.faint)}")
    if request.leave_out:
        out = there & ~picture.shown & ~picture.faint
        said.append(f"left out: {', '.join(request.leave_out)}{_peak_there(picture, out)}")
    return said


def _peak_there(picture: Picture, cells: NDArray[np.bool_]) -> str:
    """Return in brackets how large the values get where there are no colours."""
    peaks = [f"{kind} {_value(picture, value)}" for kind, value in _peaks(picture, cells)]
    return f" ({' and '.join(peaks) or 'no value'} there)" if cells.any() else ""


def _peaks(picture: Picture, cells: NDArray[np.bool_]) -> list[tuple[str, float]]:
    numbers = np.where(picture.subject.which(cells), picture.values.numbers, np.nan)
    return [(kind, float(numbers[position])) for kind, position in extremes(numbers)]


def _value(picture: Picture, value: float) -> str:
    return f"{written(value * picture.values.scale, 4)} {picture.values.short_unit}".rstrip()


def _about_cut(picture: Picture) -> list[str]:
    cut = picture.request.cut
    if cut is None:
        return []
    hollow = ["hollow: only free faces are drawn"] if picture.subject.of_faces else []
    place = cut.text if cut.point is not None else f"{cut.text}, through the middle,"
    return [f"cut: {place} of the undeformed shape, the half towards the eye taken away", *hollow]


def _about_arrows(picture: Picture) -> list[str]:
    arrows = picture.subject.arrows
    if arrows is None:
        return []
    most = f"{written(picture.longest * arrows.scale)} {arrows.short_unit}"
    return [f"arrows: {arrows.words}", f"the longest: {most}, the shortest left out"]
