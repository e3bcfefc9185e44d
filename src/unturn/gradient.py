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

PlaneModel = Literal["strain", "stress", "axisymmetric"]

# BLAS must not start threads of its own inside ours: matrix products stay below its threshold by the size of a chunk,
# and products of vectors are left to einsum.
_CHUNK = 8192
_CHUNK_VALUES = 200_000  # nodes x elements x 6 values of a chunk: a megabyte and a half
_FLAT = 1e-13  # a Jacobian below this share of the product of its columns belongs to a cell without volume


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


@dataclass(frozen=True, eq=False)
class PointGradient:
    """The gradient of a chunk of elements at one reference point.

    Parameters
    ----------
    H
        `(3, 3, m)` displacement gradient; surfaces and lines with the small completion, plane meshes with their
        third direction.
    measure
        `(m,)` signed Jacobian determinant for solids; area or length per reference unit for surfaces and lines.
    weight
        `(m,)` the same without sign, times `2 pi r` where axisymmetric: what one unit of reference volume weighs.
    inverse
        `(dim, 3, m)` gradients of the reference coordinates, `d xi_k / d X_j`.
    tangents
        `(dim, 3, m)` tangents `dX_j / d xi_k`; only for surfaces and lines.
    """

    H: Floats
    measure: Floats
    weight: Floats
    inverse: Floats
    tangents: Floats | None = None


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
        """Return coordinate `row` (0 to 2) or displacement `row - 3` `(m,)` at a point with these shape functions."""
        value: Floats = self.first[row] + np.einsum("a,am->m", functions[1:], self.relative[row])
        return value

    def tangents(self, gradients: Floats) -> Floats:
        """Return `(6, dim, m)`: coordinates and displacements differentiated by the reference coordinates."""
        rest = gradients[:, 1:]
        if rest.shape[0] == rest.shape[1] and np.array_equal(rest, np.eye(len(rest))):
            return self.relative
        product: Floats = np.matmul(rest, self.relative)
        return product

    def measure(self, gradients: Floats) -> Floats:
        """Return the signed Jacobian determinant `(m,)` of solids at a point with these shape gradients."""
        rest = gradients[:, 1:]
        J = np.matmul(rest, self.relative[:3])
        return _determinant(J, _cofactors(J))

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
        """Return the displacement gradient at a point given by its shape gradients `(dim, nodes)` and functions."""
        mixed = self.tangents(gradients)
        if self.row.dim == 3:
            return _solid(mixed)
        if self.row.dim == 1:
            return _line(mixed)
        point = _surface(mixed)
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
            return _finite_line(point.tangents[0] / point.measure, _moved_tangent(point))
        if self.plane is None:
            return _finite_surface(point, self.poisson)
        H = point.H
        k = self.plane.normal
        if self.plane.model == "stress":
            nu = self.plane.poisson
            assert nu is not None
            a, b = (i for i in range(3) if i != k)
            relative = H[a, a] + H[b, b] + (H[a, a] * H[b, b] - H[a, b] * H[b, a])
            H = H.copy()
            with np.errstate(invalid="ignore", divide="ignore"):
                H[k, k] = np.expm1(-nu / (1.0 - nu) * np.log1p(relative))
        return H


def _cofactors(J: Floats) -> Floats:
    """Return `C[j, k]`, the cofactor of `J[j, k]`, for `(3, 3, m)` arrays.

    Rows and columns are repeated cyclically so that all nine minors are one difference of two products: few large
    operations keep several threads out of each other's way.
    """
    cyclic = np.empty((5, 5, J.shape[-1]))
    cyclic[:3, :3] = J
    cyclic[3:, :3] = J[:2]
    cyclic[:, 3:] = cyclic[:, :2]
    C = cyclic[1:4, 1:4] * cyclic[2:5, 2:5]
    C -= cyclic[1:4, 2:5] * cyclic[2:5, 1:4]
    return C


def _determinant(J: Floats, C: Floats) -> Floats:
    terms = J[0] * C[0]
    det: Floats = terms[0] + terms[1]
    det += terms[2]
    return det


def _product(U: Floats, inverse: Floats) -> Floats:
    """Return `H[i, j] = sum_k U[i, k] inverse[k, j]`."""
    H = U[:, 0, None] * inverse[0, None]
    for k in range(1, len(inverse)):
        H += U[:, k, None] * inverse[k, None]
    return H


def _flat(J: Floats, det: Floats) -> NDArray[np.bool_] | None:
    """Return which cells have no volume; None when no cell can be flat: the smallest determinant is large enough."""
    values = J.reshape(-1)
    # no smaller than _FLAT times the product of the columns of any cell
    bound = _FLAT * (float(np.einsum("i,i->", values, values)) / 3.0) ** 1.5
    if float(np.abs(det).min(initial=np.inf)) > bound:
        return None
    squares = J * J
    lengths = squares[0] + squares[1]
    lengths += squares[2]
    flat: NDArray[np.bool_] = det * det <= _FLAT**2 * (lengths[0] * lengths[1] * lengths[2])
    return flat


def _solid(mixed: Floats) -> PointGradient:
    J, U = mixed[:3], mixed[3:]
    C = _cofactors(J)
    det = _determinant(J, C)
    flat = _flat(J, det)
    C /= det if flat is None else np.where(flat, np.nan, det)
    inverse = C.swapaxes(0, 1)
    return PointGradient(_product(U, inverse), det, np.abs(det), inverse)


def _cross(a: Floats, b: Floats) -> Floats:
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])


