"""Quadrature rules on the reference shapes: all weights positive, all points inside."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import permutations, product

import numpy as np

from unturn.elements._shape import Floats, read_only


@dataclass(frozen=True, eq=False)
class Quadrature:
    """A rule ``sum_q w_q f(xi_q)``.

    Parameters
    ----------
    points
        ``(q, dim)`` reference coordinates, read-only.
    weights
        ``(q,)``, positive; their sum is the reference volume.
    degree
        Every polynomial up to this total degree is integrated exactly.
    """

    points: Floats
    weights: Floats
    degree: int

    def __len__(self) -> int:
        return len(self.weights)


def _rule(points: list[list[float]] | Floats, weights: list[float] | Floats, degree: int) -> Quadrature:
    return Quadrature(read_only(points), read_only(weights), degree)


def _gauss_unit(n: int, power: int) -> tuple[Floats, Floats]:
    """Return n Gauss points on [0, 1] for the weight ``(1 - s)^power``."""
    if power == 0:
        x, w = np.polynomial.legendre.leggauss(n)
    else:
        from scipy.special import roots_jacobi

        x, w = roots_jacobi(n, power, 0)
    return (np.asarray(x) + 1) / 2, np.asarray(w) / 2 ** (power + 1)


@lru_cache
def box_rule(dim: int, n: int) -> Quadrature:
    """Gauss-Legendre product with n points a direction on ``[-1, 1]^dim``, the last coordinate fastest.

    Notes
    -----
    Abramowitz and Stegun 1964, table 25.4; exact to degree ``2 n - 1`` in each coordinate.
    """
    x, w = np.polynomial.legendre.leggauss(n)
    points = np.array(list(product(x, repeat=dim)))
    weights = np.array([np.prod(ws) for ws in product(w, repeat=dim)])
    return _rule(points, weights, 2 * n - 1)


def _conical(dim: int, degree: int) -> Quadrature:
    """Gauss-Jacobi product on the unit simplex (Stroud 1971, section 2.4)."""
    n = degree // 2 + 1
    points, weights = np.zeros((1, 0)), np.ones(1)
    for d in range(dim):
        s, w = _gauss_unit(n, d)
        points = np.concatenate(
            [
                np.repeat(points, n, axis=0) * np.tile(1 - s, len(points))[:, None],
                np.tile(s, len(points))[:, None],
            ],
            axis=1,
        )
        weights = np.repeat(weights, n) * np.tile(w, len(weights))
    return _rule(points, weights, 2 * n - 1)


def _orbit(dim: int, value: float) -> list[list[float]]:
    """Points with barycentric coordinates ``(1 - dim * value, value, ..., value)`` and permutations."""
    bary = (1 - dim * value,) + (value,) * dim
    return [list(p[1:]) for p in sorted(set(permutations(bary)), reverse=True)]


@lru_cache
def triangle_rule(degree: int) -> Quadrature:
    """Rule on the unit triangle exact to at least `degree`: 1, 3 or 7 points, then conical products.

    Notes
    -----
    Three points: Hammer, Marlowe and Stroud 1956; seven points of degree 5: Radon 1948 (also Dunavant 1985).
    """
    if degree <= 1:
        return _rule([[1 / 3, 1 / 3]], [1 / 2], 1)
    if degree == 2:
        return _rule(_orbit(2, 1 / 6), [1 / 6] * 3, 2)
    if degree <= 5:
        root = np.sqrt(15.0)
        points = [[1 / 3, 1 / 3], *_orbit(2, (6 - root) / 21), *_orbit(2, (6 + root) / 21)]
        weights = [9 / 80] + [(155 - root) / 2400] * 3 + [(155 + root) / 2400] * 3
        return _rule(points, weights, 5)
    return _conical(2, degree)


@lru_cache
def tetra_rule(degree: int) -> Quadrature:
    """Rule on the unit tetrahedron exact to at least `degree`: 1 or 4 points, then conical products.

    Notes
    -----
    Four points: Hammer and Stroud 1956 (also Keast 1986), at ``(5 - sqrt 5) / 20``.
    """
    if degree <= 1:
        return _rule([[1 / 4] * 3], [1 / 6], 1)
    if degree == 2:
        return _rule(_orbit(3, (5 - np.sqrt(5.0)) / 20), [1 / 24] * 4, 2)
    return _conical(3, degree)


@lru_cache
def wedge_rule(degree: int, n: int) -> Quadrature:
    """Triangle rule of `degree` times n Gauss-Legendre points in z on ``[-1, 1]``."""
    flat, up = triangle_rule(degree), box_rule(1, n)
    points = [[*p, *z] for z in up.points for p in flat.points]
    weights = [v * w for v in up.weights for w in flat.weights]
    return _rule(points, weights, min(flat.degree, up.degree))


@lru_cache
def pyramid_rule(n: int) -> Quadrature:
    """Conical product on the pyramid with base ``[-1, 1]^2`` and apex ``z = 1``, n points a direction.

    Notes
    -----
    With ``x = X (1 - z)``, ``y = Y (1 - z)`` the volume element is ``(1 - z)^2``: Gauss-Legendre in X and Y,
    Gauss-Jacobi in z (Stroud 1971, section 2.4). Exact also for ``X^i Y^j (1 - z)^c``, exponents to 2 n - 1.
    """
    base = box_rule(2, n)
    z, w = _gauss_unit(n, 2)
    points = [[*(p * (1 - s)), s] for s in z for p in base.points]
    weights = [v * u for v in w for u in base.weights]
    return _rule(points, weights, 2 * n - 1)
