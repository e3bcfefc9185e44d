"""Finite strain and rotation from the displacement gradient, by component.

Everything follows from the eigenvalues and directions of the Green-Lagrange strain, which is computed from H and not
from F, so that small strain keeps its digits. Where a stretch is far below one, squaring would lose it, and the
singular values of F are taken instead.
"""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._motion import green_lagrange, length, relative_volume_change, rotation_vector
from unturn.kinematics._symmetric import PAIRS, Floats, eigen, leading_sign, spectral

BASES = ("green_lagrange", "hencky", "biot", "almansi")

_ROUNDING = 1e-15  # det F is not known better than this, times 1 + |H|^2
_HALF_TURN = (
    1e-11  # the sine of an angle so close to half a turn is rounding: both directions of the axis are right
)
_FLATTENED = 0.1  # a squared stretch below this is taken from the singular values of F


class Finite:
    """Finite measures of `F = I + H`, computed when first asked for; NaN where `det F` is not positive.

    Parameters
    ----------
    H
        `(3, 3, n)` displacement gradient.

    Notes
    -----
    Polar decomposition `F = R U`, `U = sum l_k N_k N_k^T`: Green-Lagrange `(l^2 - 1)/2`, Biot `l - 1`, Hencky `ln l` along
    N_k; Almansi `(1 - l^-2)/2` along `n_k = R N_k` (Holzapfel 2000, Nonlinear Solid Mechanics, sections 2.5 and 2.6;
    Bower 2009, Applied Mechanics of Solids, section 2.1).
    """

    def __init__(self, H: NDArray[Any]) -> None:
        self.H = np.asarray(H, dtype=np.float64)

    @cached_property
    def det_f(self) -> Floats:
        """`det F`, `(n,)`."""
        return 1.0 + self.volume_change

    @cached_property
    def volume_change(self) -> Floats:
        """`det F - 1`, `(n,)`."""
        return relative_volume_change(self.H)

    @cached_property
    def _reversed(self) -> NDArray[np.bool_] | None:
        """Where `det F` is not positive, to rounding; None when nowhere."""
        with np.errstate(invalid="ignore", over="ignore"):
            size = 1.0 + (self.H * self.H).sum(axis=(0, 1))
            reversed_: NDArray[np.bool_] = self.det_f <= _ROUNDING * size
        return reversed_ if reversed_.any() else None

    def _proper(self, values: Floats) -> Floats:
        """Return the values, NaN where `det F` is not positive."""
        if self._reversed is not None:
            values = values.copy()
            values[..., self._reversed] = np.nan
        return values

    @cached_property
    def green_lagrange(self) -> Floats:
        """Green-Lagrange strain, `(6, n)`."""
        return self._proper(self._E)

    @cached_property
    def _E(self) -> Floats:
        with np.errstate(invalid="ignore", over="ignore"):
            return green_lagrange(self.H)

    @cached_property
    def _spectrum(self) -> tuple[Floats, Floats, NDArray[np.int64], Floats, Floats]:
        """Eigenvalues of E and directions; where singular values of F were taken, those, and their rotations R - I."""
        with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
            values, directions = eigen(self._E)
            few = np.flatnonzero(1.0 + 2.0 * values[2] < _FLATTENED)
        if not len(few):
            return values, directions, few, np.zeros((3, 0)), np.zeros((3, 3, 0))
        with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
            stretch, turned, turn = _singular(self.H[:, :, few], directions[:, :, few])
        values[:, few] = 0.5 * (stretch - 1.0) * (stretch + 1.0)
        for k in range(3):
            turned[k] *= leading_sign(turned[k])
        directions[:, :, few] = turned
        return values, directions, few, stretch, turn

    @cached_property
    def _logarithms(self) -> Floats:
        values, _, few, stretch, _ = self._spectrum
        with np.errstate(invalid="ignore", divide="ignore"):
            logarithms: Floats = 0.5 * np.log1p(2.0 * values)
            if len(few):
                logarithms[:, few] = np.log(stretch)
        return logarithms

    @cached_property
    def stretch_values(self) -> Floats:
        """Principal stretches minus one, `(3, n)`, largest first; also where `det F` is not positive."""
        return np.expm1(self._logarithms)

    @cached_property
    def stretch_tensor(self) -> Floats:
        """`U - I`, `(6, n)`; also where `det F` is not positive."""
        return spectral(self.stretch_values, self._spectrum[1])

    @cached_property
    def hencky_values(self) -> Floats:
        """Logarithms of the principal stretches, `(3, n)`, largest first."""
        return self._proper(self._logarithms)

    @cached_property
    def biot_values(self) -> Floats:
        """Principal stretches minus one, `(3, n)`, largest first."""
        return self._proper(self.stretch_values)

    @cached_property
    def almansi_values(self) -> Floats:
        """Principal Almansi strains `(1 - l^-2)/2`, `(3, n)`, largest first."""
        values: Floats = -0.5 * np.expm1(-2.0 * self.hencky_values)
        return values

    @property
    def green_lagrange_values(self) -> Floats:
        """Principal Green-Lagrange strains, `(3, n)`, largest first."""
        return self._proper(self._spectrum[0])

    @property
    def material_directions(self) -> Floats:
        """Directions of stretch in the undeformed body, `(3, 3, n)`: `[k]` belongs to value k."""
        return self._proper(self._spectrum[1])

    @cached_property
    def spatial_directions(self) -> Floats:
        """Directions of stretch in the deformed body, `n_k = R N_k`, first non-zero component positive."""
        directions = self.material_directions
        turned = np.empty_like(directions)
        for k in range(3):
            d = directions[k]
            turned[k] = d + np.stack([(self.turn[i] * d).sum(axis=0) for i in range(3)])
            turned[k] *= leading_sign(turned[k])
        return turned

    @cached_property
    def turn(self) -> Floats:
        """`R - I`, `(3, 3, n)`."""
        _, directions, few, _, given = self._spectrum
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            inverse = spectral(np.expm1(-self.hencky_values), directions)  # U^-1 - I
            K = {(i, j): inverse[k] for k, (i, j) in enumerate(PAIRS)}
            turn = np.empty_like(self.H)
            for i in range(3):
                for j in range(3):
                    turn[i, j] = self.H[i, j] + K[min(i, j), max(i, j)]
                    for m in range(3):
                        turn[i, j] += self.H[i, m] * K[min(m, j), max(m, j)]
        if len(few):
            turn[:, :, few] = given
        return self._proper(turn)

    @cached_property
    def hencky(self) -> Floats:
        """Hencky strain `ln U`, `(6, n)`."""
        return spectral(self.hencky_values, self.material_directions)

    @cached_property
    def biot(self) -> Floats:
        """Biot strain `U - I`, `(6, n)`."""
        return self._proper(self.stretch_tensor)

    @cached_property
    def almansi(self) -> Floats:
        """Almansi strain `F^-T E F^-1`, `(6, n)`."""
        return spectral(self.almansi_values, self.spatial_directions)

    @cached_property
    def rotation_angle(self) -> Floats:
        """Angle of R in [0, pi], `(n,)`."""
        cosine = 0.5 * (2.0 + self.turn[0, 0] + self.turn[1, 1] + self.turn[2, 2])
        angle: Floats = np.arctan2(length(rotation_vector(self.turn)), cosine)
        return angle

    @cached_property
    def rotation(self) -> Floats:
        """Rotation vector of R, angle times axis, `(3, n)`; at half a turn the first non-zero component is positive."""
        axial = rotation_vector(self.turn)  # sine of the angle times the axis
        sine, angle = length(axial), self.rotation_angle
        with np.errstate(invalid="ignore", divide="ignore"):
            vector = axial * np.where(sine > 0, angle / sine, 1.0)
        index = np.flatnonzero(angle > 0.5 * np.pi)
        if len(index):
            vector[:, index] = self._obtuse(index, axial[:, index]) * angle[index]
        return vector

    def _obtuse(self, index: NDArray[np.int64], axial: Floats) -> Floats:
        """Return the axis of turns beyond a right angle, from the symmetric part of R."""
        turn = self.turn[:, :, index]
        versine = -0.5 * (turn[0, 0] + turn[1, 1] + turn[2, 2])  # 1 - cosine, between 1 and 2
        outer = 0.5 * (turn + turn.swapaxes(0, 1))  # (1 - cosine)(n n^T - I)
        for i in range(3):
            outer[i, i] += versine
        diagonal = np.stack([outer[0, 0], outer[1, 1], outer[2, 2]])
        largest = np.argmax(diagonal, axis=0)
        axis = outer[:, largest, np.arange(len(index))]
        axis /= length(axis)
        along = axis[0] * axial[0] + axis[1] * axial[1] + axis[2] * axial[2]
        clear = np.abs(along) > _HALF_TURN
        signed: Floats = axis * np.where(clear, np.copysign(1.0, along), leading_sign(axis))
        return signed


