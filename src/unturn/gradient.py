"""The displacement gradient at chosen points of elements, evaluated with their shape functions.

Work goes through chunks of elements that fit the processor's cache; within a chunk every number is held by
component, `(3, 3, n)`, so each operation is one pass over contiguous memory. Coordinates and displacements are taken
relative to the first node of each element: far origins and large rigid translations cost no digits.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unturn.elements import Element, element
from unturn.errors import UsageError
from unturn.kinematics._symmetric import Floats
from unturn.point_gradient import (
    PointGradient,
    cofactors,
    determinant,
    dot,
    finite_line,
    finite_surface,
    line_point,
    moved_tangent,
    solid_point,
    surface_point,
)

PlaneModel = Literal["strain", "stress", "axisymmetric"]

# BLAS must not start threads of its own inside ours: matrix products stay below its threshold by the size of a chunk,
# and products of vectors are left to einsum.
_CHUNK = 8192
_CHUNK_VALUES = 200_000  # nodes x elements x 6 values of a chunk: a megabyte and a half


@dataclass(frozen=True)
class Plane:
    """A plane mesh and what is assumed about its third direction.

    Parameters
    ----------
    normal
        Coordinate axis across the plane: 0, 1 or 2.
    model
        ``strain``, ``stress``, ``axisymmetric``, or None when nothing is stated: the third direction is then NaN.
    poisson
        Poisson's ratio for ``stress``.
    axis
        Coordinate axis of revolution for ``axisymmetric``, 0 or 1.
    """

    normal: int = 2
    model: PlaneModel | None = None
    poisson: float | None = None
    axis: int = 1

    @property
    def radial(self) -> int:
        """The coordinate axis that measures the radius."""
        return 3 - self.normal - self.axis


class NodalFields:
    """Coordinates and displacements laid out for gathering: six contiguous rows.

    Parameters
    ----------
    points
        `(n, 2 | 3)` reference coordinates.
    displacement
        `(n, 2 | 3)` displacements in the same unit.
    """

    def __init__(self, points: ArrayLike, displacement: ArrayLike) -> None:
        x, u = np.asarray(points), np.asarray(displacement)
        if x.ndim != 2 or x.shape[1] not in (2, 3):
            raise UsageError(f"points have shape {x.shape}; expected (n, 2) or (n, 3).")
        if u.ndim != 2 or u.shape[1] not in (2, 3) or len(u) != len(x):
            raise UsageError(
                f"the displacement has shape {u.shape}; expected ({len(x)}, 2) or ({len(x)}, 3), one row per point."
            )
        self.rows = np.empty((6, len(x)))
        for first, values in ((0, x), (3, u)):
            for k in range(3):
                self.rows[first + k] = values[:, k] if k < values.shape[1] else 0.0


class ElementChunk:
    """Some elements of one block, gathered."""

    def __init__(
        self,
        fields: NodalFields,
        connectivity: NDArray[np.int64],
        row: Element,
        plane: Plane | None,
        back: Floats | None = None,
        poisson: float | None = None,
    ) -> None:
        """Gather elements.

        Parameters
        ----------
        fields, connectivity, row, plane
            Nodal values, `(m, n_nodes)` nodes, their element, and the plane of the mesh.
        back
            `(2, 3, 3)` or `(2, 3, 3, m)`: a rigid motion to take out. To the displacements relative to the first node
            are added the first tensor times the coordinates and the second times the displacements.
        poisson
            Poisson's ratio of surfaces in space: finite measures then have the thickness stretch of plane stress.
        """
        self.row, self.plane, self.poisson = row, plane, poisson
        nodes = np.ascontiguousarray(connectivity.T)
        values = np.empty((6, *nodes.shape))
        for k in range(6):
            fields.rows[k].take(nodes, out=values[k], mode="clip")
        self.first = values[:, 0]
        self.relative = values[:, 1:] - values[:, :1]
        self._moved: Floats | None = None
        if back is not None:
            self._moved = self.magnitudes()[1]  # as stored
            form = "ij,jam->iam" if back.ndim == 3 else "ijm,jam->iam"
            change = np.einsum(form, back[0], self.relative[:3])
            change += np.einsum(form, back[1], self.relative[3:])
            self.relative[3:] += change

    def __len__(self) -> int:
        return int(self.first.shape[1])

    def magnitudes(self) -> tuple[Floats, Floats]:
        """Return the largest coordinate and the largest displacement of each element as stored, `(m,)` each."""
        values = self.relative + self.first[:, None]
        far = np.maximum(np.abs(self.first[:3]).max(axis=0), np.abs(values[:3]).max(axis=(0, 1)))
        if self._moved is not None:
            return far, self._moved
        return far, np.maximum(np.abs(self.first[3:]).max(axis=0), np.abs(values[3:]).max(axis=(0, 1)))

    def interpolate(self, functions: Floats, row: int) -> Floats:
        """Return coordinate `row` (0 to 2) or displacement `row - 3` `(m,)` at a point with these shape functions.

        `(nodes,)`, or `(nodes, m)`: another point in each element.
        """
        form = "a,am->m" if functions.ndim == 1 else "am,am->m"
        value: Floats = self.first[row] + np.einsum(form, functions[1:], self.relative[row])
        return value

    def tangents(self, gradients: Floats) -> Floats:
        """Return `(6, dim, m)`: coordinates and displacements differentiated by the reference coordinates."""
        rest = gradients[:, 1:]
        if rest.ndim == 3:
            mixed: Floats = np.einsum("kam,jam->jkm", rest, self.relative)
            return mixed
        if rest.shape[0] == rest.shape[1] and np.array_equal(rest, np.eye(len(rest))):
            return self.relative
        product: Floats = np.matmul(rest, self.relative)
        return product

    def measure(self, gradients: Floats) -> Floats:
        """Return the signed Jacobian determinant `(m,)` of solids at a point with these shape gradients."""
        rest = gradients[:, 1:]
        J = np.matmul(rest, self.relative[:3])
        return determinant(J, cofactors(J))

    def surely_untangled(self, point: PointGradient, rule: Samples) -> bool:
        """Whether no Jacobian determinant can change its sign between the centroid and the points of the rule.

        With `J_q = J_c + D`, `det J_q` keeps the sign of `det J_c` while `|J_c^-1| |D| < 1`. D comes from the nodes'
        distance to the affine image of the reference nodes, so affine elements pass at once. A bound, not the answer:
        where it fails the determinants themselves decide.
        """
        nodes = self.row.nodes[1:] - self.row.nodes[0]
        departure = self.relative[:3] - np.matmul(nodes, self.tangents(rule.center)[:3])
        spread = np.einsum("jam,jam->m", departure, departure)
        spread *= np.einsum("kjm,kjm->m", point.inverse, point.inverse)
        return bool((spread * rule.reach**2 < 0.98).all())

    def at(self, gradients: Floats, functions: Floats) -> PointGradient:
        """Return the displacement gradient at a point given by its shape gradients `(dim, nodes)` and functions `(nodes,)`.

        With one more axis of length m at their end: another point in each element.
        """
        mixed = self.tangents(gradients)
        if self.row.dim == 3:
            return solid_point(mixed)
        if self.row.dim == 1:
            return line_point(mixed)
        point = surface_point(mixed)
        if self.plane is None:
            return point
        return self._with_third_direction(point, functions)

    def _with_third_direction(self, point: PointGradient, functions: Floats) -> PointGradient:
        assert self.plane is not None
        k = self.plane.normal
        H, weight = point.H, point.weight
        a, b = (i for i in range(3) if i != k)
        if self.plane.model is None:
            H[k, k] = np.nan
        elif self.plane.model == "strain":
            H[k, k] = 0.0
        elif self.plane.model == "stress":
            nu = self.plane.poisson
            assert nu is not None
            H[k, k] = -nu / (1.0 - nu) * (H[a, a] + H[b, b])
        else:
            r = self.plane.radial
            radius = self.interpolate(functions, r)
            radial = self.interpolate(functions, 3 + r)
            on_axis = np.abs(radius) <= 1e-12 * np.abs(self.relative[r]).max(axis=0, initial=0.0)
            H[k, k] = np.where(on_axis, H[r, r], radial / np.where(on_axis, 1.0, radius))
            weight = weight * (2.0 * np.pi) * np.abs(radius)
        return PointGradient(H, point.measure, weight, point.inverse, point.tangents)

    def finite(self, point: PointGradient) -> Floats:
        """Return `F - I` `(3, 3, m)` with the completion that finite measures use.

        Surfaces: the normal goes to the unit normal of the deformed surface, times the thickness stretch when Poisson's
        ratio is given. Lines: stretch along the tangent times the smallest rotation from old to new tangent. Thickness
        stretch of plane stress: the logarithmic law `ln l3 = -nu/(1-nu) (ln l1 + ln l2)`.
        """
        if self.row.dim == 3:
            return point.H
        if self.row.dim == 1:
            assert point.tangents is not None
            return finite_line(point.tangents[0] / point.measure, moved_tangent(point))
        if self.plane is None:
            return finite_surface(point, self.poisson)
        return with_thickness_stretch(point.H, self.plane)


def with_thickness_stretch(H: Floats, plane: Plane | None) -> Floats:
    """Return `F - I` `(3, 3, m)` with the thickness stretch that finite measures of plane stress use."""
    if plane is None or plane.model != "stress":
        return H
    assert plane.poisson is not None
    k = plane.normal
    a, b = (i for i in range(3) if i != k)
    relative = H[a, a] + H[b, b] + (H[a, a] * H[b, b] - H[a, b] * H[b, a])
    H = H.copy()
    with np.errstate(invalid="ignore", divide="ignore"):
        H[k, k] = np.expm1(-plane.poisson / (1.0 - plane.poisson) * np.log1p(relative))
    return H


def _mean_finite_line(chunk: ElementChunk, samples: Samples) -> tuple[Floats, Floats]:
    """Return the mean `F - I` of lines, and their lengths: mean axial stretch, rotation of the chord.

    Along a curved line the smallest rotation of the tangent is another at each point even when the whole line turns as
    one; the chord has one rotation, and the mean stretch is no affair of turning.
    """
    chord, moved = np.zeros((2, 3, len(chunk)))
    stretch, length = np.zeros((2, len(chunk)))
    for gradients, functions, weight in zip(samples.gradients, samples.functions, samples.weights):
        point = chunk.at(gradients, functions)
        assert point.tangents is not None
        share = weight * point.weight
        tangent = moved_tangent(point)
        chord += weight * point.tangents[0]
        moved += share * tangent
        stretch += share * np.sqrt(dot(tangent, tangent))
        length += share
    return finite_line(chord, moved, stretch / length), length


def chunk_ranges(n_cells: int, n_nodes: int) -> list[tuple[int, int]]:
    """Return start and stop of the chunks of a block; sized so that a chunk stays in the cache."""
    size = max(64, min(_CHUNK, _CHUNK_VALUES // (6 * n_nodes)))
    return [(start, min(start + size, n_cells)) for start in range(0, n_cells, size)]


def over_chunks(
    work: Callable[[int, int], None], ranges: Iterable[tuple[int, int]], threads: int | None = None
) -> None:
    """Call `work(start, stop)` for every range, on several threads; the first error is raised."""
    count = threads if threads is not None else (os.cpu_count() or 1)
    todo = list(ranges)
    if count <= 1 or len(todo) < 2:
        for start, stop in todo:
            work(start, stop)
        return
    with ThreadPoolExecutor(min(count, len(todo))) as pool:
        for _ in pool.map(lambda r: work(*r), todo):
            pass


def displacement_gradient(
    points: ArrayLike,
    cells: ArrayLike,
    displacement: ArrayLike,
    cell_type: str,
    at: Literal["centroid", "mean"] | ArrayLike = "centroid",
    threads: int | None = None,
) -> Floats:
    """Return the displacement gradient of elements of one type.

    Parameters
    ----------
    points
        `(n_points, 2 | 3)` reference coordinates.
    cells
        `(n_cells, n_nodes)` zero-based node positions in the order of the element table.
    displacement
        `(n_points, 2 | 3)`, in the unit of the points.
    cell_type
        Name in the element table: ``tetra10``, ``hexahedron`` ...
    at
        ``centroid`` of the reference volume, ``mean`` over the volume, or reference points `(p, dim)`.
    threads
        Number of threads; default: the number of processors.

    Returns
    -------
    numpy.ndarray
        `(n_cells, 3, 3)`, or `(n_cells, p, 3, 3)` for given points; `[..., i, j] = du_i/dX_j`, dimensionless.
        Surface and line elements in space: the small completion. NaN where an element has no volume.

    Raises
    ------
    UsageError
        Arrays whose shapes do not fit.
    InputError
        An unknown cell type, or a number of nodes that does not fit it.

    Notes
    -----
    `H = sum_a u_a (x) dN_a/dX` (Hughes 2000, The Finite Element Method, section 3.9).

    Examples
    --------
    >>> import numpy as np
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> u = points * [1e-3, 0, 0]
    >>> displacement_gradient(points, [[0, 1, 2, 3]], u, "tetra")[0, 0]
    array([0.001, 0.   , 0.   ])
    """
    connectivity = np.asarray(cells, dtype=np.int64)
    if connectivity.ndim != 2:
        raise UsageError(f"cells have shape {connectivity.shape}; expected (n_cells, n_nodes).")
    row = element(cell_type, connectivity.shape[1])
    fields = NodalFields(points, displacement)
    if connectivity.size and (connectivity.min() < 0 or connectivity.max() >= fields.rows.shape[1]):
        raise UsageError(f"cells refer to nodes outside 0 to {fields.rows.shape[1] - 1}.")
    single = isinstance(at, str)
    where = sample_points(row, at)
    result = np.empty((len(connectivity), 1 if single else len(where.functions), 3, 3))

    def work(start: int, stop: int) -> None:
        chunk = ElementChunk(fields, connectivity[start:stop], row, None)
        if single and at == "mean":
            result[start:stop, 0] = np.moveaxis(mean_gradient(chunk, where)[0], -1, 0)
            return
        for q, (gradients, functions) in enumerate(zip(where.gradients, where.functions)):
            result[start:stop, q] = np.moveaxis(chunk.at(gradients, functions).H, -1, 0)

    over_chunks(work, chunk_ranges(len(connectivity), connectivity.shape[1]), threads)
    return result[:, 0] if single else result


@dataclass(frozen=True, eq=False)
class Samples:
    """Shape functions `(p, nodes)`, gradients `(p, dim, nodes)` and weights `(p,)` at reference points.

    `center` holds the shape gradients `(dim, nodes)` at the centroid.
    """

    functions: Floats
    gradients: Floats
    weights: Floats
    center: Floats

    @cached_property
    def reach(self) -> float:
        """Largest norm of the difference between the gradients at a point and at the centroid, without the first node."""
        apart = (self.gradients - self.center)[:, :, 1:]
        return float(np.linalg.norm(apart, ord=2, axis=(1, 2)).max())


def sample_points(row: Element, at: Any) -> Samples:
    """Return the samples of the centroid, of the quadrature points (``mean``), or of given reference points."""
    if isinstance(at, str):
        if at == "centroid":
            points, weights = row.centroid[None], np.array([row.shape.volume])
        elif at == "mean":
            points, weights = row.quadrature.points, row.quadrature.weights
        else:
            raise UsageError(f"at={at!r} is not known here; use 'centroid', 'mean' or reference points.")
    else:
        points = np.atleast_2d(np.asarray(at, dtype=np.float64))
        weights = np.zeros(len(points))
        if points.shape[1] != row.dim:
            raise UsageError(
                f"reference points of {row.name} have {row.dim} coordinates, got {points.shape[1]}."
            )
    center = row.shape_gradients(row.centroid[None])[0]
    return Samples(row.shape_functions(points), row.shape_gradients(points), weights, center)


def mean_gradient(chunk: ElementChunk, samples: Samples, finite: bool = False) -> tuple[Floats, Floats]:
    """Return the volume mean `(3, 3, m)` of the gradient and the volume `(m,)`.

    With `finite` it is the mean of `F - I` as finite measures complete it: along a curved surface the normal changes,
    so the mean is completed point by point. Lines: mean axial stretch, rotation of the chord.
    """
    if finite and chunk.row.dim == 1:
        return _mean_finite_line(chunk, samples)
    total = np.zeros((3, 3, len(chunk)))
    volume = np.zeros(len(chunk))
    for gradients, functions, weight in zip(samples.gradients, samples.functions, samples.weights):
        point = chunk.at(gradients, functions)
        share = weight * point.weight
        total += share * (chunk.finite(point) if finite else point.H)
        volume += share
    with np.errstate(invalid="ignore", divide="ignore"):
        total /= volume
    return total, volume
