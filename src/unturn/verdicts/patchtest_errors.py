"""The error of an imposed field in every cell, and what rounding may make of it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from unturn.displacement import Displacement
from unturn.fields import CellFields
from unturn.gradient import NodalFields, over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock
from unturn.verdicts.cell_shapes import CellShapes
from unturn.verdicts.imposed import ImposedField
from unturn.verdicts.straight_cells import exact_at_middle

_CHUNK = 16384
NAME = "imposed displacement"
_EPS, _SINGLE = 2.0**-53, 2.0**-24
_DIGITS_U = 8.0  # roundings of an imposed displacement, each of half a digit of its size
_DIGITS_H = 24.0  # roundings of a gradient, each of half a digit times the condition of the cell
_FINITE = 4e-15  # absolute rounding of finite measures, times max(1, |H|^2)
_UPSET = 0.1  # error of the gradient above which finite measures are not looked at
_LINEAR = ("strain", "rotation")
_BLIND = 1e-5
"""Strain that rounding alone may make in a cell, above which an error is no evidence."""


@dataclass(eq=False)
class Errors:
    """The error of one field in every cell, `(n_cells,)` each.

    Attributes
    ----------
    field
        What was imposed.
    error
        Largest error of a component, dimensionless or radian; infinite where there is no value though there should be.
    bound
        What rounding may make of it.
    which
        The measure, as a position in the field's list of measures.
    exact
        Whether the field must be exact there, to rounding.
    noise
        The floor that the tool reports, where the displacement is stored in single precision.
    """

    field: ImposedField
    error: Floats
    bound: Floats
    which: NDArray[np.int8]
    exact: NDArray[np.bool_]
    noise: Floats | None = None


def imposed_model(model: Model, imposed: ImposedField, origin: Floats) -> Model:
    """Return the model with an imposed displacement in the place of its own."""
    x = model.points - origin
    x = np.where(np.isfinite(x).all(axis=1, keepdims=True), x, 0.0)
    stored = imposed.displacement(x)
    values = stored.astype(np.float64)
    displacement = Displacement(NAME, values, (stored,), "imposed", ())
    return replace(model, displacement=displacement, fields=NodalFields(model.points, values))


def errors_of(
    found: CellFields,
    imposed: ImposedField,
    shapes: CellShapes,
    computed: NDArray[np.bool_],
    threads: int | None,
) -> Errors:
    """Return the errors of one field.

    Parameters
    ----------
    found
        The measures of the field, with diagnostics where it is stored in single precision.
    imposed
        The field.
    shapes
        Geometry of the cells.
    computed
        `(n_cells,)` mask of those that have values.
    threads
        Number of threads; None for all processors.
    """
    n = len(computed)
    noise = None if found.diagnostics is None else found.diagnostics.noise
    errors = Errors(
        imposed, np.zeros(n), np.full(n, np.nan), np.zeros(n, dtype=np.int8), np.zeros(n, dtype=bool), noise
    )
    for block in found.model.blocks:
        if block.row is not None and len(block.active):
            rows = block.index[computed[block.index]]
            work = partial(_block_errors, errors, found, shapes, block, rows)
            over_chunks(work, [(k, min(k + _CHUNK, len(rows))) for k in range(0, len(rows), _CHUNK)], threads)
    return errors


def _block_errors(
    errors: Errors,
    found: CellFields,
    shapes: CellShapes,
    block: ModelBlock,
    rows: NDArray[np.int64],
    start: int,
    stop: int,
) -> None:
    """Fill the errors of some cells of a block."""
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        _fill(errors, found, shapes, block, rows[start:stop])


def _fill(
    errors: Errors, found: CellFields, shapes: CellShapes, block: ModelBlock, cells: NDArray[np.int64]
) -> None:
    assert block.row is not None
    imposed = errors.field
    whole = block.kind in ("solid", "plane")
    along = None if whole or shapes.along is None else shapes.along[cells]
    bound = _rounding(imposed, shapes, cells, block.row.n_nodes)
    if errors.noise is not None:
        bound += np.minimum(
            shapes.reach[cells] * shapes.height[cells] * errors.noise[cells], _SINGLE / _EPS * bound
        )
    expected = imposed.expected(shapes.middle[cells], along)
    for name, exact in expected.items():
        values = found.arrays[name][cells].reshape(len(cells), -1)
        error = np.zeros(len(cells))
        for k in range(values.shape[1]):
            error = np.maximum(error, np.abs(values[:, k] - exact[:, k]))
        error[np.isnan(error)] = np.inf
        if name not in _LINEAR:  # rounding may turn such a cell inside out, and nothing follows from that
            error[bound > _UPSET] = 0.0
        _keep_worse(errors, cells, imposed.measures.index(name), error, _of_measure(name, bound, imposed))
    errors.exact[cells] = imposed.curvature is None or (shapes.straight[cells] & exact_at_middle(block.row))


def _rounding(imposed: ImposedField, shapes: CellShapes, rows: NDArray[np.int64], n_nodes: int) -> Floats:
    """Return what rounding can make of a component of the gradient `(m,)`.

    Notes
    -----
    Each nodal displacement is rounded to `eps |u|`, which the sum of the gradients of the shape functions carries into the
    gradient; the inverse Jacobian is rounded to eps times the condition of the cell. A node that is off its place in a
    straight cell by d changes the gradient of a quadratic by its second derivative times d times size over height.
    """
    far = np.linalg.norm(shapes.middle[rows], axis=1) + shapes.span[rows]
    span, reach = shapes.span[rows], shapes.reach[rows]
    G = float(np.linalg.norm(imposed.gradient))
    Q = 0.0 if imposed.curvature is None else float(np.linalg.norm(imposed.curvature))
    shift = (
        float(np.linalg.norm(imposed.shift)) if G or Q else 0.0
    )  # nodes that all move alike are rounded alike
    moved = shift + (G + 0.5 * Q * far) * far
    steep = G + Q * far
    bound: Floats = _EPS * (
        reach * (_DIGITS_U * moved + n_nodes * steep * span) + _DIGITS_H * shapes.condition[rows] * steep
    )
    if Q:
        bound += Q * (shapes.bent[rows] * (reach * span + 4.0) + _DIGITS_U * _EPS * far)
    return bound


def _of_measure(name: str, bound: Floats, imposed: ImposedField) -> Floats:
    """Return the bound of a measure from that of the gradient: small ones are linear in it, the others nearly."""
    if name in _LINEAR:
        return bound
    G = float(np.linalg.norm(imposed.gradient))
    return 4.0 * ((1.0 + G) ** 2 * bound + bound**2) + _FINITE * max(1.0, G * G)


def _keep_worse(errors: Errors, rows: NDArray[np.int64], number: int, error: Floats, bound: Floats) -> None:
    """Keep, cell by cell, the measure farthest beyond its bound; where none is beyond, that with the largest error."""
    before, limit = errors.error[rows], errors.bound[rows]
    beyond, was_beyond = error > bound, before > limit
    worse = np.where(beyond & was_beyond, error / bound > before / limit, error > before)
    worse = (worse & (beyond | ~was_beyond)) | (beyond & ~was_beyond) | np.isnan(limit)
    errors.error[rows] = np.where(worse, error, before)
    errors.bound[rows] = np.where(worse, bound, limit)
    errors.which[rows[worse]] = number


def blind(errors: Errors) -> NDArray[np.bool_]:
    """Return in which cells rounding alone may make so large an error that none would be evidence."""
    found: NDArray[np.bool_] = errors.bound > np.maximum(
        _BLIND, 0.01 * float(np.linalg.norm(errors.field.gradient))
    )
    return found if errors.noise is None else np.zeros(len(found), dtype=bool)
