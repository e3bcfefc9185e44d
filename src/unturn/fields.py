"""Measures on every cell of a model, and what is needed to judge them: volume, turning, noise floor."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.frames import Frame, surface_axes, turned_components
from unturn.gradient import (
    ElementChunk,
    Plane,
    Samples,
    chunk_ranges,
    mean_gradient,
    over_chunks,
    sample_points,
)
from unturn.kinematics._motion import relative_volume_change
from unturn.kinematics._symmetric import Floats, full_from_six, six_from_full
from unturn.kinematics._turning import Turning
from unturn.measures import GEOMETRY, MEASURES, SURFACE_AXES, VECTOR, Measure, Split, choose_measures
from unturn.model import Model, ModelBlock
from unturn.point_gradient import PointGradient
from unturn.precision import MEANT_DISPLACEMENT, storage_resolution
from unturn.thermal import Thermal

Location = Literal["centroid", "mean"]
LOCATIONS: tuple[Location, ...] = ("centroid", "mean")


@dataclass(eq=False)
class CellDiagnostics:
    """What the verdict and the summary need of every cell, `(n_cells,)` each, file order; NaN where not computed.

    Attributes
    ----------
    volume
        Weight of the cell: reference volume, area or length; `2 pi r` times the area where axisymmetric.
    error, stretch, angle
        See `unturn.kinematics._turning.Turning`.
    noise
        Floor of the strain from the storage resolution.
    det_f
        Determinant of `F = I + H`; not above zero where the displacement turns the element inside out.
    principal
        `(n_cells, 2)` largest and smallest principal strain.
    stretches
        `(n_cells, 2)` largest and smallest stretch; only with finite measures, else NaN.
    centroid
        `(n_cells, 3)`.
    dimension
        0 where the cell is not computed.
    """

    volume: Floats
    error: Floats
    stretch: Floats
    angle: Floats
    noise: Floats
    det_f: Floats
    principal: Floats
    stretches: Floats
    centroid: Floats
    dimension: NDArray[np.int8]


@dataclass(eq=False)
class CellFields:
    """Measures on the cells of a model.

    Attributes
    ----------
    model
        The model they were computed on.
    arrays
        Measure name -> `(n_cells,)` or `(n_cells, components)` float64 in file order; NaN where not computed.
    components
        Measure name -> names of its components, in the frame that was asked for; scalars are not in it.
    left_out
        ``{reason: file positions}``, the model's and those found on the way: tangled, without volume, not finite.
    mirrored
        Number of cells whose Jacobian is negative everywhere (their gradient is right).
    diagnostics
        Set when asked for.
    """

    model: Model
    arrays: dict[str, Floats]
    components: dict[str, tuple[str, ...]] = field(default_factory=dict)
    left_out: dict[str, NDArray[np.int64]] = field(default_factory=dict)
    mirrored: int = 0
    diagnostics: CellDiagnostics | None = None

    @property
    def notes(self) -> tuple[str, ...]:
        """Sentences for the user: the model's, and what was found on the way."""
        if not self.mirrored:
            return self.model.notes
        mirrored = f"{self.mirrored} solids are numbered the other way round (negative Jacobian everywhere)"
        return (*self.model.notes, f"{mirrored}; their gradient is right")


def compute_fields(
    model: Model,
    measures: Sequence[str] | None = None,
    *,
    base: str = "small",
    at: Location = "centroid",
    equivalent_poisson: float | None = None,
    frame: Frame | None = None,
    thermal: Thermal | None = None,
    threads: int | None = None,
    diagnose: bool = False,
) -> CellFields:
    """Return measures on the cells of a model.

    Parameters
    ----------
    model
        See `build_model`.
    measures
        Array names; None for the default set.
    base
        ``small``, or ``green-lagrange``, ``hencky``, ``biot``, ``almansi``: the small measures are then replaced by
        their counterparts of that base.
    at
        ``centroid``, or ``mean``: the volume mean of the gradient, from which the rest is derived.
    equivalent_poisson
        Effective Poisson ratio of the equivalent strain; None for `sqrt(2/3 e':e')`.
    frame
        Frame of the components; None for the axes of the file.
    thermal
        Free thermal strain to take out of the mechanical strain.
    threads
        Number of threads; None for all processors.
    diagnose
        Also return what verdict and summary need.

    Raises
    ------
    UsageError
        A measure that depends on the unstated third direction of a plane mesh.
    """
    names = choose_measures(measures, base, mechanical=thermal is not None)
    if at not in LOCATIONS:
        raise UsageError(f"at={at!r} is not known; use one of {', '.join(LOCATIONS)}.")
    check_request(model, names, frame, thermal)
    if thermal is not None:
        model = replace(model, notes=(*model.notes, *thermal.notes))
    job = _Job(model, names, at, equivalent_poisson, diagnose, frame, thermal)
    for block in model.blocks:
        if block.row is not None and len(block.active):
            job.run(block, threads)
    return job.finish()


