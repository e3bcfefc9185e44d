"""Reading a picture back: pixels, the value behind a colour, small meshes whose pictures are known."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyvista
from PIL import Image

from unturn.elements import ELEMENTS
from unturn.io.vtk_result import result_from_vtk
from unturn.options import StrainOptions
from unturn.picture_keys import PictureRequest, request_of
from unturn.pictures._colours import colour_table
from unturn.pictures.computing import Step
from unturn.pictures.drawing import Drawn, draw_all
from unturn.result import CellBlock, Result

SIZE = "800x600"


def pixels_of(path: Path) -> np.ndarray:
    """Pixels `(height, width, 3)` of a PNG."""
    with Image.open(path) as image:
        assert image.format == "PNG"
        return np.asarray(image.convert("RGB")).astype(int)


def colour(pixels: np.ndarray, place: np.ndarray) -> np.ndarray:
    """The colour of the pixel at a column and row."""
    column, row = place
    return pixels[round(row - 0.5), round(column - 0.5)]


def value_of(rgb: np.ndarray, low: float, high: float, table: np.ndarray | None = None) -> float:
    """The value a reader takes from the colour bar; fails for a colour that is not in it."""
    table = colour_table() if table is None else table
    away = np.abs(table.astype(int) - rgb).max(axis=1)
    assert away.min() <= 1, f"colour {rgb} is not in the bar"
    return low + (int(away.argmin()) + 0.5) / 256 * (high - low)


def lightness(rgb: np.ndarray) -> np.ndarray:
    """CIELAB lightness of sRGB bytes."""
    s = np.asarray(rgb) / 255.0
    linear = np.where(s <= 0.04045, s / 12.92, ((s + 0.055) / 1.055) ** 2.4)
    y = linear @ [0.2126, 0.7152, 0.0722]
    return np.where(y > (6 / 29) ** 3, 116 * np.cbrt(y) - 16, y * (29 / 3) ** 3)


# From memory, not looked up: Machado et al. 2009, severity 1.0; the rows' sums show that each matrix keeps greys.
COLOUR_BLIND = (
    [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
)


def seen_by(matrix: list[list[float]], rgb: np.ndarray) -> np.ndarray:
    """The colours, sRGB bytes, that somebody colour-blind sees of colours from 0 to 1."""
    turn = np.array(matrix)
    np.testing.assert_allclose(turn.sum(axis=1), 1, atol=2e-6)
    s = np.atleast_2d(rgb)
    linear = np.where(s <= 0.04045, s / 12.92, ((s + 0.055) / 1.055) ** 2.4)
    linear = np.clip(linear @ turn.T, 0, 1)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055) * 255


def is_colour(rgb: np.ndarray, wanted: tuple[float, float, float]) -> bool:
    """Whether a pixel has a colour given from 0 to 1."""
    return bool(np.abs(rgb - np.round(np.array(wanted) * 255)).max() <= 1)


def boxes(n: int = 4) -> Result:
    """The unit cube in n x n x n hexahedra; ``part`` numbers the halves in x, ``value`` is 1, 2, ... in file order."""
    grid = pyvista.ImageData(dimensions=(n + 1,) * 3, spacing=(1 / n,) * 3).cast_to_unstructured_grid()
    x = grid.cell_centers().points[:, 0]
    grid.cell_data["part"] = np.where(x < 0.5, 1, 2).astype(np.int32)
    grid.cell_data["value"] = np.arange(grid.n_cells, dtype=float) + 1
    grid.point_data["u"] = np.array(grid.points) * [1e-3, -2e-4, -2e-4]
    return result_from_vtk(grid)


def one_cell(cell_type: str, **nodal: np.ndarray) -> Result:
    """One cell at its reference nodes, with a displacement and arrays at its nodes."""
    row = ELEMENTS[cell_type]
    points = np.pad(row.nodes, ((0, 0), (0, 3 - row.dim)))
    block = CellBlock(cell_type, np.arange(row.n_nodes)[None], np.array([0]))
    return Result(points, (block,), {"u": 1e-3 * points, **nodal})


def drawn(result: Result, path: Path, options: StrainOptions | None = None, **asked: object) -> Drawn:
    """Draw one picture of a result."""
    request = wanted(**asked)
    return draw_all(Step(result, [request], options), [request], [path])[0]


def wanted(**asked: object) -> PictureRequest:
    """A request for a small picture."""
    return request_of({"size": SIZE, **asked})