def _dot(a: Floats, b: Floats) -> Floats:
    result: Floats = a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
    return result


def _singular(H: Floats, right: Floats) -> tuple[Floats, Floats, Floats]:
    """Return singular values of F `(3, m)`, largest first, right directions `(3, 3, m)`, and R - I.

    Notes
    -----
    One-sided Jacobi rotations (Hestenes 1958) make the columns `F v_k` orthogonal, all matrices at once. They start from
    the eigenvectors of E, which are right but for the two smallest among themselves: one sweep after that pair is enough.
    The third left direction is the one across the two others: R is a rotation however short the third column is.
    """
    right = right.copy()
    F = H + np.eye(3)[:, :, None]
    left = np.stack([F[:, 0] * v[0] + F[:, 1] * v[1] + F[:, 2] * v[2] for v in right])
    for p, q in ((1, 2), (0, 1), (0, 2), (1, 2)):
        a, b, c = (_dot(left[i], left[j]) for i, j in ((p, p), (q, q), (p, q)))
        ratio = (b - a) / (2.0 * c)
        tangent = np.where(c == 0, 0.0, np.copysign(1.0, ratio) / (np.abs(ratio) + np.hypot(1.0, ratio)))
        cosine = 1.0 / np.hypot(1.0, tangent)
        for d in (left, right):
            d[p], d[q] = cosine * (d[p] - tangent * d[q]), cosine * (d[q] + tangent * d[p])
    stretch = np.stack([length(d) for d in left])
    order = np.argsort(-stretch, axis=0)
    stretch = np.take_along_axis(stretch, order, axis=0)
    left, right = (np.take_along_axis(d, order[:, None], axis=0) for d in (left, right))
    first = left[0] / stretch[0]
    second = left[1] / stretch[1]
    second -= _dot(first, second) * first
    second /= length(second)
    hand = np.copysign(1.0, _dot(np.cross(right[0], right[1], axis=0), right[2]))
    across = np.cross(first, second, axis=0) * hand
    turn = sum(u[:, None] * v[None] for u, v in zip((first, second, across), right)) - np.eye(3)[:, :, None]
    return stretch, right, turn