def check_request(
    model: Model, names: Sequence[str], frame: Frame | None = None, thermal: Thermal | None = None
) -> None:
    """Raise `UsageError` when the mesh cannot give measures, a frame or a free thermal strain."""
    _check_third_direction(model, names)
    _check_surface(model, names, frame)
    if (
        thermal is not None
        and not thermal.isotropic
        and model.plane is not None
        and model.plane.model == "stress"
    ):
        raise UsageError(
            "plane stress with an expansion that differs by direction is not supported: the strain across the plane "
            "would need the elastic constants."
        )


def _check_third_direction(model: Model, names: Sequence[str]) -> None:
    if model.plane is None or model.plane.model is not None:
        return
    bound = [n for n in names if n in MEASURES and MEASURES[n].needs_third]
    asked = [n for n in bound if not MEASURES[n].directions]
    bound = asked or bound  # directions may be computed for the values alone
    if bound:
        raise UsageError(
            f"{model.result.path + ': ' if model.result.path else ''}the mesh is plane, and {', '.join(bound)} "
            f"depend{'s' * (len(bound) == 1)} on the strain across the plane, which the displacement does not hold: "
            "state it with --plane strain, --plane stress --poisson NU or --plane axisymmetric, or ask for in-plane measures "
            "only (--measures strain,rotation)."
        )


def _check_surface(model: Model, names: Sequence[str], frame: Frame | None) -> None:
    asked = "--frame surface" if frame is not None and frame.surface else ""
    asked = asked or next((n for n in names if n in SURFACE_AXES), "")
    if asked and not any(b.row is not None and b.row.dim == 2 and len(b.active) for b in model.blocks):
        raise UsageError(
            f"{asked} needs surface cells; this mesh has none that are computed (--skin computes skins)."
        )


_OK, _NOT_FINITE, _FLAT, _TANGLED, _NOWHERE = range(5)
_REASONS = {
    _NOT_FINITE: "displacement not finite",
    _NOWHERE: "coordinates not finite",
    _FLAT: "no volume",
    _TANGLED: "tangled",
}

_ALONG = 1e-9  # component of an axis below which it lies in the plane


