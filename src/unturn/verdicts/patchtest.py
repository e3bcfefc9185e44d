"""Known fields imposed on the user's own mesh, and the error that the tool makes on exactly this mesh."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.fields import compute_fields
from unturn.gradient import Plane
from unturn.model import Model, PlaneOptions, build_model
from unturn.numbering import Numbering, element_numbers
from unturn.regions import Region, find_regions, named_regions
from unturn.result import Result
from unturn.surface import free_faces
from unturn.verdicts.cell_shapes import CellShapes, cell_shapes, middle_and_size
from unturn.verdicts.finding import Place
from unturn.verdicts.imposed import ImposedField, imposed_fields
from unturn.verdicts.node_order import far_from_edges, joined_otherwise
from unturn.verdicts.patchtest_errors import NAME, Errors, errors_of, imposed_model
from unturn.verdicts.patchtest_places import FIELDS, Elsewhere, at_nodes, on_surface

AlsoAt = Literal["nodes", "surface"]

_SINGLE = (1e-30, 1e30)
"""Sizes of a mesh between which displacements of its size have all digits of single precision."""


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
    fields = imposed_fields(None if model.plane is None else model.plane.normal, size)
    slope = next(f.curvature for f in fields if f.curvature is not None)
    shapes = cell_shapes(model, slope, options.threads)
    active = np.zeros(result.n_cells, dtype=bool)
    for block in model.blocks:
        active[block.index] = block.row is not None
    errors: list[Errors] = []
    notes = []
    if not _SINGLE[0] < size < _SINGLE[1]:
        fields = [f for f in fields if not f.single]
        notes.append(f"a mesh of size {size:.3g} does not fit single precision: nothing was stored so")
    for imposed in fields:
        moved = imposed_model(model, imposed, origin)
        found = compute_fields(moved, imposed.measures, threads=options.threads, diagnose=imposed.single)
        computed = active.copy()
        computed[np.concatenate([[], *found.left_out.values()]).astype(np.int64)] = False
        _require_some(result, computed, found.left_out)
        errors.append(errors_of(found, imposed, shapes, computed, options.threads))
    named = options.regions
    regions = named_regions(model, named, active) if named else find_regions(model, active)
    elsewhere, why_not = _elsewhere(result, model, fields, regions, shapes, options)
    return PatchTest(
        model, shapes, far_from_edges(model), joined_otherwise(model), _groups(model, regions), tuple(errors), found.left_out,
        computed, element_numbers(result), tuple(regions), tuple(elsewhere), (*found.notes, *notes, *why_not),
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
        "nodes": kinds <= {"solid", "plane"}
        or "at nodes: not looked at, the mesh has surfaces or lines in space",
        "surface": "solid" in kinds or "on free faces: not looked at, the mesh has no solids",
    }
    found: list[Elsewhere] = []
    origin = shapes.origin
    faces = (
        free_faces(model, threads=options.threads) if "surface" in options.at and "solid" in kinds else None
    )
    if faces is not None and not len(faces):
        wanted["surface"] = "on free faces: not looked at, the solids have none with an area"
    for imposed in (f for f in fields if f.name in FIELDS):
        moved = imposed_model(model, imposed, origin)
        if "nodes" in options.at and wanted["nodes"] is True:
            found += at_nodes(moved, imposed, regions, origin, shapes.change, result, options.threads)
        if faces is not None and wanted["surface"] is True:
            found += on_surface(
                replace(faces, model=moved), imposed, origin, shapes.change, result, options.threads
            )
    return found, [why for place, why in wanted.items() if place in options.at and isinstance(why, str)]


def _model(result: Result, options: PatchTestOptions) -> Model:
    """Return the mesh as a model at rest; a plane mesh counts as plane strain."""
    at_rest = replace(result, point_data={NAME: np.zeros((result.n_points, 3))})
    model = build_model(
        at_rest, displacement=NAME, plane=PlaneOptions(), skin=options.skin, alive=options.alive
    )
    if model.plane is None:
        return model
    return replace(model, plane=Plane(model.plane.normal, "strain"))


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
