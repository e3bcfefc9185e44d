"""Principal directions, whose sign says nothing and which are any where principal values coincide."""

from __future__ import annotations

import numpy as np

from unturn.kinematics._symmetric import Floats

_START = "principal_direction_"


def is_direction(name: str) -> bool:
    """Return whether an array is called as a principal direction.

    Examples
    --------
    >>> is_direction("principal_direction_1_hencky"), is_direction("principal_strain")
    (True, False)
    """
    return name.startswith(_START) and name[len(_START) :][:1] in ("1", "2", "3")


def values_of(direction: str) -> str:
    """Return the name of the principal values of a direction.

    Examples
    --------
    >>> values_of("principal_direction_1_hencky")
    'principal_strain_hencky'
    """
    return "principal_strain" + direction[len(_START) + 1 :]


def turned(principal: Floats, direction: str, noise: Floats) -> Floats:
    """Return how far a principal direction may be off, `(n, 3)`: noise over the gap to the nearest other value, at most 2.

    Parameters
    ----------
    principal
        `(n, 3)` principal values.
    direction
        Name of the array.
    noise
        `(n,)` by how much the tensor may be off.

    Notes
    -----
    To first order a perturbation E turns the eigenvector v towards another one w by `v.E w / (l_v - l_w)`; twice that is
    taken, and any direction where the gap is within the noise.
    """
    which = int(direction[len(_START)]) - 1
    gap = np.abs(np.delete(principal, which, axis=1) - principal[:, which, None]).min(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        off = np.where(gap > noise, np.minimum(2.0 * noise / gap, 2.0), 2.0)
    return np.repeat(off[:, None], 3, axis=1)