class _Job:
    """The arrays being filled."""

    def __init__(
        self,
        model: Model,
        names: Sequence[str],
        at: Location,
        poisson: float | None,
        diagnose: bool,
        frame: Frame | None,
        thermal: Thermal | None,
    ) -> None:
        self.model, self.at, self.poisson = model, at, poisson
        self.frame, self.thermal = frame, thermal
        self.measures: list[Measure] = [MEASURES[n] for n in names if n in MEASURES]
        self.directions = any(m.directions for m in self.measures)
        self.needs_finite = diagnose or "small_strain_error" in names or any(m.finite for m in self.measures)
        n = model.result.n_cells
        whole = all(len(b.active) == len(b.cells) for b in model.blocks)
        self.arrays: dict[str, Floats] = {}
        for name in names:
            components = len(MEASURES[name].components) if name in MEASURES else 3 * (name in SURFACE_AXES)
            shape = (n, components) if components else (n,)
            self.arrays[name] = np.empty(shape) if whole else np.full(shape, np.nan)
        self.status = np.zeros(n, dtype=np.uint8)
        self.mirrored = np.zeros(n, dtype=bool)
        self.diagnostics: CellDiagnostics | None = None
        if diagnose:
            volume, error, stretch, angle, noise, det_f = (np.full(n, np.nan) for _ in range(6))
            principal, stretches = np.full((n, 2), np.nan), np.full((n, 2), np.nan)
            centroid = np.full((n, 3), np.nan)
            self.diagnostics = CellDiagnostics(
                volume,
                error,
                stretch,
                angle,
                noise,
                det_f,
                principal,
                stretches,
                centroid,
                np.zeros(n, dtype=np.int8),
            )
            found = [storage_resolution(a, MEANT_DISPLACEMENT) for a in model.displacement.stored]
            scale = abs(model.displacement.scale)
            self.resolution_u = max(r.relative for r in found), scale * max(r.absolute for r in found)
            x = storage_resolution(model.result.points)
            self.resolution_x = x.relative, x.absolute

    def run(self, block: ModelBlock, threads: int | None) -> None:
        assert block.row is not None
        row = block.row
        place = sample_points(row, "centroid")
        rule = sample_points(row, "mean")
        connectivity, index = block.connectivity, block.index
        consecutive = bool((np.diff(index) == 1).all())

        def work(start: int, stop: int) -> None:
            rows = (
                slice(int(index[start]), int(index[start]) + stop - start)
                if consecutive
                else index[start:stop]
            )
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                chunk = self.model.chunk(block, connectivity[start:stop], index[start:stop])
                self._chunk(chunk, place, rule, rows, connectivity[start:stop])

        over_chunks(work, chunk_ranges(len(index), connectivity.shape[1]), threads)

    def _chunk(
        self,
        chunk: ElementChunk,
        place: Samples,
        rule: Samples,
        rows: slice | NDArray[np.int64],
        connectivity: NDArray[np.int64],
    ) -> None:
        point = chunk.at(place.gradients[0], place.functions[0])
        low, high, volume = self._geometry(chunk, point, rule)
        H = point.H
        mean = self.at == "mean" and len(rule.weights) > 1
        if mean:
            H, volume = mean_gradient(chunk, rule)
        status = self._status(chunk, point, low, high)
        if status is not None:
            H[:, :, status != _OK] = np.nan
            volume = np.where(status == _TANGLED, np.nan, volume)
            self.status[rows] = status
        if chunk.row.dim == 3:
            self.mirrored[rows] = high < 0
        finite = None
        if self.needs_finite:
            finite = H
            if chunk.row.dim < 3:
                finite = mean_gradient(chunk, rule, finite=True)[0] if mean else chunk.finite(point)
                if status is not None:
                    finite[:, :, status != _OK] = np.nan
        axes = self._axes(chunk, point, place, rows)
        free = None
        if self.thermal is not None:
            samples = rule if mean else place
            free = mean_free_strain(self.thermal, chunk, samples, rows, connectivity, axes)
            H = with_thermal_thickness(H, free, self.model.plane)
        split = Split(H, self.poisson, self.directions, finite, free)
        fill_measures(self.arrays, rows, self.measures, split, axes)
        if "element_volume" in self.arrays:
            self.arrays["element_volume"][rows] = volume
        if "jacobian_min_over_max" in self.arrays:
            self.arrays["jacobian_min_over_max"][rows] = np.where(high < 0, high / low, low / high)
        if self.diagnostics is not None:
            self._diagnose(chunk, point, split, place, volume, rows)

    def _axes(
        self, chunk: ElementChunk, point: PointGradient, place: Samples, rows: slice | NDArray[np.int64]
    ) -> Floats | None:
        """Return the axes of the frame, and fill the arrays of those of the surface."""
        asked = [(k, name) for k, name in enumerate(SURFACE_AXES) if name in self.arrays]
        if asked:
            axes = surface_axes(point.tangents, len(chunk))
            for k, name in asked:
                self.arrays[name][rows] = axes[k].T
        if self.frame is None:
            return None
        centroid = np.stack([chunk.interpolate(place.functions[0], i) for i in range(3)])
        found = self.frame.axes(centroid, rows, point.tangents)
        self._check_across(found)
        return found

    def _check_across(self, axes: Floats) -> None:
        """Refuse axes none of which lies in a plane mesh whose third direction is not stated: all would be NaN."""
        plane = self.model.plane
        if plane is None or plane.model is not None or self.frame is None:
            return
        across = np.abs(axes[:, plane.normal])
        if (across.min(axis=0) > _ALONG).any():
            raise UsageError(
                f"--frame {self.frame.text!r}: none of its axes lies in the plane of the mesh, and the strain across the "
                "plane is not known: state it with --plane strain, --plane stress --poisson NU or --plane axisymmetric, or "
                "take a frame with an axis in it."
            )

    def _geometry(
        self, chunk: ElementChunk, point: PointGradient, rule: Samples
    ) -> tuple[Floats, Floats, Floats]:
        """Return smallest and largest Jacobian over the quadrature points, and the volume."""
        wanted = self.diagnostics is not None or "element_volume" in self.arrays
        axisymmetric = chunk.plane is not None and chunk.plane.model == "axisymmetric"
        if len(rule.weights) == 1 and not axisymmetric:
            return point.measure, point.measure, rule.weights[0] * point.weight
        low = high = point.measure if chunk.row.dim == 3 else np.abs(point.measure)
        volume = np.zeros(len(chunk))
        if chunk.row.dim == 3:
            wanted = wanted or "jacobian_min_over_max" in self.arrays
            if not wanted and chunk.surely_untangled(point, rule):
                return point.measure, point.measure, volume
            low, high = np.full(len(chunk), np.inf), np.full(len(chunk), -np.inf)
            for gradients, weight in zip(rule.gradients, rule.weights):
                det = chunk.measure(gradients)
                low, high = np.minimum(low, det), np.maximum(high, det)
                volume += weight * np.abs(det)
            return low, high, volume
        if wanted or chunk.row.n_nodes > chunk.row.dim + 1:
            low, high = np.full(len(chunk), np.inf), np.full(len(chunk), -np.inf)
            for gradients, functions, weight in zip(rule.gradients, rule.functions, rule.weights):
                here = chunk.at(gradients, functions)
                signed = here.measure * _same_side(point, here)
                low, high = np.minimum(low, signed), np.maximum(high, signed)
                volume += weight * here.weight
        return low, high, volume

    @staticmethod
    def _status(
        chunk: ElementChunk, point: PointGradient, low: Floats, high: Floats
    ) -> NDArray[np.uint8] | None:
        """Return the code of each cell, or None when all are sound."""
        H = point.H.reshape(-1)
        one_sign = low is high
        if np.isfinite(np.einsum("i,i->", H, H)) and (one_sign or not ((low <= 0) & (high >= 0)).any()):
            return None
        status = np.zeros(len(chunk), dtype=np.uint8)
        status[(low <= 0) & (high >= 0)] = _TANGLED
        broken = ~np.isfinite(point.inverse[0, 0])
        status[broken] = _FLAT
        placed = chunk.relative[:3].sum(axis=(0, 1)) + chunk.first[:3].sum(axis=0)
        status[~np.isfinite(placed)] = _NOWHERE
        moved = chunk.relative[3:].sum(axis=(0, 1)) + chunk.first[3:].sum(axis=0)
        status[~np.isfinite(moved)] = _NOT_FINITE
        return status

    def _diagnose(
        self,
        chunk: ElementChunk,
        point: PointGradient,
        split: Split,
        place: Samples,
        volume: Floats,
        rows: slice | NDArray[np.int64],
    ) -> None:
        assert self.diagnostics is not None
        d = self.diagnostics
        turning: Turning = split.turning
        d.volume[rows] = volume
        d.error[rows], d.stretch[rows], d.angle[rows] = turning.error, turning.stretch, turning.angle
        d.det_f[rows] = 1.0 + relative_volume_change(split.finite_H)
        principal = split.principal
        d.principal[rows, 0], d.principal[rows, 1] = principal[0], principal[2]
        if any(m.finite for m in self.measures):
            longest = 1.0 + split.finite.biot_values
            d.stretches[rows, 0], d.stretches[rows, 1] = longest[0], longest[2]
        for i in range(3):
            d.centroid[rows, i] = chunk.interpolate(place.functions[0], i)
        d.dimension[rows] = chunk.row.dim
        steepest = 1.0 / smallest_height(chunk, point)
        H_size = np.sqrt(np.nansum(split.H**2, axis=(0, 1)))
        far, moved = chunk.magnitudes()
        res_x = self.resolution_x[0] * far + self.resolution_x[1]
        res_u = self.resolution_u[0] * moved + self.resolution_u[1]
        d.noise[rows] = (res_u + H_size * res_x) * steepest

    def finish(self) -> CellFields:
        left_out = dict(self.model.left_out)
        for code, reason in _REASONS.items():
            cells = np.flatnonzero(self.status == code)
            if len(cells):
                left_out[reason] = cells
        components = component_names(self.measures, self.frame)
        components |= {name: VECTOR for name in SURFACE_AXES if name in self.arrays}
        return CellFields(
            self.model, self.arrays, components, left_out, int(self.mirrored.sum()), self.diagnostics
        )


