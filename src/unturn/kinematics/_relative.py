"""The deformation from one state to the next, by component: gradients are `(3, 3, n)`, symmetric tensors `(6, n)`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._finite import Finite
from unturn.kinematics._motion import rotation_vector
from unturn.kinematics._symmetric import Floats, full_from_six, six_from_full, spectral


def relative_gradient(before: NDArray[np.float64], after: NDArray[np.float64]) -> Floats:
    """Return `F_after F_before^-1 - I`, `(3, 3, n)`, from two displacement gradients.

    Notes
    -----
    `(H_after - H_before)(I + H_before)^-1`: a small change keeps its digits whatever the deformation before.
    """
    F = np.moveaxis(before, -1, 0) + np.eye(3)
    with np.errstate(invalid="ignore", over="ignore"):
        usable = np.flatnonzero(np.abs(np.linalg.det(F)) > 0)
    inverse = np.full_like(F, np.nan)
    inverse[usable] = np.linalg.inv(F[usable])
    return np.ascontiguousarray(np.moveaxis(np.moveaxis(after - before, -1, 0) @ inverse, 0, -1))


def increments(
    before: NDArray[np.float64], after: NDArray[np.float64], *, finite: bool
) -> tuple[Floats, Floats]:
    """Return strain increment `(6, n)` and rotation increment `(3, n)` between two displacement gradients `(3, 3, n)`.

    Parameters
    ----------
    before, after
        `(3, 3, n)` displacement gradients of the two steps.
    finite
        True: `ln V` and the rotation vector of `R` from `F_after F_before^-1 = V R`, in the axes of space. False: the
        differences of small strain and small rotation.

    Notes
    -----
    Over a time step dt they give the deformation rate `D = ln V / dt` and the spin. A steady spin gives zero D and its
    own rate exactly, for turns below half a turn a step; a steady stretching along fixed axes gives its own rate. Simo
    and Hughes 1998, Computational Inelasticity, chapter 8, for the relative deformation.

    Examples
    --------
    >>> turn = np.array([[0, -1, 0], [1, 0, 0], [0, 0, 1.0]]) - np.eye(3)  # a quarter of a turn about z
    >>> strain, rotation = increments(np.zeros((3, 3, 1)), turn[:, :, None], finite=True)
    >>> bool(np.abs(strain).max() < 1e-15), (rotation[:, 0] / np.pi).tolist()
    (True, [0.0, 0.0, 0.5])
    """
    if not finite:
        change = after - before
        return six_from_full(change), rotation_vector(change)
    relative = Finite(relative_gradient(before, after))
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        return spectral(relative.hencky_values, relative.spatial_directions), relative.rotation


def finite_gradient(biot: Floats, rotation: Floats) -> Floats:
    """Return `F - I = R U - I`, `(3, 3, n)`, from the Biot strain `(6, n)` and the rotation vector `(3, n)`.

    Notes
    -----
    `R - I = sin(a) K + 2 sin(a/2)^2 K K` (Rodrigues 1840). Solids, plane meshes, surfaces and lines alike: the
    completion of their gradient is in the two measures.
    """
    angle = np.sqrt((rotation * rotation).sum(axis=0))
    x, y, z = rotation / np.where(angle > 0, angle, 1.0)
    zero = np.zeros_like(x)
    K = np.array([[zero, -z, y], [z, zero, -x], [-y, x, zero]])
    turn = np.sin(angle) * K + 2.0 * np.sin(0.5 * angle) ** 2 * np.einsum("ijn,jkn->ikn", K, K)
    stretch = full_from_six(biot)
    gradient: Floats = turn + stretch + np.einsum("ijn,jkn->ikn", turn, stretch)
    return gradient
