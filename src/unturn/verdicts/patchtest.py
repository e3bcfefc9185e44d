"""Known fields imposed on the user's own mesh, and the error that the tool makes on exactly this mesh."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.displacement import Displacement
from unturn.errors import InputError
from unturn.fields import CellFields, compute_fields
from unturn.gradient import NodalFields, Plane, over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock, PlaneOptions, build_model
from unturn.numbering import Numbering, element_numbers
from unturn.regions import Region, find_regions, named_regions
from unturn.result import Result
from unturn.verdicts.cell_shapes import (
    CellShapes,
    cell_shapes,
    exact_at_middle,
    middle_and_size,
)
from unturn.verdicts.finding import Place
from unturn.verdicts.imposed import ImposedField, imposed_fields
from unturn.verdicts.node_order import far_from_edges, joined_otherwise
from unturn.verdicts.patchtest_places import FIELDS, Elsewhere, at_nodes, on_surface

AlsoAt = Literal["nodes", "surface"]

_CHUNK = 16384
_NAME = "imposed displacement"
_EPS, _SINGLE = 2.0**-53, 2.0**-24
_DIGITS_U = 8.0  # roundings of an imposed displacement, each of half a digit of its size
_DIGITS_H = 24.0  # roundings of a gradient, each of half a digit times the condition of the cell
_FINITE = 4e-15  # absolute rounding of finite measures, times max(1, |H|^2)
_BLIND = 1e-5
"""Strain that rounding alone may make in a cell, above which an error is no evidence."""


@dataclass(frozen=True)
class PatchTestOptions:
    """Regions by name (none: those of the mesh), where else than at centroids, and what counts as computed."""

    regions: tuple[str, ...] = ()
    at: tuple[AlsoAt, ...] = ()
    skin: bool = False
    alive: str | None = None
    threads: int | None = None


@dataclass(frozen=True, eq=False)
class Group:
    """Cells of one type in one region: zero-based file positions of all that are to be computed."""

    cell_type: str
    region: str
    cells: NDArray[np.int64]


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


@dataclass(frozen=True, eq=False)
class PatchTest:
    """What was found on a mesh.

    Attributes
    ----------
    model
        The mesh as it was computed; its displacement is zero.
    shapes
        Geometry of its cells.
    far, joined
        `(n_cells,)` cells with nodes far from their edges, and cells with an edge that is a diagonal of a neighbour.
    groups
        Cells by type and region.
    errors
        One entry for each field that was imposed, in the order of the table.
    left_out
        ``{reason: file positions}``, as `compute_fields` gives them.
    computed
        `(n_cells,)` mask.
    numbers
        The solver's element numbers, where an array holds them.
    regions
        The parts that are told apart.
    elsewhere
        What was found away from the middle of cells, where it was asked for.
    notes
        Sentences for the user.
    """

    model: Model
    shapes: CellShapes
    far: NDArray[np.bool_]
    joined: NDArray[np.bool_]
    groups: tuple[Group, ...]
    errors: tuple[Errors, ...]
    left_out: dict[str, NDArray[np.int64]]
    computed: NDArray[np.bool_]
    numbers: Numbering | None
    regions: tuple[Region, ...]
    elsewhere: tuple[Elsewhere, ...]
    notes: tuple[str, ...]

    def place(self, cell: int) -> Place:
        """Return where a cell is: positions and coordinates of its middle."""
        at = self.shapes.middle[cell] + self.shapes.origin
        place = Place(cell=cell, at=(float(at[0]), float(at[1]), float(at[2])))
        if self.numbers is not None:
            place["element"] = int(self.numbers.numbers[cell])
        return place


def patch_test(result: Result, options: PatchTestOptions | None = None) -> PatchTest:
    """Return the errors that the tool makes of known fields on the mesh of a result.

    Parameters
    ----------
    result
        Any result; only its mesh counts, not its displacement.
    options
        See `PatchTestOptions`.

    Raises
    ------
    InputError
        No element that can be computed, or a node order that cannot be right.
    UsageError
        A region that does not exist.
    """
    options = options or PatchTestOptions()
    model = _model(result, options)
    origin, size = middle_and_size(model)
    normal = None if model.plane is None else model.plane.normal
    fields = imposed_fields(normal, size)
    slope = next(f.curvature for f in fields if f.curvature is not None)
    shapes = cell_shapes(model, slope, options.threads)
    active = np.zeros(result.n_cells, dtype=bool)
    for block in model.blocks:
        active[block.index] = block.row is not None
    errors: list[Errors] = []
    left_out: dict[str, NDArray[np.int64]] = dict(model.left_out)
    computed = active
    for imposed in fields:
        found = compute_fields(
            imposed_model(model, imposed, origin), imposed.measures, threads=options.threads, diagnose=imposed.single
        )  # fmt: skip
        if not errors:
            left_out, computed = found.left_out, active.copy()
            for cells in found.left_out.values():
                computed[cells] = False
            _require_some(result, computed, left_out)
        errors.append(_errors(found, imposed, shapes, computed, options.threads))
    regions = named_regions(model, options.regions, active) if options.regions else find_regions(model, active)
    elsewhere, notes = _elsewhere(result, model, fields, regions, shapes, options)
    return PatchTest(
        model, shapes, far_from_edges(model), joined_otherwise(model), _groups(model, regions), tuple(errors), left_out, computed, element_numbers(result), tuple(regions),
        tuple(elsewhere), (*found.notes, *notes),
    )  # fmt: skip


def _elsewhere(
    result: Result,
    model: Model,
    fields: Sequence[ImposedField],
    regions: Sequence[Region],
    shapes: CellShapes,
    options: PatchTestOptions,
) -> tuple[list[Elsewhere], list[str]]:
    """Return what was found at the other places that were asked for, and why it was not at some."""
    kinds = {b.kind for b in model.blocks if b.row is not None and len(b.active)}
    wanted = {
        "nodes": kinds <= {"solid", "plane"} or "at nodes: not looked at, the mesh has surfaces or lines in space",
        "surface": "solid" in kinds or "on free faces: not looked at, the mesh has no solids",
    }
    found: list[Elsewhere] = []
    origin = shapes.origin
    for imposed in (f for f in fields if f.name in FIELDS):
        moved = imposed_model(model, imposed, origin)
        if "nodes" in options.at and wanted["nodes"] is True:
            found += at_nodes(moved, imposed, regions, origin, shapes.change, result, options.threads)
        if "surface" in options.at and wanted["surface"] is True:
            found += on_surface(moved, imposed, origin, shapes.change, result, options.threads)
    return found, [why for place, why in wanted.items() if place in options.at and isinstance(why, str)]


def _model(result: Result, options: PatchTestOptions) -> Model:
    """Return the mesh as a model at rest; a plane mesh counts as plane strain."""
    at_rest = replace(result, point_data={_NAME: np.zeros((result.n_points, 3))})
    model = build_model(
        at_rest, displacement=_NAME, plane=PlaneOptions(), skin=options.skin, alive=options.alive
    )
    if model.plane is None:
        return model
    return replace(model, plane=Plane(model.plane.normal, "strain"))


def imposed_model(model: Model, imposed: ImposedField, origin: Floats) -> Model:
    """Return the model with an imposed displacement in the place of its own."""
    x = model.points - origin
    x = np.where(np.isfinite(x).all(axis=1, keepdims=True), x, 0.0)
    stored = imposed.displacement(x)
    values = stored.astype(np.float64)
    displacement = Displacement(_NAME, values, (stored,), "imposed", ())
    return replace(model, displacement=displacement, fields=NodalFields(model.points, values))


def _require_some(
    result: Result, computed: NDArray[np.bool_], left_out: dict[str, NDArray[np.int64]]
) -> None:
    if not computed.any():
        reasons = ", ".join(f"{len(cells)} {reason}" for reason, cells in left_out.items())
        raise InputError(
            f"{result.path + ': ' if result.path else ''}no cell could be computed: {reasons}. Look at the mesh with "
            "'unturn survey'."
        )


def _groups(model: Model, regions: Sequence[Region]) -> tuple[Group, ...]:
    of_type: dict[str, list[NDArray[np.int64]]] = {}
    for block in model.blocks:
        if block.row is not None and len(block.active):
            name = block.cells.cell_type
            if name.startswith("VTK_LAGRANGE"):
                name += f" of order {block.row.order}"
            of_type.setdefault(name, []).append(block.index)
    groups = []
    for name, parts in of_type.items():
        mask = np.zeros(model.result.n_cells, dtype=bool)
        mask[np.concatenate(parts)] = True
        for region in regions:
            cells = region.cells[mask[region.cells]]
            if len(cells):
                groups.append(Group(name, region.name, cells))
    return tuple(groups)


def _errors(
    found: CellFields,
    imposed: ImposedField,
    shapes: CellShapes,
    computed: NDArray[np.bool_],
    threads: int | None,
) -> Errors:
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
    assert block.row is not None
    imposed, cells = errors.field, rows[start:stop]
    whole = block.kind in ("solid", "plane")
    along = None if whole or shapes.along is None else shapes.along[cells]
    bound = _rounding(imposed, shapes, cells, block.row.n_nodes)
    if errors.noise is not None:
        bound += np.minimum(shapes.reach[cells] * shapes.height[cells] * errors.noise[cells], _SINGLE / _EPS * bound)
    expected = imposed.expected(shapes.middle[cells], along)
    for number, (name, exact) in enumerate(expected.items()):
        values = found.arrays[name][cells].reshape(len(cells), -1)
        error = np.zeros(len(cells))
        for k in range(values.shape[1]):
            error = np.maximum(error, np.abs(values[:, k] - exact[:, k]))
        error[np.isnan(error)] = np.inf
        _keep_worse(errors, cells, number, error, _of_measure(name, bound, imposed))
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
    moved = float(np.linalg.norm(imposed.shift)) + (G + 0.5 * Q * far) * far
    steep = G + Q * far
    bound: Floats = _EPS * (
        reach * (_DIGITS_U * moved + n_nodes * steep * span) + _DIGITS_H * shapes.condition[rows] * steep
    )
    if Q:
        bound += Q * (shapes.bent[rows] * (reach * span + 4.0) + _DIGITS_U * _EPS * far)
    return bound


def _of_measure(name: str, bound: Floats, imposed: ImposedField) -> Floats:
    """Return the bound of a measure from that of the gradient: small ones are linear in it, the others nearly."""
    if name in ("strain", "rotation"):
        return bound
    G = float(np.linalg.norm(imposed.gradient))
    return 4.0 * (1.0 + G) ** 2 * bound + _FINITE * max(1.0, G * G)


def _keep_worse(errors: Errors, rows: NDArray[np.int64], number: int, error: Floats, bound: Floats) -> None:
    """Keep, cell by cell, the measure farthest beyond its bound; where none is beyond, that with the largest error."""
    before, limit = errors.error[rows], errors.bound[rows]
    beyond, was_beyond = error > bound, before > limit
    with np.errstate(invalid="ignore", divide="ignore"):
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
