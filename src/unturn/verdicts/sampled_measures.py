"""Measures of a result on another mesh, at the places of a reference: from the gradient that its elements have there."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from unturn.errors import UsageError
from unturn.fields import CellFields, fill_measures
from unturn.frames import Frame
from unturn.kinematics._symmetric import Floats
from unturn.measures import GEOMETRY, MEASURES, Split
from unturn.verdicts.sampling import Sampled

_AT_ONCE = 8192


def measures_at(
    sampled: Sampled,
    places: Floats,
    fields: CellFields,
    names: Sequence[str],
    frame: Frame | None = None,
    equivalent_poisson: float | None = None,
) -> tuple[dict[str, Floats], Floats]:
    """Return measures `(n,)` or `(n, components)` at places, and the noise floor of the strain there; NaN outside.

    Parameters
    ----------
    sampled
        Where the places lie in the mesh of the result.
    places
        `(n, 3)`.
    fields
        Of the result, computed with ``diagnose=True``.
    names, frame, equivalent_poisson
        As in `compute_fields`.

    Raises
    ------
    UsageError
        A measure of the mesh alone, or a frame that is given on cells: neither belongs to a place.

    Notes
    -----
    On the border of several elements the mean of their gradients, weighted by their volume there.
    """
    for name in names:
        if name in GEOMETRY:
            raise UsageError(
                f"{name} belongs to the cells of one mesh; the meshes differ. Leave it out of --measures."
            )
    if frame is not None and (frame.cells is not None or frame.surface):
        raise UsageError(
            f"--frame {frame.text!r} is given on cells, and the meshes differ; use a cartesian or cylindrical frame."
        )
    assert fields.diagnostics is not None
    H, finite, noise = _gradients(sampled, fields)
    measures = [MEASURES[name] for name in names]
    n = len(places)
    arrays = {m.name: np.full((n, len(m.components)) if m.components else n, np.nan) for m in measures}
    directions = any(m.directions for m in measures)
    for start in range(0, n, _AT_ONCE):
        rows = slice(start, min(start + _AT_ONCE, n))
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            split = Split(H[:, :, rows], equivalent_poisson, directions, finite[:, :, rows])
            axes = None if frame is None else frame.axes(places[rows].T, rows, None)
            fill_measures(arrays, rows, measures, split, axes)
    return arrays, noise


def _gradients(sampled: Sampled, fields: CellFields) -> tuple[Floats, Floats, Floats]:
    """Return `H` and `F - I`, `(3, 3, n)` each, and the noise floor `(n,)`."""
    assert fields.diagnostics is not None
    n, model = len(sampled.count), fields.model
    H, finite, weight, noise = np.zeros((3, 3, n)), np.zeros((3, 3, n)), np.zeros(n), np.zeros(n)
    sound = np.ones(model.result.n_cells, dtype=bool)
    for cells in fields.left_out.values():
        sound[cells] = False
    for found in sampled.places:
        row, block = found.block.row, model.blocks[sampled.model.blocks.index(found.block)]
        assert row is not None
        for start in range(0, len(found.point), _AT_ONCE):
            part = slice(start, start + _AT_ONCE)
            point, cell, xi = found.point[part], found.cell[part], found.reference[part]
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                chunk = model.chunk(block, found.connectivity[part], cell)
                at = chunk.at(np.moveaxis(row.shape_gradients(xi), 0, -1), row.shape_functions(xi).T)
                share = np.where(sound[cell], at.weight, np.nan)
                real = chunk.finite(at)
                for i in range(3):
                    for j in range(3):
                        H[i, j] += np.bincount(point, share * at.H[i, j], n)
                        finite[i, j] += np.bincount(point, share * real[i, j], n)
            weight += np.bincount(point, share, n)
            noise += np.bincount(point, share * fields.diagnostics.noise[cell], n)
    with np.errstate(invalid="ignore", divide="ignore"):
        return H / weight, finite / weight, noise / weight
