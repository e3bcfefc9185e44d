"""The gradient at one point of many elements, from the tangents of coordinates and displacements.

Everything is held by component, `(3, 3, m)`: each operation is one pass over contiguous memory. Solids have the full
gradient; surfaces and lines are completed, once for small measures and once for finite ones.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats

_FLAT = 1e-13  # a Jacobian below this share of the product of its columns belongs to a cell without volume


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


def cofactors(J: Floats) -> Floats:
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


def determinant(J: Floats, C: Floats) -> Floats:
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
    bound = _FLAT * np.float64(np.einsum("i,i->", values, values) / 3.0) ** 1.5
    if float(np.abs(det).min(initial=np.inf)) > bound:
        return None
    squares = J * J
    lengths = squares[0] + squares[1]
    lengths += squares[2]
    flat: NDArray[np.bool_] = det * det <= _FLAT**2 * (lengths[0] * lengths[1] * lengths[2])
    return flat


def solid_point(mixed: Floats) -> PointGradient:
    J, U = mixed[:3], mixed[3:]
    C = cofactors(J)
    det = determinant(J, C)
    flat = _flat(J, det)
    C /= det if flat is None else np.where(flat, np.nan, det)
    inverse = C.swapaxes(0, 1)
    return PointGradient(_product(U, inverse), det, np.abs(det), inverse)


def cross(a: Floats, b: Floats) -> Floats:
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])


def dot(a: Floats, b: Floats) -> Floats:
    result: Floats = a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
    return result


def surface_point(mixed: Floats) -> PointGradient:
    t, U = mixed[:3].swapaxes(0, 1), mixed[3:]
    normal = cross(t[0], t[1])
    area = np.sqrt(dot(normal, normal))
    size = np.sqrt(dot(t[0], t[0]) * dot(t[1], t[1]))
    usable = np.where(area > _FLAT * size, area, np.nan)
    normal /= usable
    inverse = np.stack([cross(t[1], normal), cross(normal, t[0])])
    inverse /= usable
    H = _product(U, inverse)
    tilt = np.stack([H[0, j] * normal[0] + H[1, j] * normal[1] + H[2, j] * normal[2] for j in range(3)])
    for i in range(3):
        for j in range(3):
            H[i, j] -= tilt[i] * normal[j]
    return PointGradient(H, area, area, inverse, np.ascontiguousarray(t))


def line_point(mixed: Floats) -> PointGradient:
    t, U = mixed[:3, 0], mixed[3:, 0]
    square = dot(t, t)
    size = np.sqrt(square)
    usable = np.where(square > 0, square, np.nan)
    inverse = (t / usable)[None]
    axial = dot(U, inverse[0])
    across = U - axial * t
    H = np.empty((3, 3, t.shape[-1]))
    for i in range(3):
        for j in range(3):
            H[i, j] = U[i] * inverse[0, j] - inverse[0, i] * across[j]
    return PointGradient(H, size, size, inverse, t[None])


def finite_surface(point: PointGradient, poisson: float | None) -> Floats:
    """Return `F - I` with F n = unit normal of the deformed surface times the thickness stretch."""
    assert point.tangents is not None
    t = point.tangents
    normal = cross(t[0], t[1])
    area = np.sqrt(dot(normal, normal))
    normal /= area
    tilt = -np.stack([dot(point.H[i], normal) for i in range(3)])  # minus H n = grad_s(u)^T n
    H = point.H.copy()
    for i in range(3):
        for j in range(3):
            H[i, j] += tilt[i] * normal[j]  # the surface gradient alone
    moved = [t[k] + np.stack([dot(H[i], t[k]) for i in range(3)]) for k in range(2)]
    turned = cross(moved[0], moved[1])
    moved_area = np.sqrt(dot(turned, turned))
    turned /= moved_area
    change = turned - normal
    if poisson is not None:
        change += np.expm1(-poisson / (1.0 - poisson) * np.log(moved_area / area)) * turned
    for i in range(3):
        for j in range(3):
            H[i, j] += change[i] * normal[j]
    return H


def moved_tangent(point: PointGradient) -> Floats:
    """Return the tangent of the deformed line per unit of reference length: the small completion keeps du/ds."""
    assert point.tangents is not None
    old = point.tangents[0] / point.measure
    moved: Floats = old + np.stack([dot(point.H[i], old) for i in range(3)])
    return moved


def finite_line(old: Floats, moved: Floats, stretch: Floats | None = None) -> Floats:
    """Return `F - I`, F the axial stretch times the smallest rotation from old to new tangent, both `(3, m)`.

    Without a stretch it is the ratio of their lengths.
    """
    size = np.sqrt(dot(old, old))
    old = old / size
    length = np.sqrt(dot(moved, moved))
    new = moved / length
    if stretch is None:
        stretch = length / size
    axis, cosine = cross(old, new), dot(old, new)
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


def reversing_turn(old: Floats, new: Floats) -> Floats:
    """Return `R - I` of the smallest rotations that nearly or wholly reverse a unit vector.

    R takes the frame of `old` and a direction across both vectors to the frame of `new` and that direction. Where they
    are opposite, to 1e-10, any direction across will do, and the coordinate axis farthest from the line makes it: the
    same one for all points of an element, whatever the rounding.
    """
    across = cross(old, new)
    opposite = dot(across, across) < 1e-20
    if opposite.any():
        farthest = np.eye(3)[:, np.argmin(np.abs(old[:, opposite]), axis=0)]
        across[:, opposite] = cross(old[:, opposite], farthest)
    frames = []
    for tangent in (old, new):
        side = across - dot(across, tangent) * tangent
        side /= np.sqrt(dot(side, side))
        frames.append((tangent, side, cross(tangent, side)))
    turn = np.zeros((3, 3, old.shape[1]))
    for before, after in zip(*frames):
        turn += after[:, None] * before[None]
    for i in range(3):
        turn[i, i] -= 1.0
    return turn