def fill_measures(
    arrays: dict[str, Floats],
    rows: slice | NDArray[np.int64],
    measures: Sequence[Measure],
    split: Split,
    axes: Floats | None,
) -> None:
    """Write measures of some points into their rows of the arrays, in the frame of `axes` where they turn with it."""
    for measure in measures:
        values = measure.compute(split)
        if axes is not None and measure.turns:
            values = turned_components(values, axes)
        arrays[measure.name][rows] = values.T


def component_names(measures: Sequence[Measure], frame: Frame | None) -> dict[str, tuple[str, ...]]:
    """Return the names of the components of measures, in the frame that was asked for; scalars are not in it."""
    return {
        m.name: frame.component_names(len(m.components)) if frame and m.turns else m.components
        for m in measures
        if m.components
    }


def with_thermal_thickness(H: Floats, free: Floats, plane: Plane | None) -> Floats:
    """Return H with the strain across a plane-stress mesh that the free expansion adds.

    The mechanical strain across is `-nu/(1-nu)` times the mechanical strain in the plane; the total has the free strain
    on top: `(1+nu)/(1-nu)` times it more than without.
    """
    if plane is None or plane.model != "stress":
        return H
    assert plane.poisson is not None
    H = H.copy()
    H[plane.normal, plane.normal] += (1.0 + plane.poisson) / (1.0 - plane.poisson) * free[plane.normal]
    return H


