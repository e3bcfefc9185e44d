"""Lines, areas and text laid over a picture, in pixels from the lower left corner."""

from __future__ import annotations

import functools
import importlib.util
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.pictures._colours import INK
from unturn.pictures._window import FINE

Colour = tuple[float, float, float]
Anchor = Literal["left", "centre", "right"]


@functools.cache
def _font(bold: bool) -> str | None:
    """Return a font file that holds more than Latin letters, when one is installed with the plotting library."""
    found = importlib.util.find_spec("matplotlib")
    if found is None or found.origin is None:
        return None
    name = "DejaVuSans-Bold.ttf" if bold else "DejaVuSans.ttf"
    file = Path(found.origin).parent / "mpl-data" / "fonts" / "ttf" / name
    return str(file) if file.is_file() else None


def unit_of(size: tuple[int, int]) -> float:
    """Return the length in pixels from which all sizes in a picture are made; 1 at 1600 x 1000."""
    return min(size[0] / 1600, size[1] / 1000)


class Page:
    """The flat layer of a picture.

    Parameters
    ----------
    renderer
        Where it is drawn, `FINE` times as large as the picture.
    size
        Width and height of the picture in pixels.
    """

    def __init__(self, renderer: Any, size: tuple[int, int]) -> None:
        self._renderer = renderer
        self.size = size
        self.unit = unit_of(size)

    def areas(self, corners: NDArray[np.float64], colours: NDArray[np.uint8], opacity: float = 1.0) -> None:
        """Fill polygons `(n, m, 2)` with colours `(n, 3)`."""
        from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData

        data = vtkPolyData()
        data.SetPoints(_flat_points(corners.reshape(-1, 2)))
        cells = vtkCellArray()
        for k in range(len(corners)):
            _insert(cells, range(k * corners.shape[1], (k + 1) * corners.shape[1]))
        data.SetPolys(cells)
        data.GetCellData().SetScalars(_bytes(colours))
        self._add(data).GetProperty().SetOpacity(opacity)

    def box(
        self, left: float, bottom: float, right: float, top: float, colour: Colour, opacity: float = 1.0
    ) -> None:
        """Fill a rectangle."""
        corners = np.array([[[left, bottom], [right, bottom], [right, top], [left, top]]])
        self.areas(corners, np.round(np.array([colour]) * 255).astype(np.uint8), opacity)

    def line(self, points: NDArray[np.float64], colour: Colour = INK, width: float = 1.0) -> None:
        """Draw a line through points `(n, 2)`."""
        from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData

        data = vtkPolyData()
        data.SetPoints(_flat_points(points))
        cells = vtkCellArray()
        _insert(cells, range(len(points)))
        data.SetLines(cells)
        actor = self._add(data)
        actor.GetProperty().SetColor(*colour)
        actor.GetProperty().SetLineWidth(width * FINE)

    def ring(self, centre: NDArray[np.float64], radius: float, colour: Colour, width: float) -> None:
        """Draw a circle."""
        angle = np.linspace(0, 2 * np.pi, 49)
        self.line(centre + radius * np.stack([np.cos(angle), np.sin(angle)], axis=1), colour, width)

    def text(
        self,
        words: str,
        left: float,
        base: float,
        height: float,
        *,
        room: float | None = None,
        anchor: Anchor = "left",
        bold: bool = False,
        colour: Colour = INK,
    ) -> float:
        """Write one line with its base line at `base`; return its width. What is wider than `room` is shortened."""
        actor = self._text_actor(words, height, bold, colour)
        width = self._width(actor)
        if room is not None and width > room:
            height = max(height * 0.8, height * room / width)
            actor = self._text_actor(words, height, bold, colour)
            width = self._width(actor)
            keep = len(words)
            while width > room and keep > 4:
                keep = min(keep - 1, int(keep * room / width) + 1)
                actor.SetInput(shortened(words, keep))
                width = self._width(actor)
        shift = {"left": 0.0, "centre": width / 2, "right": width}[anchor]
        actor.SetPosition(round((left - shift) * FINE), round(base * FINE))
        self._renderer.AddViewProp(actor)
        return width

    def width(self, words: str, height: float, bold: bool = False) -> float:
        """Return how wide a line of text is."""
        return self._width(self._text_actor(words, height, bold, INK))

    def wrapped(self, words: str, height: float, room: float, bold: bool = False) -> list[str]:
        """Return `words` broken into lines that fit into `room`."""
        lines: list[str] = []
        for word in words.split():
            longer = f"{lines[-1]} {word}" if lines else word
            if lines and self.width(longer, height, bold) <= room:
                lines[-1] = longer
            else:
                lines.append(word)
        return lines

    def _width(self, actor: Any) -> float:
        box = [0.0] * 4
        actor.GetBoundingBox(self._renderer, box)
        return (box[1] - box[0] + 1) / FINE

    def _text_actor(self, words: str, height: float, bold: bool, colour: Colour) -> Any:
        from vtkmodules.vtkRenderingCore import vtkTextActor

        actor = vtkTextActor()
        actor.SetInput(words)
        style = actor.GetTextProperty()
        file = _font(bold)
        if file is None:
            style.SetFontFamilyToArial()
            style.SetBold(bold)
        else:
            style.SetFontFamily(4)  # VTK_FONT_FILE
            style.SetFontFile(file)
        style.SetFontSize(max(6, round(height)) * FINE)
        style.SetColor(*colour)
        style.SetVerticalJustificationToBottom()
        style.UseTightBoundingBoxOff()
        return actor

    def _add(self, data: Any) -> Any:
        from vtkmodules.vtkRenderingCore import vtkActor2D, vtkPolyDataMapper2D

        mapper = vtkPolyDataMapper2D()
        mapper.SetInputData(data)
        actor = vtkActor2D()
        actor.SetMapper(mapper)
        self._renderer.AddViewProp(actor)
        return actor


def shortened(words: str, keep: int) -> str:
    """Return text with its middle left out, `keep` letters long.

    Examples
    --------
    >>> shortened("a_very_long_file_name.vtu", 15)
    'a_very_…ame.vtu'
    """
    if len(words) <= keep:
        return words
    front = keep // 2
    return words[:front] + "…" + words[len(words) - (keep - front - 1) :]


def _flat_points(points: NDArray[np.float64]) -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints

    held = vtkPoints()
    flat = np.column_stack([points * FINE, np.zeros(len(points))])
    held.SetData(numpy_to_vtk(np.ascontiguousarray(flat), deep=True))
    return held


def _insert(cells: Any, nodes: range) -> None:
    cells.InsertNextCell(len(nodes))
    for node in nodes:
        cells.InsertCellPoint(node)


def _bytes(colours: NDArray[np.uint8]) -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk

    return numpy_to_vtk(np.ascontiguousarray(colours), deep=True)
