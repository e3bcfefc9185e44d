"""Measures on the faces of solids from the faces' own nodes, as a mesh of its own and mapped back to the cells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.frames import surface_axes
from unturn.gradient import ElementChunk, Samples, chunk_ranges, over_chunks, sample_points
from unturn.kinematics._symmetric import Floats
from unturn.measures import SURFACE_AXES, VECTOR
from unturn.model import Model, ModelBlock
from unturn.numbering import element_numbers
from unturn.result import Array, Association, CellBlock, Result
from unturn.surface._faces import FaceBlock, Faces
from unturn.surface._measures import SURFACE_MEASURES, SurfaceMeasure, choose_surface_measures
from unturn.surface._split import BASES, SurfaceSplit
from unturn.verdict import Solve

_NO_AREA, _NOT_FINITE = "face without area", "displacement not finite"


@dataclass(frozen=True, eq=False)
class SurfaceFields:
    """Measures on faces.

    Parameters
    ----------
    result
        The surface mesh: the nodes of the faces, where the file has them, with their point arrays; for each face the
        arrays of its parent, ``parent_cell`` (file position), ``parent_face``, ``parent_element`` (the solver's number,
        where an array holds it), ``area``, the local axes ``surface_direction_1``, ``surface_direction_2`` and
        ``surface_normal`` (outward), the measures, and ``between_groups`` where such faces are among them. Ready for
        `unturn.write`.
    faces
        The faces, in the order of the cells of `result`.
    left_out
        ``{reason: file positions}`` of parents with a face that has no values.
    parent_arrays
        ``{array name: (n_cells,)}`` for the mesh of the solids: largest and smallest principal and largest equivalent
        value over the faces of each cell; NaN where a cell has none.
    governing
        `(n_cells,)` for each cell of the solids the face whose principal strain has the largest magnitude, the first of
        equal ones; -1 where it has none with values.
    """

    result: Result
    faces: Faces
    left_out: dict[str, NDArray[np.int64]] = field(default_factory=dict)
    parent_arrays: dict[str, Floats] = field(default_factory=dict)
    governing: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, dtype=np.int64))

    def on_cells(self) -> tuple[dict[str, Array], dict[str, tuple[str, ...]]]:
        """Return arrays `(n_cells, ...)` for the mesh of the solids, and the names of their components.

        The measures and axes of each cell's governing face, ``surface_face`` (its position in the parent's
        `Element.face_nodes`, -1 for none), and `parent_arrays`; NaN where a cell has no face.
        """
        faces = self.result.cell_data
        some = self.governing >= 0
        number = np.full(len(some), -1, dtype=np.int64)
        number[some] = faces["parent_face"][self.governing[some]]
        arrays: dict[str, Array] = {}
        for name in (*SURFACE_MEASURES, *SURFACE_AXES):
            if name in faces:
                arrays[name] = np.full((len(some), *faces[name].shape[1:]), np.nan)
                arrays[name][some] = faces[name][self.governing[some]]
        names = self.result.component_names
        components = {n: names["cell", n] for n in arrays if ("cell", n) in names}
        return {**arrays, **self.parent_arrays, "surface_face": number}, components


def surface_result(
    model: Model,
    faces: Faces,
    measures: Sequence[str] | None = None,
    *,
    base: str = "small",
    poisson: float | None = None,
    solve: Solve = "unknown",
    equivalent_poisson: float | None = None,
    peaks: bool = False,
    threads: int | None = None,
) -> SurfaceFields:
    """Return measures on faces from the displacement of each face's own nodes.

    Parameters
    ----------
    model
        The model the faces are of; rigid motion taken out of it does not count.
    faces
        See `free_faces`.
    measures
        Names as in `choose_surface_measures`; None for strain, rotation, principal strain and, with Poisson's ratio, the
        equivalent strain and the strain along the normal.
    base
        ``small``, ``green-lagrange``, ``hencky`` or ``biot``.
    poisson
        Poisson's ratio of the material: gives the strain along the normal, of a surface without load.
    solve
        Finite measures of a ``linear`` solve are refused.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain; None for `sqrt(2/3 e':e')`.
    peaks
        Also give, with the ending ``_peak``, the largest first and smallest second principal value and the largest
        equivalent value over the centroid and the quadrature points of each face.
    threads
        Number of threads; None for all processors.

    Notes
    -----
    Values are at the centroid of each face. The surface gradient is `sum_a u_a (x) grad_s N_a` with the shape functions
    of the face's own element. The local axes are those of `surface_axes`: 3 the outward normal, 1 the direction x laid
    into the face, or z where the normal is within 0.1 degree of x. Strain along the normal: `-nu/(1-nu) (e_1 + e_2)`
    (Timoshenko and Goodier, Theory of Elasticity, article 16), finite `ln l_n = -nu/(1-nu) (ln l_1 + ln l_2)`. The
    rotation is that of surface and normal.

    Raises
    ------
    UsageError
        A measure or base that is not known here or needs what is not given, a finite measure of a linear solve, or a
        Poisson's ratio out of range.
    """
    if poisson is not None and not -1.0 < poisson <= 0.5:
        raise UsageError(f"--poisson {poisson:g}: Poisson's ratio lies between -1 and 0.5.")
    names = choose_surface_measures(measures, base, poisson)
    finite = [n for n in names if SURFACE_MEASURES[n].finite]
    if finite and solve == "linear":
        raise UsageError(
            f"{finite[0]} of a geometrically linear solve is fiction: the solve itself used the small strain. Ask for the "
            "small measures, or state --solve nonlinear if it was."
        )
    job = _Job(replace(model, poisson=poisson), names, base, len(faces), poisson, equivalent_poisson, peaks)
    start = 0
    for block in faces.blocks:
        job.run(block, start, threads)
        start += len(block)
    parent = np.concatenate([b.parent for b in faces.blocks]) if len(faces) else np.zeros(0, dtype=np.int64)
    left_out = {
        reason: np.unique(parent[mask])
        for reason, mask in ((_NO_AREA, job.flat), (_NOT_FINITE, job.unknown))
        if mask.any()
    }
    result = _mesh(model, faces, parent, job)
    n_cells = model.result.n_cells
    return SurfaceFields(
        result, faces, left_out, _on_parents(job, parent, n_cells), _governing(job.size, parent, n_cells)
    )


class _Job:
    """The arrays being filled."""

    def __init__(
        self,
        model: Model,
        names: Sequence[str],
        base: str,
        n: int,
        poisson: float | None,
        equivalent_poisson: float | None,
        peaks: bool,
    ) -> None:
        self.model, self.poisson, self.equivalent_poisson = model, poisson, equivalent_poisson
        self.measures: list[SurfaceMeasure] = [SURFACE_MEASURES[name] for name in names]
        self.extremes = [m for m in self.measures if m.replaces in ("principal_strain", "equivalent_strain")]
        self.arrays: dict[str, Floats] = {
            "area": np.empty(n),
            **{name: np.empty((n, 3)) for name in SURFACE_AXES},
        }
        self.components: dict[str, tuple[str, ...]] = dict.fromkeys(SURFACE_AXES, VECTOR)
        peaked = self.extremes if peaks else []
        for name, m in [(m.name, m) for m in self.measures] + [(m.name + "_peak", m) for m in peaked]:
            self.arrays[name] = np.empty((n, len(m.components)) if m.components else n)
            if m.components:
                self.components[name] = m.components
        self.peaked = peaked
        bases = [m.base for m in self.measures if m.base in BASES] or [base.replace("-", "_")]
        self.base, self.size = bases[0], np.empty(n)
        self.flat, self.unknown = np.zeros(n, dtype=bool), np.zeros(n, dtype=bool)

    def run(self, block: FaceBlock, offset: int, threads: int | None) -> None:
        cells = CellBlock(block.row.name, block.connectivity, block.parent)
        as_model = ModelBlock(cells, block.row, "surface", np.arange(len(block)))
        place, rule = sample_points(block.row, "centroid"), sample_points(block.row, "mean")

        def work(start: int, stop: int) -> None:
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                chunk = self.model.chunk(as_model, block.connectivity[start:stop], block.parent[start:stop])
                self._chunk(chunk, place, rule, slice(offset + start, offset + stop))

        over_chunks(work, chunk_ranges(len(block), block.row.n_nodes), threads)

    def _chunk(self, chunk: ElementChunk, place: Samples, rule: Samples, rows: slice) -> None:
        split, _ = self._split(chunk, place, 0)
        for name, axis in zip(SURFACE_AXES, split.axes):
            self.arrays[name][rows] = axis.T
        self.size[rows] = np.abs(split.of_base(self.base).values).max(axis=0)
        for m in self.measures:
            self.arrays[m.name][rows] = m.compute(split).T
        for m in self.peaked:
            self.arrays[m.name + "_peak"][rows] = self.arrays[m.name][rows]
        area = np.zeros(len(chunk))
        for q, weight in enumerate(rule.weights):
            here, size = self._split(chunk, rule, q)
            area += weight * size
            for m in self.peaked:
                _widen(self.arrays[m.name + "_peak"][rows], m.compute(here).T)
        self.arrays["area"][rows] = area
        self.flat[rows] = ~np.isfinite(split.axes).all(axis=(0, 1))
        self.unknown[rows] = ~np.isfinite(split.H).all(axis=(0, 1)) & ~self.flat[rows]

    def _split(self, chunk: ElementChunk, samples: Samples, q: int) -> tuple[SurfaceSplit, Floats]:
        point = chunk.at(samples.gradients[q], samples.functions[q])
        assert point.tangents is not None
        moved = chunk.finite(point) if any(m.moves for m in self.measures) else None
        axes = surface_axes(point.tangents, len(chunk))
        return SurfaceSplit(point.H, axes, self.poisson, moved, self.equivalent_poisson), point.weight


def _widen(extreme: Floats, values: Floats) -> None:
    """Take up larger first (or only) and smaller second values."""
    if values.ndim == 1:
        np.fmax(extreme, values, out=extreme)
        return
    np.fmax(extreme[:, 0], values[:, 0], out=extreme[:, 0])
    np.fmin(extreme[:, 1], values[:, 1], out=extreme[:, 1])


def _governing(size: Floats, parent: NDArray[np.int64], n_cells: int) -> NDArray[np.int64]:
    """Return for each cell the face of the largest size, the first of equal ones; -1 for none."""
    found = np.full(n_cells, -1, dtype=np.int64)
    usable = np.flatnonzero(np.isfinite(size))
    order = usable[np.lexsort((-usable, size[usable]))]  # the last written stays
    found[parent[order]] = order
    return found


def _on_parents(job: _Job, parent: NDArray[np.int64], n_cells: int) -> dict[str, Floats]:
    """Return the extreme values over the faces of each cell."""
    found = {}
    for m in job.extremes:
        values = job.arrays.get(m.name + "_peak", job.arrays[m.name])
        columns = values.reshape(len(values), -1).T
        for take, ending, column in zip((np.fmax, np.fmin), ("_max", "_min"), columns):
            worst = np.full(n_cells, np.nan)
            take.at(worst, parent, column)
            found[m.name + ending] = worst
    return found


def _mesh(model: Model, faces: Faces, parent: NDArray[np.int64], job: _Job) -> Result:
    """Return the faces as a mesh with the arrays of their nodes and parents."""
    source = model.result
    if not len(faces):
        raise UsageError("there is no face to compute on: every cell that has a free face is left out.")
    used = np.zeros(source.n_points, dtype=bool)
    for block in faces.blocks:
        used[block.connectivity] = True
    new_number = np.cumsum(used) - 1
    numbering = element_numbers(source)
    own: dict[str, Array] = {
        "parent_cell": parent,
        "parent_face": np.concatenate([b.number for b in faces.blocks]),
    }
    if numbering is not None:
        own["parent_element"] = numbering.numbers[parent]
    between = np.concatenate([b.between for b in faces.blocks])
    if between.any():
        own["between_groups"] = between.astype(np.uint8)
    own.update(job.arrays)
    dropped = [n for n in source.cell_data if n in own]
    carried = {
        name: values[parent]
        for name, values in source.cell_data.items()
        if name not in own and (numbering is None or name != numbering.name)
    }
    component_names: dict[tuple[Association, str], tuple[str, ...]] = {
        key: names for key, names in source.component_names.items() if key[0] != "cell" or key[1] in carried
    }
    component_names.update({("cell", name): names for name, names in job.components.items()})
    return Result(
        points=source.points[used],
        blocks=_blocks(faces, new_number),
        point_data={name: values[used] for name, values in source.point_data.items()},
        cell_data={**carried, **own},
        field_data=source.field_data,
        groups=_groups(source, parent),
        component_names=component_names,
        path=source.path,
        point_dimension=3,
        notes=tuple(
            f"cell array {name!r} of the solids is not carried over: the surface has its own."
            for name in dropped
        ),
    )


def _blocks(faces: Faces, new_number: NDArray[np.int64]) -> tuple[CellBlock, ...]:
    """Return one block for each cell type and number of nodes."""
    kinds: dict[tuple[str, int], list[tuple[NDArray[np.int64], NDArray[np.int64]]]] = {}
    start = 0
    for block in faces.blocks:
        index = np.arange(start, start + len(block))
        start += len(block)
        kinds.setdefault((block.row.name, block.row.n_nodes), []).append(
            (new_number[block.connectivity], index)
        )
    return tuple(
        CellBlock(name, *(np.concatenate(part) for part in zip(*parts))) for (name, _), parts in kinds.items()
    )


def _groups(source: Result, parent: NDArray[np.int64]) -> dict[str, NDArray[np.int64]]:
    """Return for each group of cells the faces of its cells; groups without a face are left out."""
    found = {}
    for name, members in source.groups.items():
        inside = np.zeros(source.n_cells, dtype=bool)
        inside[members] = True
        faces = np.flatnonzero(inside[parent])
        if len(faces):
            found[name] = faces
    return found
