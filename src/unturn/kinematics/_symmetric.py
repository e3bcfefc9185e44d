"""Eigenvalues and directions of symmetric 3x3 tensors, many at once.

Tensors are held by component, `(6, n)` in the order XX, YY, ZZ, XY, YZ, XZ, so that every line below is one
pass over contiguous numbers.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

PAIRS: tuple[tuple[int, int], ...] = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2))
"""Row and column of each of the six components: XX, YY, ZZ, XY, YZ, XZ."""

_TINY = 1e-100  # below this a deviator counts as zero; its cube would underflow
_ZERO_COMPONENT = 1e-12  # a direction's component below this is rounding, not a sign


def six_from_full(tensor: NDArray[Any]) -> Floats:
    """Return the six components `(6, ...)` of the symmetric part of `(3, 3, ...)`."""
    six = np.empty((6, *tensor.shape[2:]))
    for k, (i, j) in enumerate(PAIRS):
        if i == j:
            six[k] = tensor[i, i]
        else:
            np.add(tensor[i, j], tensor[j, i], out=six[k])
            six[k] *= 0.5
    return six


def full_from_six(six: NDArray[Any]) -> Floats:
    """Return the full symmetric tensor `(3, 3, ...)` from its six components `(6, ...)`."""
    full = np.empty((3, 3, *six.shape[1:]))
    for k, (i, j) in enumerate(PAIRS):
        full[i, j] = six[k]
        full[j, i] = six[k]
    return full


def contract(a: NDArray[Any], b: NDArray[Any]) -> Floats:
    """Return the double contraction `a : b` of two symmetric tensors given by six components."""
    diagonal = a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
    shear = a[3] * b[3] + a[4] * b[4] + a[5] * b[5]
    total: Floats = diagonal + 2.0 * shear
    return total


def spectral(values: NDArray[Any], directions: NDArray[Any]) -> Floats:
    """Return `sum_k values[k] d_k d_k^T` as six components; `directions[k]` is the k-th direction `(3, n)`."""
    six = np.zeros((6, *values.shape[1:]))
    for value, d in zip(values, directions):
        for k, (i, j) in enumerate(PAIRS):
            six[k] += value * d[i] * d[j]
    return six


def eigenvalues(six: NDArray[Any]) -> Floats:
    """Return the eigenvalues `(3, n)`, largest first; see `eigen`."""
    deviator, mean, separate, upper = _separate_root(six)
    normal = _null_direction(deviator, separate)
    middle, half, off = _plane_problem(deviator, *_complement(normal))
    radius = np.hypot(half, off)
    return _ordered(separate, middle + radius, middle - radius, upper) + mean


def eigen(six: NDArray[Any]) -> tuple[Floats, Floats]:
    """Return eigenvalues `(3, n)`, largest first, and unit directions `(3, 3, n)`: `directions[k]` is the k-th.

    Notes
    -----
    The root of the characteristic cubic that stands apart from the other two is well conditioned and comes from
    the cosine formula. Its direction is the largest column of the adjugate. The two others are the eigenvalues of
    the 2x2 problem in the plane across it, so nearly equal roots lose nothing (the idea of Scherzinger and
    Dohrmann 2008, Comput. Methods Appl. Mech. Eng. 197, 4007-4015; from memory, checked against LAPACK).
    The plane's basis is that of Duff et al. 2017, J. Comput. Graph. Tech. 6(1).
    """
    deviator, mean, separate, upper = _separate_root(six)
    normal = _null_direction(deviator, separate)
    first, second = _complement(normal)
    middle, half, off = _plane_problem(deviator, first, second)
    radius = np.hypot(half, off)
    cosine, sine = _half_angle(half, off, radius)
    high = cosine * first + sine * second
    low = cosine * second - sine * first
    values = _ordered(separate, middle + radius, middle - radius, upper) + mean
    directions = np.where(upper, np.stack([normal, high, low]), np.stack([high, low, normal]))
    for k in range(3):
        directions[k] *= leading_sign(directions[k])
    return values, directions


def _separate_root(six: NDArray[Any]) -> tuple[Floats, Floats, Floats, NDArray[np.bool_]]:
    """Return deviator, mean, the deviator's root farthest from the others, and whether it is the largest."""
    mean = (six[0] + six[1] + six[2]) / 3.0
    dev = np.array(six, dtype=np.float64)
    dev[:3] -= mean
    radius = np.sqrt(contract(dev, dev) / 6.0)
    xx, yy, zz, xy, yz, xz = dev
    half_det = 0.5 * (xx * (yy * zz - yz * yz) - xy * (xy * zz - yz * xz) + xz * (xy * yz - yy * xz))
    safe = np.where(radius > _TINY, radius, 1.0)
    ratio = half_det / safe / safe / safe
    root = np.cos(np.arccos(np.minimum(np.abs(ratio), 1.0)) / 3.0)
    root *= 2.0 * radius
    upper = ~(ratio < 0)
    return dev, mean, np.where(upper, root, -root), upper


