"""Nodes of elements of order 3 and higher: equally spaced or at Gauss-Lobatto-Legendre points."""

from __future__ import annotations

from functools import lru_cache
from itertools import combinations
from typing import Literal

import numpy as np

from unturn.elements._shape import Floats, read_only

Spacing = Literal["equal", "gll"] | tuple[tuple[float, ...], ...]
"""``equal``, ``gll``, or measured reference coordinates of every node."""


@lru_cache
def gll(order: int) -> Floats:
    """Return the ``order + 1`` Gauss-Lobatto-Legendre points on [0, 1] (0.276 and 0.724 at order 3).

    Notes
    -----
    The ends and the roots of ``P_order'`` (Abramowitz and Stegun 1964, 25.4.32). Order 0: the middle.
    """
    if order == 0:
        return read_only([0.5])
    inner = np.polynomial.legendre.Legendre.basis(order).deriv().roots()
    points = np.concatenate([[-1.0], np.sort(inner.real), [1.0]])
    return read_only((points - points[::-1] + 2) / 4)


@lru_cache(maxsize=4096)
def simplex_node(counts: tuple[int, ...]) -> tuple[float, ...]:
    """Return the barycentric coordinates of the node with these barycentric counts (their sum is the order).

    Notes
    -----
    The warped nodes of T. Warburton 2006, An explicit construction of interpolation nodes on the simplex, J. Eng.
    Math. 56, 247-262, without its optimised blending (fenics-basix 0.11.0 calls them ``gll_warped`` and takes them
    unless told otherwise). With ``b = counts / order``, each pair of corners i, j moves the node along its edge by
    ``w(s) b_i b_j / (s (1 - s))``, where ``s = (1 + b_i - b_j) / 2`` and w is the polynomial of the order that takes
    the equally spaced points of an edge to `gll(order)`.
    """
    order = sum(counts)
    b = np.array(counts) / order
    places = np.linspace(0, 1, order + 1)
    moved = np.polynomial.Polynomial.fit(places, gll(order) - places, order, domain=[0, 1])
    node = b.copy()
    for i, j in combinations(np.flatnonzero(b), 2):
        s = (1 + b[i] - b[j]) / 2
        step = moved(s) * b[i] * b[j] / (s * (1 - s))
        node[i] += step
        node[j] -= step
    return tuple(float(c) for c in node)
