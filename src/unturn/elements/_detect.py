"""Where the nodes of cells of order 3 and higher really lie: read from cells and edges that are straight."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.elements._element import Element
from unturn.elements._lookup import FAMILIES, element
from unturn.elements._shape import Floats
from unturn.elements._spacing import Spacing, gll
from unturn.errors import InputError

_NAMED: tuple[Literal["equal", "gll"], ...] = ("equal", "gll")
_SAMPLE = 2000
_TOLERANCE = 1e-4
"""In reference coordinates. The families of nodes in use differ by 4e-3 or more."""
_BLURRED = 2e-3
"""Tolerance above which a cell is stored too coarsely to tell them apart."""


def detect_spacing(points: Floats, connectivity: NDArray[np.integer], cell_type: str) -> Spacing:
    """Return where the nodes of the cells lie: ``"equal"``, ``"gll"`` or measured reference nodes.

    Parameters
    ----------
    points
        ``(n_points, 3)`` coordinates.
    connectivity
        ``(n_cells, n_nodes)`` of one block.
    cell_type
        meshio's name.

    Notes
    -----
    Only Lagrange cells of order 3 and higher can differ; everything else is ``"equal"``. At most 2000 cells,
    evenly spread over the block, are looked at.

    1. Affine cells (straight, with parallel opposite sides): the reference coordinates of all nodes follow
       from the corners. If half of these cells or more agree with equal spacing or with
       Gauss-Lobatto-Legendre nodes, it is that; otherwise what all of them agree on.
    2. No such cell: straight edges vote between the two.
    3. No straight edge: the distances along the edges decide, and without clear evidence for
       Gauss-Lobatto-Legendre it is VTK's definition, equal.

    Raises
    ------
    InputError
        The affine cells disagree about where their nodes are.
    """
    equal = element(cell_type, connectivity.shape[1])
    if cell_type not in FAMILIES or equal.order < 3 or not len(connectivity):
        return "equal"
    picked = np.unique(np.linspace(0, len(connectivity) - 1, _SAMPLE).astype(np.int64))
    cells = _Cells.of(points, connectivity[picked], equal.n_corners)
    local, tolerance = _affine(cells, equal)
    if len(local):
        return _from_affine(local, tolerance, equal)
    return _from_edges(cells, equal)


@dataclass(frozen=True)
class _Cells:
    """Cells in units of their own size, seen from their first corner.

    Parameters
    ----------
    places
        ``(n_cells, n_nodes, 3)``.
    noise
        ``(n_cells,)`` how far a node may be off because of the precision of the stored coordinates.
    """

    places: Floats
    noise: Floats

    @classmethod
    def of(cls, points: Floats, connectivity: NDArray[np.integer], n_corners: int) -> _Cells:
        nodes = np.asarray(points[connectivity], dtype=np.float64)
        size = np.linalg.norm(np.ptp(nodes[:, :n_corners], axis=1), axis=1)
        usable = np.isfinite(nodes).all(axis=(1, 2)) & (size > 0)
        nodes, size = nodes[usable], size[usable]
        exact = np.finfo(points.dtype).eps if np.issubdtype(points.dtype, np.floating) else 0.0
        largest = np.abs(nodes).max(axis=(1, 2))
        return cls((nodes - nodes[:, :1]) / size[:, None, None], 2 * exact * largest / size)


def _affine(cells: _Cells, equal: Element) -> tuple[Floats, Floats]:
    """Reference nodes ``(n, n_nodes, dim)`` of the cells that are straight and affine, tolerance ``(n,)``."""
    vertices = equal.shape.vertices
    design = np.concatenate([np.ones((len(vertices), 1)), vertices], axis=1)
    fit = np.linalg.pinv(design) @ cells.places[:, : len(vertices)]
    stretch = np.linalg.svd(fit[:, 1:], compute_uv=False)
    tolerance = _TOLERANCE + cells.noise / np.maximum(stretch[:, -1], 1e-12)
    sharp = tolerance < _BLURRED
    start, axes, tolerance = fit[sharp, :1], fit[sharp, 1:], tolerance[sharp]
    places = cells.places[sharp]
    local = (places - start) @ np.linalg.pinv(axes)
    off = [np.abs(places - start - local @ axes), np.abs(local[:, : len(vertices)] - vertices)]
    for f, normal in enumerate(equal.shape.facet_normals):
        on = equal.shape.on_facet(equal.places, f)
        foot = vertices[equal.shape.facets[f][0]]
        off.append(np.abs((local[:, on] - foot) @ (normal / np.linalg.norm(normal)))[..., None])
    worst = np.max([o.max(axis=(1, 2)) for o in off], axis=0)
    return local[worst < tolerance], tolerance[worst < tolerance]


def _from_affine(local: Floats, tolerance: Floats, equal: Element) -> Spacing:
    for name in _NAMED:
        nodes = element(equal.name, equal.n_nodes, name).nodes
        if np.mean(np.abs(local - nodes).max(axis=(1, 2)) < tolerance) >= 0.5:
            return name
    common = np.median(local, axis=0)
    common[: equal.n_corners] = equal.shape.vertices
    agree = bool((np.abs(local - common).max(axis=(1, 2)) < 2 * tolerance).all())
    ordered = any(_nearest_is_own(common, element(equal.name, equal.n_nodes, n).nodes) for n in _NAMED)
    if not (agree and ordered and _same_from_both_ends(common, equal, float(tolerance.max()))):
        raise InputError(
            f"the nodes of the straight {equal.name} cells of order {equal.order} are neither equally spaced "
            "nor at Gauss-Lobatto-Legendre points, and no other spacing fits all of them, so the gradient "
            "inside the cells is not known. Check the node order of the export, or write a lower order."
        )
    return tuple(tuple(float(c) for c in row) for row in common)


def _nearest_is_own(nodes: Floats, named: Floats) -> bool:
    """Whether each node lies nearest to the node of the same number: not so when the order is another."""
    nearest = np.linalg.norm(nodes[:, None] - named[None], axis=-1).argmin(axis=1)
    return bool((nearest == np.arange(len(nodes))).all())


def _same_from_both_ends(nodes: Floats, equal: Element, tolerance: float) -> bool:
    """Whether all edges carry one and the same symmetric spacing, and the nodes hold the space."""
    found = np.array([_fractions(nodes[[a, *between, b]]) for a, b, between in equal.edges])
    both = np.concatenate([found, 1 - found[:, ::-1]])
    return bool(np.ptp(both, axis=0).max() < 2 * tolerance) and bool(
        np.linalg.cond(equal.space.values(nodes)) < 1e4
    )


def _fractions(nodes: Floats) -> Floats:
    """Distances along chains of nodes ``(..., n, dim)`` as fractions ``(..., n)`` of the whole."""
    steps = np.linalg.norm(np.diff(nodes, axis=-2), axis=-1)
    along = np.concatenate([np.zeros((*steps.shape[:-1], 1)), np.cumsum(steps, axis=-1)], axis=-1)
    length = along[..., -1:]
    return along / np.where(length > 0, length, 1.0)


def _from_edges(cells: _Cells, equal: Element) -> Spacing:
    chains = np.stack([cells.places[:, [a, *between, b]] for a, b, between in equal.edges], axis=1)
    noise = np.broadcast_to(cells.noise[:, None], chains.shape[:2])
    chord = np.linalg.norm(chains[..., -1, :] - chains[..., 0, :], axis=-1)
    whole = np.linalg.norm(np.diff(chains, axis=-2), axis=-1).sum(axis=-1)
    tolerance = _TOLERANCE + noise / np.maximum(chord, 1e-12)
    sharp = (tolerance < _BLURRED) & (whole > 0)
    fractions = _fractions(chains)
    off = {
        name: np.abs(fractions - places).max(axis=-1)
        for name, places in (("equal", np.linspace(0, 1, equal.order + 1)), ("gll", gll(equal.order)))
    }
    # A bow of height h lengthens a chord c by about (h / c)^2: the square of the tolerance on the nodes.
    straight = sharp & (whole - chord < tolerance**2 * chord + 4 * noise)
    votes = {name: int((straight & (o < tolerance)).sum()) for name, o in off.items()}
    if votes["equal"] != votes["gll"]:
        return "gll" if votes["gll"] > votes["equal"] else "equal"
    bent = {name: float(np.median(o[sharp])) if sharp.any() else 0.0 for name, o in off.items()}
    return "gll" if 3 * bent["gll"] < bent["equal"] else "equal"
