"""Polynomial (and, for pyramids, rational) spaces as data, in well-conditioned bases.

A space is a chart, which says how a multi-index becomes a function, and the list of multi-indices.
All charts are built from one three-term recurrence, so that values and gradients come from one place.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import product

import numpy as np

from unturn.elements._shape import Floats

Term = tuple[int, ...]
Table = tuple[Floats, Floats]
"""Values ``(n, p)`` and gradients ``(n, p, dim)`` of n functions at p points."""


def jacobi_table(degree: int, alpha: int, u: Table, w: Table | None = None) -> Table:
    """Return the functions ``w^n P_n^(alpha, 0)(u / w)`` for n = 0 .. degree, with gradients.

    Parameters
    ----------
    degree
        Highest n.
    alpha
        First exponent of the Jacobi weight ``(1 - x)^alpha``.
    u, w
        Functions of the reference coordinates: values ``(p,)``, gradients ``(p, dim)``. Default w: 1.

    Notes
    -----
    Three-term recurrence of the Jacobi polynomials (Abramowitz and Stegun 1964, table 22.7) multiplied by
    ``w^n``: the division by w never happens, so collapsed corners need no special case.
    """
    u0, du = u
    w0, dw = (np.ones_like(u0), np.zeros_like(du)) if w is None else w
    values = [np.ones_like(u0)]
    gradients = [np.zeros_like(du)]
    for n in range(degree):
        m = 2 * n + alpha
        if n == 0:
            a, b, c = (alpha + 2) / 2, alpha / 2, 0.0
        else:
            scale = 2 * (n + 1) * (n + alpha + 1) * m
            a = (m + 1) * (m + 2) * m / scale
            b = (m + 1) * alpha**2 / scale
            c = 2 * (n + alpha) * n * (m + 2) / scale
        p, dp = values[n], gradients[n]
        q, dq = (values[n - 1], gradients[n - 1]) if n else (np.zeros_like(p), np.zeros_like(dp))
        s, ds = a * u0 + b * w0, a * du + b * dw
        values.append(s * p - c * w0**2 * q)
        gradients.append(
            ds * p[:, None] + s[:, None] * dp - c * (2 * (w0 * q)[:, None] * dw + (w0**2)[:, None] * dq)
        )
    return np.array(values), np.array(gradients)


def _affine(xi: Floats, coefficients: Iterable[float], constant: float) -> Table:
    row = np.array(list(coefficients), dtype=np.float64)
    return xi @ row + constant, np.broadcast_to(row, xi.shape)


def _times(factors: list[tuple[Floats, Floats]]) -> Table:
    """Return the product of functions, each with values ``(p,)`` and gradients ``(p, dim)``."""
    value, gradient = factors[0]
    for v, g in factors[1:]:
        gradient = gradient * v[:, None] + value[:, None] * g
        value = value * v
    return value, gradient


def _stack(functions: list[Table]) -> Table:
    return np.array([v for v, _ in functions]), np.array([g for _, g in functions])


def _at(table: Table, n: int) -> Table:
    return table[0][n], table[1][n]


def box(xi: Floats, terms: tuple[Term, ...]) -> Table:
    """Legendre products on ``[-1, 1]^dim``: ``P_i(x) P_j(y) P_k(z)``, scaled to equal size."""
    dim = xi.shape[1]
    degree = max(max(t) for t in terms)
    axes = [jacobi_table(degree, 0, _affine(xi, np.eye(dim)[d], 0.0)) for d in range(dim)]
    values, gradients = _stack([_times([_at(axes[d], t[d]) for d in range(dim)]) for t in terms])
    scale = np.array([np.sqrt(np.prod([2 * n + 1 for n in t])) for t in terms])
    return values * scale[:, None], gradients * scale[:, None, None]


def simplex(xi: Floats, terms: tuple[Term, ...]) -> Table:
    """Orthogonal polynomials on the unit triangle or tetrahedron.

    Notes
    -----
    Proriol 1957, Koornwinder 1975, Dubiner 1991, written without the collapsed coordinates: the factor of
    coordinate d is the Jacobi polynomial with ``u = 2 xi_d + r - 1``, ``w = 1 - r``, r the sum of the later
    coordinates, and ``alpha = 2 (degrees so far) + d``.
    """
    dim = xi.shape[1]
    degree = max(sum(t) for t in terms)
    tables: dict[tuple[int, int], Table] = {}
    functions = []
    for term in terms:
        factors = []
        for d in range(dim):
            alpha = 2 * sum(term[:d]) + d
            if (d, alpha) not in tables:
                later = [0.0] * (d + 1) + [1.0] * (dim - d - 1)
                u = _affine(xi, [2.0 * (c == d) + r for c, r in enumerate(later)], -1.0)
                w = _affine(xi, [-r for r in later], 1.0)
                tables[d, alpha] = jacobi_table(degree, alpha, u, w)
            factors.append(_at(tables[d, alpha], term[d]))
        scale = np.sqrt(np.prod([2 * sum(term[: d + 1]) + d + 1 for d in range(dim)]))
        value, gradient = _times(factors)
        functions.append((scale * value, scale * gradient))
    return _stack(functions)


def prism(xi: Floats, terms: tuple[Term, ...]) -> Table:
    """Products of triangle functions in (x, y) and Legendre polynomials in z on ``[-1, 1]``."""
    flat_terms = tuple(dict.fromkeys(t[:2] for t in terms))
    flat = simplex(xi[:, :2], flat_terms)
    across = np.concatenate([flat[1], np.zeros_like(flat[1][..., :1])], axis=-1)
    up = jacobi_table(max(t[2] for t in terms), 0, _affine(xi, (0.0, 0.0, 1.0), 0.0))
    functions = []
    for t in terms:
        f = flat_terms.index(t[:2])
        value, gradient = _times([(flat[0][f], across[f]), _at(up, t[2])])
        scale = np.sqrt(2 * t[2] + 1)
        functions.append((scale * value, scale * gradient))
    return _stack(functions)


def collapsed(xi: Floats, terms: tuple[Term, ...]) -> Table:
    """Functions ``P_i(X) P_j(Y) t^c`` of a pyramid, term ``(i, j, c)``, with ``t = 1 - z, X = x/t, Y = y/t``.

    Notes
    -----
    With ``max(i, j) <= c`` every gradient is a polynomial in X, Y times ``t^(c - 1)``. At the apex X and Y
    are taken as zero, which gives the limit along the axis.
    """
    t = 1.0 - xi[:, 2]
    inverse = np.divide(1.0, t, out=np.zeros_like(t), where=t != 0)
    x, y = xi[:, 0] * inverse, xi[:, 1] * inverse
    degree = max(max(term) for term in terms)
    p = [jacobi_table(degree, 0, (s, np.ones((len(xi), 1)))) for s in (x, y)]
    functions = []
    for i, j, c in terms:
        a, da, b, db = p[0][0][i], p[0][1][i, :, 0], p[1][0][j], p[1][1][j, :, 0]
        value = a * b * t**c
        lower = t ** (c - 1) if c else np.zeros_like(t)
        gradient = np.stack([da * b, a * db, x * da * b + y * a * db - c * a * b], axis=1) * lower[:, None]
        functions.append((value, gradient))
    return _stack(functions)


@dataclass(frozen=True, eq=False)
class Space:
    """A space of functions on a reference shape.

    Parameters
    ----------
    chart
        `box`, `simplex`, `prism` or `collapsed`: how a multi-index becomes a function.
    terms
        The multi-indices.
    mix
        ``(n_functions, n_terms)`` combinations, for a space that is not spanned by single terms.
    """

    chart: Callable[[Floats, tuple[Term, ...]], Table]
    terms: tuple[Term, ...]
    mix: Floats | None = None

    def values(self, xi: Floats) -> Floats:
        """Values ``(p, n)`` of the basis at ``(p, dim)`` points."""
        values = self.chart(xi, self.terms)[0]
        return values.T if self.mix is None else (self.mix @ values).T

    def gradients(self, xi: Floats) -> Floats:
        """Gradients ``(p, dim, n)`` of the basis at ``(p, dim)`` points."""
        gradients = self.chart(xi, self.terms)[1]
        if self.mix is not None:
            gradients = np.einsum("mn,npk->mpk", self.mix, gradients)
        return np.transpose(gradients, (1, 2, 0))

    def cardinal(self, nodes: Floats) -> Floats:
        """Return ``(n, n)`` coefficients: column a is the function that is 1 at node a, 0 at the others."""
        return np.asarray(np.linalg.inv(self.values(nodes)), dtype=np.float64)


def tensor(*degrees: int) -> Space:
    """All products of degree up to ``degrees[d]`` in coordinate d."""
    return Space(box, tuple(product(*(range(n + 1) for n in degrees))))


def superlinear(dim: int, *more: Term) -> Space:
    """Serendipity space of order 2: superlinear degree up to 2 (Arnold and Awanou 2011), and more terms."""
    terms = [t for t in product(range(3), repeat=dim) if sum(n for n in t if n >= 2) <= 2]
    return Space(box, tuple(terms) + more)


def simplex_terms(dim: int, degree: int) -> tuple[Term, ...]:
    """Multi-indices of total degree up to `degree`, lower degrees first."""
    terms = (t for t in product(range(degree + 1), repeat=dim) if sum(t) <= degree)
    return tuple(sorted(terms, key=sum))


def complete(dim: int, degree: int) -> Space:
    """All polynomials of total degree up to `degree` on a simplex."""
    return Space(simplex, simplex_terms(dim, degree))


def prism_space(*products: tuple[int, int]) -> Space:
    """Sum of spaces ``P_m(x, y) x P_n(z)`` on a wedge, one ``(m, n)`` each."""
    terms = [(*t, n) for m, top in products for t in simplex_terms(2, m) for n in range(top + 1)]
    return Space(prism, tuple(dict.fromkeys(terms)))


def pyramid_space(degree: int, *without: Term) -> Space:
    """Functions with ``max(i, j) <= c <= degree`` (Bergot, Cohen, Durufle 2010) without some terms."""
    terms = [(i, j, c) for c in range(degree + 1) for i in range(c + 1) for j in range(c + 1)]
    return Space(collapsed, tuple(t for t in terms if t not in without))
