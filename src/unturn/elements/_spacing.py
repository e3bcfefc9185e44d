"""Nodes of elements of order 3 and higher: equally spaced or at Gauss-Lobatto-Legendre points."""

from __future__ import annotations

from functools import lru_cache
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
    T. Isaac 2020, Recursive, parameter-free, explicitly defined interpolation nodes for simplices, SIAM J.
    Sci. Comput. 42(6), A4046: leave out one coordinate at a time, place the node of the lower simplex, and
    take the mean weighted by the one-dimensional node ``gll(order)[order - count left out]``.
    """
    order = sum(counts)
    points = gll(order)
    if len(counts) == 2:
        return float(points[counts[0]]), float(points[counts[1]])
    total = np.zeros(len(counts))
    for left_out, count in enumerate(counts):
        others = [c for c in range(len(counts)) if c != left_out]
        lower = simplex_node(tuple(counts[c] for c in others))
        total[others] += points[order - count] * np.array(lower)
    return tuple(float(b) for b in total / total.sum())
