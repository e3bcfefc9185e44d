"""Measures at every quadrature point of every element, as a cloud of points beside the mesh."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.fields import (
    _OK,
    _REASONS,
    _TANGLED,
    _Job,
    _same_side,
    check_request,
    fill_measures,
    mean_free_strain,
    with_thermal_thickness,
)
from unturn.frames import Frame, surface_axes
from unturn.gradient import ElementChunk, Samples, chunk_ranges, over_chunks, sample_points
from unturn.kinematics._symmetric import Floats
from unturn.measures import GEOMETRY, MEASURES, SURFACE_AXES, VECTOR, Split, choose_measures
from unturn.model import Model, ModelBlock
from unturn.numbering import element_numbers
from unturn.point_gradient import PointGradient
from unturn.result import Array, Association, CellBlock, Result
from unturn.thermal import Thermal

Ints = NDArray[np.int64]


def quadrature_result(
    model: Model,
    measures: Sequence[str] | None = None,
    *,
    base: str = "small",
    frame: Frame | None = None,
    equivalent_poisson: float | None = None,
    thermal: Thermal | None = None,
    threads: int | None = None,
) -> Result:
    """Return measures at the quadrature points of the computed cells, as a result whose cells are vertices.

    Parameters
    ----------
    model
        See `build_model`.
    measures, base, frame, equivalent_poisson, thermal
        As in `compute_fields`; measures of the mesh alone have no value at a point and are not among ``all``.
    threads
        Number of threads; None for all processors.

    Returns
    -------
    Result
        Points: reference coordinates, the points of a cell one after another, cells in file order. Point arrays:
        ``cell`` (file position), ``element`` (the solver's number, where an array holds it), ``quadrature_point`` (number
        within the cell), ``dimension`` of the cell, ``deformed_coordinates`` (with the displacement of the file, whatever
        rigid motion was taken out), ``weight`` and the measures. `left_out` holds the points without values, by reason.

    Notes
    -----
    The points are those of each element's default rule. Weight: that of the rule times the Jacobian determinant, without
    sign; times `2 pi r` where axisymmetric. The weights of a cell add up to its volume, area or length, and the mean of a
    small measure that is linear in the gradient, with these weights, is its value with ``at="mean"``.

    Raises
    ------
    UsageError
        A measure that is not known, is of the mesh alone, or depends on the unstated third direction of a plane mesh.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result
    >>> from unturn.model import build_model
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> cloud = quadrature_result(build_model(Result(points, (block,), {"u": points * 1e-3})))
    >>> cloud.n_points, round(float(cloud.point_data["weight"].sum()), 4)
    (1, 0.1667)
    """
    names = _names(measures, base, thermal is not None)
    check_request(model, names, frame, thermal)
    job = _Cloud(model, names, frame, equivalent_poisson, thermal)
    for block in model.blocks:
        if block.row is not None and len(block.active):
            job.run(block, threads)
    return job.finish()


def _names(measures: Sequence[str] | None, base: str, mechanical: bool) -> tuple[str, ...]:
    for name in measures or ():
        if name in GEOMETRY:
            raise UsageError(
                f"{name} belongs to a cell, not to a point of it: leave it out at the quadrature points, where 'weight' "
                "is the share of each point in the volume."
            )
    return tuple(n for n in choose_measures(measures, base, mechanical) if n not in GEOMETRY)


class _Cloud:
    """The arrays being filled."""

    def __init__(
        self,
        model: Model,
        names: Sequence[str],
        frame: Frame | None,
        equivalent_poisson: float | None,
        thermal: Thermal | None,
    ) -> None:
        self.model, self.frame, self.thermal = model, frame, thermal
        self.equivalent_poisson = equivalent_poisson
        self.measures = [MEASURES[n] for n in names if n in MEASURES]
        self.directions = any(m.directions for m in self.measures)
        self.needs_finite = "small_strain_error" in names or any(m.finite for m in self.measures)
        count = np.zeros(model.result.n_cells, dtype=np.int64)
        self.dimension = np.zeros(model.result.n_cells, dtype=np.int8)
        for block in model.blocks:
            if block.row is not None:
                count[block.index] = len(block.row.quadrature)
                self.dimension[block.index] = block.row.dim
        self.starts = np.cumsum(count) - count
        self.cell = np.repeat(np.arange(len(count)), count)
        n = len(self.cell)
        self.points, self.deformed, self.weight = np.empty((n, 3)), np.empty((n, 3)), np.empty(n)
        self.status = np.zeros(n, dtype=np.uint8)
        self.arrays: dict[str, Floats] = {
            m.name: np.empty((n, len(m.components)) if m.components else n) for m in self.measures
        }
        self.arrays.update({name: np.empty((n, 3)) for name in names if name in SURFACE_AXES})

    def run(self, block: ModelBlock, threads: int | None) -> None:
        assert block.row is not None
        connectivity, index = block.connectivity, block.index
        place, rule = sample_points(block.row, "centroid"), sample_points(block.row, "mean")

        def work(start: int, stop: int) -> None:
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                self._chunk(block, connectivity[start:stop], index[start:stop], place, rule)

        over_chunks(work, chunk_ranges(len(index), connectivity.shape[1]), threads)

    def _chunk(
        self, block: ModelBlock, connectivity: Ints, index: Ints, place: Samples, rule: Samples
    ) -> None:
        chunk = self.model.chunk(block, connectivity, index)
        status = self._status(chunk, place, rule)
        stored = chunk
        if self.model.back is not None:
            stored = ElementChunk(self.model.fields, connectivity, chunk.row, self.model.plane)
        for q, weight in enumerate(rule.weights):
            rows = self.starts[index] + q
            here = Samples(rule.functions[q : q + 1], rule.gradients[q : q + 1], np.ones(1), rule.center)
            for i in range(3):
                self.points[rows, i] = chunk.interpolate(here.functions[0], i)
                moved = stored.interpolate(here.functions[0], 3 + i)
                self.deformed[rows, i] = self.points[rows, i] + moved
            point = chunk.at(here.gradients[0], here.functions[0])
            self.weight[rows] = weight * point.weight
            if status is not None:
                self.weight[rows] = np.where(status == _TANGLED, np.nan, self.weight[rows])
                self.status[rows] = status
            self._measure(chunk, here, point, status, connectivity, index, rows)

    def _status(self, chunk: ElementChunk, place: Samples, rule: Samples) -> NDArray[np.uint8] | None:
        """Return the code of each cell as `compute_fields` has it, or None when all are sound."""
        middle = chunk.at(place.gradients[0], place.functions[0])
        low, high = np.full(len(chunk), np.inf), np.full(len(chunk), -np.inf)
        for gradients, functions in zip(rule.gradients, rule.functions):
            if chunk.row.dim == 3:
                det = chunk.measure(gradients)
            else:
                here = chunk.at(gradients, functions)
                det = here.measure * _same_side(middle, here)
            low, high = np.minimum(low, det), np.maximum(high, det)
        return _Job._status(chunk, middle, low, high)

    def _measure(
        self,
        chunk: ElementChunk,
        here: Samples,
        point: PointGradient,
        status: NDArray[np.uint8] | None,
        connectivity: Ints,
        index: Ints,
        rows: Ints,
    ) -> None:
        H = point.H
        finite = None
        if self.needs_finite:
            finite = chunk.finite(point) if chunk.row.dim < 3 else H
        if status is not None:
            for gradient in (H, finite):
                if gradient is not None:
                    gradient[:, :, status != _OK] = np.nan
        axes = self._axes(chunk, point, index, rows)
        free = None
        if self.thermal is not None:
            free = mean_free_strain(self.thermal, chunk, here, index, connectivity, axes)
            H = with_thermal_thickness(H, free, self.model.plane)
        split = Split(H, self.equivalent_poisson, self.directions, finite, free)
        fill_measures(self.arrays, rows, self.measures, split, axes)

    def _axes(self, chunk: ElementChunk, point: PointGradient, index: Ints, rows: Ints) -> Floats | None:
        """Return the axes of the frame, and fill the arrays of those of the surface."""
        for k, name in enumerate(SURFACE_AXES):
            if name in self.arrays:
                self.arrays[name][rows] = surface_axes(point.tangents, len(chunk))[k].T
        if self.frame is None:
            return None
        return self.frame.axes(np.ascontiguousarray(self.points[rows].T), index, point.tangents)

    def finish(self) -> Result:
        source = self.model.result
        numbering, n = element_numbers(source), len(self.cell)
        data: dict[str, Array] = {
            "cell": self.cell,
            "quadrature_point": np.arange(n) - self.starts[self.cell],
            "dimension": self.dimension[self.cell],
            "deformed_coordinates": self.deformed,
            "weight": self.weight,
        }
        if numbering is not None:
            data["element"] = numbering.numbers[self.cell]
        names: dict[tuple[Association, str], tuple[str, ...]] = {("point", "deformed_coordinates"): VECTOR}
        for m in self.measures:
            if m.components:
                own = (
                    self.frame.component_names(len(m.components)) if self.frame and m.turns else m.components
                )
                names["point", m.name] = own
        names.update({("point", name): VECTOR for name in SURFACE_AXES if name in self.arrays})
        return Result(
            points=self.points,
            blocks=(CellBlock("vertex", np.arange(n)[:, None], np.arange(n)),),
            point_data={**data, **self.arrays},
            component_names=names,
            path=source.path,
            left_out={
                reason: np.flatnonzero(self.status == code)
                for code, reason in _REASONS.items()
                if (self.status == code).any()
            },
        )