def mean_free_strain(
    thermal: Thermal,
    chunk: ElementChunk,
    samples: Samples,
    rows: slice | NDArray[np.int64],
    connectivity: NDArray[np.int64],
    axes: Floats | None,
) -> Floats:
    """Return the free thermal strain `(6, m)`, the mean over the samples.

    Surfaces and lines in space show strain along themselves only: of the free strain only that part counts.
    """
    total, volume = np.zeros((6, len(chunk))), np.zeros(len(chunk))
    for gradients, functions, weight in zip(samples.gradients, samples.functions, samples.weights):
        here = chunk.at(gradients, functions)
        free = thermal.free_strain(rows, connectivity, functions, axes)
        if chunk.plane is None and here.tangents is not None:
            free = _along(free, here.tangents)
        total += weight * here.weight * free
        volume += weight * here.weight
    total /= volume
    return total


def _along(strain: Floats, tangents: Floats) -> Floats:
    """Return the part of a strain `(6, m)` along a line or within a surface with these tangents `(dim, 3, m)`."""
    if len(tangents) == 1:
        t = tangents[0]
        P = t[:, None] * t[None] / (t * t).sum(axis=0)
    else:
        n = np.cross(tangents[0], tangents[1], axis=0)
        P = np.eye(3)[:, :, None] - n[:, None] * n[None] / (n * n).sum(axis=0)
    half = np.einsum("iam,abm->ibm", P, full_from_six(strain))
    return six_from_full(np.einsum("ibm,bjm->ijm", half, P))


def _same_side(point: PointGradient, here: PointGradient) -> Floats:
    """Return +-1: whether the surface's normal at a point is on the side of the normal at the centroid."""
    if point.tangents is None or here.tangents is None or len(here.tangents) == 1:
        return np.ones(len(here.measure))
    a, b = (
        np.cross(point.tangents[0], point.tangents[1], axis=0),
        np.cross(here.tangents[0], here.tangents[1], axis=0),
    )
    return np.where((a * b).sum(axis=0) < 0, -1.0, 1.0)


def smallest_height(chunk: ElementChunk, point: PointGradient) -> Floats:
    """Return the smallest height `(m,)` of the elements: the distance between opposite sides, or corner and side.

    The gradient of a reference coordinate that varies by one over the shape is one over that distance.
    """
    covectors = chunk.row.shape.extents
    squares = [(np.einsum("k,kjm->jm", g, point.inverse) ** 2).sum(axis=0) for g in covectors]
    height: Floats = 1.0 / np.sqrt(np.max(squares, axis=0))
    return height


__all__ = [
    "GEOMETRY",
    "LOCATIONS",
    "CellDiagnostics",
    "CellFields",
    "Location",
    "check_request",
    "compute_fields",
    "smallest_height",
]
