"""Superconvergent patch recovery: a polynomial through the accurate points of the cells around a corner.

Zienkiewicz and Zhu 1992, The superconvergent patch recovery and a posteriori error estimates, part 1: the recovery
technique, Int. J. Numer. Meth. Eng. 33, 1331-1364.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.elements._space import simplex_terms
from unturn.gradient import over_chunks
from unturn.kinematics._symmetric import Floats
from unturn.recovery._nodes import Ints, NodeShares
from unturn.recovery._samples import PAIRS, CellSamples, Gathered, Meetings

_REACH = 1.0  # standard deviations of the samples: a corner further from their mean has them to one side
_COVER = 2.0  # the same along one direction, for a linear polynomial in the directions that the samples cover
_SPREAD = 1e-12  # variance across, as a share of the largest, below which samples lie in one plane or line
_CONDITION = 1e8


@dataclass(eq=False)
class Patches:
    """The patches of the corners of cells of one dimension and one order.

    The polynomial of patch k at place x is `sum_t coefficients[k, t] phi_t(y)` with `y = axes[k] (x - center[k])`:
    coordinates in which the samples have unit variance and no covariance, so that the fit does not care how long and
    thin the cells are. Complete polynomials stay complete under this change, so the fit itself is that of ordinary
    least squares.

    Attributes
    ----------
    share
        `(n,)` whose patch it is.
    center, axes
        `(n, 3)`, `(n, dim, 3)`.
    coefficients
        `(n, n_terms, 9)`, of the monomials `terms`.
    terms
        Exponents.
    good
        `(n,)` whether the samples determine the whole polynomial and surround the corner.
    linear
        `(n,)` whether, failing that, a linear polynomial along the directions that the samples cover stands in its
        place; only for order 1.
    """

    share: Ints
    center: Floats
    axes: Floats
    coefficients: Floats
    terms: tuple[tuple[int, ...], ...]
    good: NDArray[np.bool_]
    linear: NDArray[np.bool_]

    def evaluate(self, which: Ints, x: Floats) -> Floats:
        """Return the values `(m, 9)` of patches `which` at places `x` `(m, 3)`."""
        y = np.einsum("mdj,mj->dm", self.axes[which], x - self.center[which])
        value: Floats = np.einsum("tm,mtc->mc", monomials(y, self.terms), self.coefficients[which])
        return value


def monomials(y: Floats, terms: tuple[tuple[int, ...], ...]) -> Floats:
    """Return the monomials `(n_terms, m)` of `(dim, m)` coordinates."""
    rank = {term: k for k, term in enumerate(terms)}
    phi = np.empty((len(terms), y.shape[1]))
    phi[0] = 1.0
    for k, term in enumerate(terms[1:], 1):
        d = next(i for i, power in enumerate(term) if power)
        lower = (*term[:d], term[d] - 1, *term[d + 1 :])
        np.multiply(phi[rank[lower]], y[d], out=phi[k])
    return phi


def fit_patches(
    shares: NodeShares, samples: CellSamples, met: Meetings, dim: int, order: int, threads: int | None
) -> Patches:
    """Return the patches at the shares of `met`, all of one dimension and order.

    Parameters
    ----------
    shares, samples
        Of the model.
    met
        Cells that meet at the corners.
    dim, order
        Number of coordinates and degree of the polynomials.
    threads
        None: all processors.
    """
    terms = simplex_terms(dim, order)
    n = len(met.share)
    patches = Patches(
        met.share,
        np.empty((n, 3)),
        np.empty((n, dim, 3)),
        np.zeros((n, len(terms), 9)),
        terms,
        np.empty(n, dtype=bool),
        np.zeros(n, dtype=bool),
    )
    plane = shares.model.plane
    fixed = None if plane is None or dim != 2 else np.delete(np.eye(3), plane.normal, axis=1)
    points = shares.model.points

    def work(a: int, b: int) -> None:
        node = points[shares.point[met.share[a:b]]] - samples.origin
        _fit(patches, slice(a, b), node, met.gather(a, b, samples), samples, fixed)

    over_chunks(work, met.ranges(), threads)
    return patches


def _fit(
    patches: Patches, rows: slice, node: Floats, at: Gathered, samples: CellSamples, fixed: Floats | None
) -> None:
    dim = patches.axes.shape[1]
    n = at.lengths.astype(np.float64)
    x = samples.x[:, at.at] - at.spread(node.T)
    mean = at.sums(x) / n
    x -= at.spread(mean)
    covariance = _symmetric(np.stack([at.sums(x[i] * x[j]) for i, j in PAIRS]) / n)
    frame = _tangent_frame(samples, at, dim) if fixed is None else fixed
    variance, axes = np.linalg.eigh(np.swapaxes(frame, -1, -2) @ covariance @ frame)
    seen = variance > _SPREAD * variance[:, -1:]
    seen &= variance > 0
    scale = np.where(seen, 1.0 / np.sqrt(np.where(seen, variance, 1.0)), 0.0)
    axes = np.swapaxes(frame @ axes, -1, -2) * scale[:, :, None]
    corner = -np.einsum("sdj,js->ds", axes, mean)
    good = seen.all(axis=1) & ((corner**2).sum(axis=0) <= _REACH**2) & (n > dim)
    covered = seen & (corner.T**2 <= _COVER**2)
    patches.center[rows] = node + mean.T
    patches.axes[rows] = axes
    H = samples.H[:, at.at]
    slopes = np.stack([at.sums(x[j] * H) for j in range(3)]) / n
    first = _linear_terms(patches.terms, dim)
    patches.coefficients[rows, 0] = (at.sums(H) / n).T
    patches.coefficients[rows, first] = np.einsum("sdj,jcs->sdc", axes * covered[:, :, None], slopes)
    if len(patches.terms) > dim + 1:
        _fit_higher(patches, rows, good, at, x, H)
    else:
        patches.linear[rows] = ~good & covered.any(axis=1)
    patches.good[rows] = good


def _linear_terms(terms: tuple[tuple[int, ...], ...], dim: int) -> list[int]:
    """Return the position of each coordinate."""
    return [terms.index(tuple(int(i == d) for i in range(dim))) for d in range(dim)]


def _fit_higher(
    patches: Patches,
    rows: slice,
    good: NDArray[np.bool_],
    at: Gathered,
    x: Floats,
    H: Floats,
) -> None:
    """Put the full polynomial where it can be fitted, and take from `good` the patches where it cannot."""
    axes = patches.axes[rows]
    y = np.stack([sum(at.spread(axes[:, d, j]) * x[j] for j in range(3)) for d in range(axes.shape[1])])
    phi = monomials(y, patches.terms)
    t, n = len(phi), at.lengths
    A, B = np.empty((len(n), t, t)), np.empty((len(n), t, 9))
    for k in range(t):
        A[:, k, k:] = A[:, k:, k] = (at.sums(phi[k] * phi[k:]) / n).T
        B[:, k] = (at.sums(phi[k] * H) / n).T
    values = np.linalg.eigvalsh(A)
    good &= (n >= t) & (values[:, 0] * _CONDITION > values[:, -1])
    patches.coefficients[rows][good] = np.linalg.solve(A[good], B[good])


def _symmetric(parts: Floats) -> Floats:
    out = np.empty((parts.shape[-1], 3, 3))
    for (i, j), values in zip(PAIRS, parts):
        out[:, i, j] = out[:, j, i] = values
    return out


def _tangent_frame(samples: CellSamples, at: Gathered, dim: int) -> Floats:
    """Return the axes `(3, dim)` or `(n, 3, dim)` of the tangent space of each patch as columns."""
    if dim == 3 or samples.tangent is None:
        return np.eye(3)[:, :dim]
    mean = _symmetric(at.sums(samples.tangent[:, at.at]))
    return np.linalg.eigh(mean)[1][:, :, 3 - dim :]