def _dot(a: Floats, b: Floats) -> Floats:
    result: Floats = a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
    return result


def _surface(mixed: Floats) -> PointGradient:
    t, U = mixed[:3].swapaxes(0, 1), mixed[3:]
    normal = _cross(t[0], t[1])
    area = np.sqrt(_dot(normal, normal))
    size = np.sqrt(_dot(t[0], t[0]) * _dot(t[1], t[1]))
    usable = np.where(area > _FLAT * size, area, np.nan)
    normal /= usable
    inverse = np.stack([_cross(t[1], normal), _cross(normal, t[0])])
    inverse /= usable
    H = _product(U, inverse)
    tilt = np.stack([H[0, j] * normal[0] + H[1, j] * normal[1] + H[2, j] * normal[2] for j in range(3)])
    for i in range(3):
        for j in range(3):
            H[i, j] -= tilt[i] * normal[j]
    return PointGradient(H, area, area, inverse, np.ascontiguousarray(t))


def _line(mixed: Floats) -> PointGradient:
    t, U = mixed[:3, 0], mixed[3:, 0]
    square = _dot(t, t)
    size = np.sqrt(square)
    usable = np.where(square > 0, square, np.nan)
    inverse = (t / usable)[None]
    axial = _dot(U, inverse[0])
    across = U - axial * t
    H = np.empty((3, 3, t.shape[-1]))
    for i in range(3):
        for j in range(3):
            H[i, j] = U[i] * inverse[0, j] - inverse[0, i] * across[j]
    return PointGradient(H, size, size, inverse, t[None])


def _finite_surface(point: PointGradient, poisson: float | None) -> Floats:
    """Return `F - I` with F n = unit normal of the deformed surface times the thickness stretch."""
    assert point.tangents is not None
    t = point.tangents
    normal = _cross(t[0], t[1])
    area = np.sqrt(_dot(normal, normal))
    normal /= area
    tilt = -np.stack([_dot(point.H[i], normal) for i in range(3)])  # minus H n = grad_s(u)^T n
    H = point.H.copy()
    for i in range(3):
        for j in range(3):
            H[i, j] += tilt[i] * normal[j]  # the surface gradient alone
    moved = [t[k] + np.stack([_dot(H[i], t[k]) for i in range(3)]) for k in range(2)]
    turned = _cross(moved[0], moved[1])
    moved_area = np.sqrt(_dot(turned, turned))
    turned /= moved_area
    change = turned - normal
    if poisson is not None:
        change += np.expm1(-poisson / (1.0 - poisson) * np.log(moved_area / area)) * turned
    for i in range(3):
        for j in range(3):
            H[i, j] += change[i] * normal[j]
    return H


def _moved_tangent(point: PointGradient) -> Floats:
    """Return the tangent of the deformed line per unit of reference length: the small completion keeps du/ds."""
    assert point.tangents is not None
    old = point.tangents[0] / point.measure
    moved: Floats = old + np.stack([_dot(point.H[i], old) for i in range(3)])
    return moved


def _finite_line(old: Floats, moved: Floats, stretch: Floats | None = None) -> Floats:
    """Return `F - I`, F the axial stretch times the smallest rotation from old to new tangent, both `(3, m)`.

    Without a stretch it is the ratio of their lengths.
    """
    size = np.sqrt(_dot(old, old))
    old = old / size
    length = np.sqrt(_dot(moved, moved))
    new = moved / length
    if stretch is None:
        stretch = length / size
    axis, cosine = _cross(old, new), _dot(old, new)
    back = cosine < -0.5
    H = np.empty((3, 3, old.shape[-1]))
    for i in range(3):
        for j in range(3):
            H[i, j] = axis[i] * axis[j] / np.where(back, 1.0, 1.0 + cosine)
        H[i, i] += cosine - 1.0
    for i, j, k in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        H[i, j] -= axis[k]
        H[j, i] += axis[k]
    if back.any():
        H[:, :, back] = reversing_turn(old[:, back], new[:, back])
    extra = (stretch - 1.0) * new
    for i in range(3):
        for j in range(3):
            H[i, j] += extra[i] * old[j]
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
        tangent = _moved_tangent(point)
        chord += weight * point.tangents[0]
        moved += share * tangent
        stretch += share * np.sqrt(_dot(tangent, tangent))
        length += share
    return _finite_line(chord, moved, stretch / length), length


def reversing_turn(old: Floats, new: Floats) -> Floats:
    """Return `R - I` of the smallest rotations that nearly or wholly reverse a unit vector.

    R takes the frame of `old` and a direction across both vectors to the frame of `new` and that direction. Where they
    are opposite, to 1e-10, any direction across will do, and the coordinate axis farthest from the line makes it: the
    same one for all points of an element, whatever the rounding.
    """
    across = _cross(old, new)
    opposite = _dot(across, across) < 1e-20
    if opposite.any():
        farthest = np.eye(3)[:, np.argmin(np.abs(old[:, opposite]), axis=0)]
        across[:, opposite] = _cross(old[:, opposite], farthest)
    frames = []
    for tangent in (old, new):
        side = across - _dot(across, tangent) * tangent
        side /= np.sqrt(_dot(side, side))
        frames.append((tangent, side, _cross(tangent, side)))
    turn = np.zeros((3, 3, old.shape[1]))
    for before, after in zip(*frames):
        turn += after[:, None] * before[None]
    for i in range(3):
        turn[i, i] -= 1.0
    return turn


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
