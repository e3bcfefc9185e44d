"""Reference solids divided into small tetrahedra."""

from __future__ import annotations

import functools

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Shape

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
_EDGES = ((0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3))


@functools.cache
def tetrahedra_of(shape: Shape, level: int) -> tuple[Floats, Ints]:
    """Return corners `(p, 3)` and tetrahedra `(t, 4)` that fill a reference solid, divided `level` times."""
    if level == 0:
        return shape.vertices, _coarse(shape)
    corners, tets = tetrahedra_of(shape, level - 1)
    a, b, c, d = tets.T
    pairs = np.sort(np.stack([tets[:, [i, j]] for i, j in _EDGES], axis=1).reshape(-1, 2), axis=1)
    distinct, place = np.unique(pairs, axis=0, return_inverse=True)
    middle = place.reshape(-1, 6).T + len(corners)
    ab, ac, ad, bc, bd, cd = middle
    fine = [(a, ab, ac, ad), (b, ab, bc, bd), (c, ac, bc, cd), (d, ad, bd, cd),
            (ab, cd, ac, ad), (ab, cd, ad, bd), (ab, cd, bd, bc), (ab, cd, bc, ac)]  # fmt: skip
    return (
        np.concatenate([corners, corners[distinct].mean(axis=1)]),
        np.concatenate([np.stack(f, axis=1) for f in fine]),
    )


def _coarse(shape: Shape) -> Ints:
    """Return tetrahedra of a reference solid: from its first vertex to the triangles of the faces that lack it."""
    found = []
    for face in shape.faces:
        if 0 not in face:
            found += [(0, face[0], face[k], face[k + 1]) for k in range(1, len(face) - 1)]
    return np.array(found, dtype=np.int64)
