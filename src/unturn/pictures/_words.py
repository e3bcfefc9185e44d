"""What a picture says about itself: what it was made from, how the shape is drawn, what is missing in it."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

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
    request = picture.request
    said = [f"drawn: {', '.join(request.only)} only"] if request.only else []
    said += [f"pale: {', '.join(request.faint)}"] if request.faint else []
    said += [f"left out: {', '.join(request.leave_out)}"] if request.leave_out else []
    hidden = picture.stage.there & ~picture.shown
    if said and hidden.any():
        peaks = [f"{kind} {_value(picture, value)}" for kind, value in _peaks(picture, hidden)]
        said.append("in what has no colours here: " + (" and ".join(peaks) or "no value"))
    return said


def _peaks(picture: Picture, cells: np.ndarray) -> list[tuple[str, float]]:
    numbers = np.where(picture.subject.which(cells), picture.values.numbers, np.nan)
    return [(kind, float(numbers[position])) for kind, position in extremes(numbers)]


def _value(picture: Picture, value: float) -> str:
    return f"{written(value * picture.values.scale, 4)} {picture.values.short_unit}".rstrip()


def _about_cut(picture: Picture) -> list[str]:
    cut = picture.request.cut
    return (
        []
        if cut is None
        else [f"cut: {cut.text} of the undeformed shape, the half towards the eye taken away"]
    )


def _about_arrows(picture: Picture) -> list[str]:
    return []