def _null_direction(dev: Floats, root: Floats) -> Floats:
    """Return the unit direction `(3, n)` of a simple root: the largest column of adj(dev - root I)."""
    x, y, z = dev[0] - root, dev[1] - root, dev[2] - root
    xy, yz, xz = dev[3], dev[4], dev[5]
    a, b, c = y * z - yz * yz, x * z - xz * xz, x * y - xy * xy
    ab, bc, ac = xz * yz - xy * z, xy * xz - x * yz, xy * yz - y * xz
    use_a = (a >= b) & (a >= c)
    use_b = b >= c
    normal = np.where(
        use_a, np.stack([a, ab, ac]), np.where(use_b, np.stack([ab, b, bc]), np.stack([ac, bc, c]))
    )
    size = np.sqrt(normal[0] ** 2 + normal[1] ** 2 + normal[2] ** 2)
    flat = size == 0  # not finite stays so
    normal /= np.where(flat, 1.0, size)
    if flat.any():
        normal[:, flat] = np.array([[1.0], [0.0], [0.0]])
    return normal


def _complement(n: Floats) -> tuple[Floats, Floats]:
    """Return two unit vectors that complete `n` to an orthonormal basis."""
    sign = np.copysign(1.0, n[2])
    a = -1.0 / (sign + n[2])
    b = n[0] * n[1] * a
    first = np.stack([1.0 + sign * n[0] * n[0] * a, sign * b, -sign * n[0]])
    second = np.stack([b, sign + n[1] * n[1] * a, -n[1]])
    return first, second


def _plane_problem(dev: Floats, u: Floats, v: Floats) -> tuple[Floats, Floats, Floats]:
    """Return middle, half difference and off-diagonal of the tensor seen in the plane of `u` and `v`."""
    xx, yy, zz, xy, yz, xz = dev
    wx, wy, wz = (
        xx * u[0] + xy * u[1] + xz * u[2],
        xy * u[0] + yy * u[1] + yz * u[2],
        xz * u[0] + yz * u[1] + zz * u[2],
    )
    uu = wx * u[0] + wy * u[1] + wz * u[2]
    uv = wx * v[0] + wy * v[1] + wz * v[2]
    vv = (
        xx * v[0] * v[0]
        + yy * v[1] * v[1]
        + zz * v[2] * v[2]
        + 2.0 * (xy * v[0] * v[1] + yz * v[1] * v[2] + xz * v[0] * v[2])
    )
    return 0.5 * (uu + vv), 0.5 * (uu - vv), uv


def _half_angle(half: Floats, off: Floats, radius: Floats) -> tuple[Floats, Floats]:
    """Return cosine and sine of the angle from `u` to the direction of the larger root."""
    round_ = ~(radius > _TINY)  # below it numbers lose their digits, and any two directions will do
    safe = np.where(round_, 1.0, radius)
    big = np.sqrt(0.5 * (1.0 + np.abs(half) / safe))
    small = 0.5 * off / (safe * big)
    leading = half >= 0
    cosine = np.where(leading, big, np.abs(small))
    sine = np.where(leading, small, np.copysign(big, off))
    return np.where(round_, 1.0, cosine), np.where(round_, 0.0, sine)


def _ordered(separate: Floats, high: Floats, low: Floats, upper: NDArray[np.bool_]) -> Floats:
    return np.stack(
        [np.where(upper, separate, high), np.where(upper, high, low), np.where(upper, low, separate)]
    )


def leading_sign(d: Floats) -> Floats:
    """Return +-1 so that the first component that is not zero becomes positive."""
    lead = np.where(
        np.abs(d[0]) > _ZERO_COMPONENT, d[0], np.where(np.abs(d[1]) > _ZERO_COMPONENT, d[1], d[2])
    )
    sign: Floats = np.copysign(1.0, lead)
    return sign
