"""Small helpers to write the results: tensor order, VTU, XDMF series."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pyvista as pv
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def symmetric(gradient: Floats) -> Floats:
    """Return the six components XX, YY, ZZ, XY, YZ, XZ of the symmetric part of ``(n, 3, 3)`` tensors."""
    full = 0.5 * (gradient + np.swapaxes(gradient, -1, -2))
    rows, columns = [0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]
    return full[..., rows, columns]


def write_vtu(
    path: Path,
    points: Floats,
    cells: Ints,
    vtk_type: int,
    point_data: Mapping[str, NDArray[Any]],
    cell_data: Mapping[str, NDArray[Any]],
    field_data: Mapping[str, NDArray[Any]],
) -> None:
    """Write one block of cells (VTK's node order) as a compressed VTU file."""
    grid = pv.UnstructuredGrid({vtk_type: cells}, points)
    for name, values in point_data.items():
        grid.point_data.set_array(values, name)
    for name, values in cell_data.items():
        grid.cell_data.set_array(values, name)
    for name, values in field_data.items():
        grid.field_data[name] = values
    grid.save(path, binary=True)
