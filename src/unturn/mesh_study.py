"""A mesh-refinement study: named quantities on three meshes of one part."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from unturn.errors import UnturnError
from unturn.fields import CellFields
from unturn.pipeline import StrainOptions, compute
from unturn.quantities import Found, find_quantity
from unturn.quantity_text import Quantity
from unturn.refinement import DECIDED, SMALL_RATIO, Study, Three, check_refinement, study
from unturn.result import Result
from unturn.summary import cell_counts, mesh_kind

LEVELS = ("coarse", "medium", "fine")
_OTHER_PART = 0.02  # share by which the volumes of one part may differ between its meshes
_LOW_ORDER = 0.5


def study_meshes(
    meshes: Sequence[Callable[[], Result]], quantities: Sequence[Quantity], options: StrainOptions
) -> Refinement:
    """Return the studies of quantities on three meshes; one mesh is in memory at a time.

    Parameters
    ----------
    meshes
        Each reads a result: coarse, medium, fine.
    quantities
        See `parse_quantity`.
    options
        Of every mesh; `measures` are those of the quantities.

    Raises
    ------
    UsageError
        Options, a region or a point that do not fit a mesh, which is named, or meshes that do not get finer.
    InputError
        A mesh that cannot be used.
    """
    asked = replace(options, measures=sorted({q.measure.name for q in quantities}))
    sizes, by_mesh = [], []
    for level, read in zip(LEVELS, meshes):
        try:
            fields = compute(read(), asked, diagnose=True).fields
            sizes.append(mesh_size(fields))
            by_mesh.append([find_quantity(q, fields, options.equivalent_poisson) for q in quantities])
        except UnturnError as error:
            raise type(error)(f"{level} mesh: {error}") from error
    return refinement(sizes, quantities, list(zip(*by_mesh)))


@dataclass(frozen=True)
class MeshSize:
    """One mesh of a study: file, cells that are computed, their volume, representative size, what they are."""

    path: str
    cells: int
    volume: float
    size: float
    types: dict[str, int]
    kind: str
    order: int


def mesh_size(fields: CellFields) -> MeshSize:
    """Return the size of a mesh: `(volume / cells)^(1/dim)` of its cells of the highest dimension.

    Parameters
    ----------
    fields
        Computed with ``diagnose=True``.
    """
    d, model = fields.diagnostics, fields.model
    assert d is not None
    counted = (d.dimension == model.dimension) & np.isfinite(d.volume)
    volume, n = float(d.volume[counted].sum()), int(counted.sum())
    size = (volume / n) ** (1.0 / model.dimension) if n else math.nan
    orders = [b.row.order for b in model.blocks if b.row is not None and b.row.dim == model.dimension]
    return MeshSize(model.result.path, n, volume, size, cell_counts(model), mesh_kind(model), min(orders))


@dataclass(frozen=True, eq=False)
class Refinement:
    """Three meshes, coarse first, and each quantity on them."""

    meshes: tuple[MeshSize, ...]
    quantities: tuple[Quantity, ...]
    found: tuple[tuple[Found, ...], ...]  # by quantity
    studies: tuple[Study, ...]
    notes: tuple[str, ...]

    @property
    def undecided(self) -> int:
        """How many quantities have no order."""
        return sum(s.behaviour not in DECIDED for s in self.studies)


def refinement(
    meshes: Sequence[MeshSize], quantities: Sequence[Quantity], found: Sequence[Sequence[Found]]
) -> Refinement:
    """Return the studies of quantities on three meshes.

    Raises
    ------
    UsageError
        The meshes do not get finer.
    """
    sizes = _three([m.size for m in meshes])
    ratios = check_refinement(sizes)
    notes = []
    if min(ratios) < SMALL_RATIO:
        notes.append(
            f"the meshes differ in size by a factor of {min(ratios):.3g} only; below {SMALL_RATIO} the index says little"
        )
    volumes = [m.volume for m in meshes]
    if max(volumes) - min(volumes) > _OTHER_PART * max(volumes):
        notes.append(
            f"the meshes have volumes of {', '.join(f'{v:.6g}' for v in volumes)}: is it the same part?"
        )
    if len({tuple(m.types) for m in meshes}) > 1:
        notes.append("the meshes have different types of elements: an order belongs to one type")
    studies = tuple(study(_three([m.value for m in f]), sizes, _three([m.floor for m in f])) for f in found)
    order = min(m.order for m in meshes)
    for q, s in zip(quantities, studies):
        if not _LOW_ORDER <= s.order <= order + 1.5 and s.behaviour == "converges":
            notes.append(
                f"{q.text}: an order of {s.order:.3g} is far from the {order} to {order + 1} of these elements, so its index "
                "is doubtful: refine once more"
            )
    return Refinement(tuple(meshes), tuple(quantities), tuple(map(tuple, found)), studies, tuple(notes))


def _three(values: Sequence[float]) -> Three:
    coarse, medium, fine = values
    return coarse, medium, fine
