"""A picture in memory, for notebooks and programs."""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any

from unturn.errors import UsageError, close_matches
from unturn.io._atomic import replacing
from unturn.picture_keys import PICTURE_KEYS, STRAIN_OPTIONS, request_of
from unturn.pictures.computing import Step
from unturn.pictures.drawing import Drawn, draw_all
from unturn.pictures.told import drawn_text
from unturn.pipeline import StrainOptions
from unturn.result import Result


@dataclass(frozen=True, eq=False)
class Image:
    """A picture: notebooks show it.

    Attributes
    ----------
    png
        The bytes of the PNG file.
    drawn
        What was drawn: factor, colour range, camera, extremes.
    """

    png: bytes
    drawn: Drawn

    def _repr_png_(self) -> bytes:
        return self.png

    def __repr__(self) -> str:
        return drawn_text(self.drawn)

    def save(self, path: str | PathLike[str]) -> None:
        """Write the picture to a file, whole or not at all.

        Raises
        ------
        UsageError
            The place cannot be written to.
        """
        with replacing(Path(path)) as work:
            work.write_bytes(self.png)


def picture(result: Result, **asked: Any) -> Image:
    """Return a picture of a result.

    Parameters
    ----------
    result
        The result, with a displacement.
    **asked
        What is drawn, by the names of the options of ``unturn picture`` with underscores: ``measure``, ``camera``,
        ``factor``, ``cut``, ``range`` ...; and how strain is computed, by the keywords of `unturn.strain`:
        ``displacement``, ``at``, ``plane``, ``poisson`` ...

    Raises
    ------
    UsageError
        A name that is not known, or a value that does not fit.
    InputError
        The result cannot be used.
    MissingExtraError
        No graphics library; the message names the package.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> pulled = Result(points, (block,), {"u": points * [1e-3, -0.3e-3, -0.3e-3]})
    >>> image = picture(pulled, camera="front", factor=1, size=(480, 480))
    >>> round(image.drawn.drawing.marks[0].value * 1e6)
    867
    """
    own = {key.name for key in PICTURE_KEYS}
    strain = set(STRAIN_OPTIONS) - {"at"}
    for name in asked:
        if name not in own | strain | {"at"}:
            raise UsageError(
                f"{name!r} is no option of a picture.{close_matches(name, own | strain)} Options: "
                f"{', '.join(sorted(own | strain))}."
            )
    request = request_of({k: v for k, v in asked.items() if k in own or k == "at"})
    step = Step(result, [request], StrainOptions(**{k: v for k, v in asked.items() if k in strain}))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "picture.png"
        (drawn,) = draw_all(step, [request], [path])
        return Image(path.read_bytes(), drawn)
