"""Triangles with the corners (0, 0), (1, 0), (0, 1)."""

from __future__ import annotations

from functools import partial

import numpy as np

from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, warp_simplex
from unturn.elements._quadrature import triangle_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import Space, complete, simplex, simplex_terms
from unturn.source import Source

TRIANGLE = Shape(
    "triangle",
    read_only([[0, 0], [1, 0], [0, 1]]),
    read_only([1 / 3, 1 / 3]),
    1 / 2,
    edges=((0, 1), (1, 2), (2, 0)),
)
_SOURCE = Source(
    "published", "Zienkiewicz and Taylor, The Finite Element Method, complete polynomials on a triangle"
)
_BODY = ((0, 1, 2),)


def _with_bubble() -> Space:
    """Complete quadratics plus the cubic bubble ``x y (1 - x - y)``.

    The bubble vanishes at every node of the cubic triangle but the centre: its coefficients are read there.
    """
    terms = simplex_terms(2, 3)
    nodes = np.array(terms) / 3
    centre = [t for t, node in enumerate(terms) if node == (1, 1)]
    bubble = Space(simplex, terms).cardinal(nodes)[:, centre]
    quadratics = np.eye(len(terms))[: len(simplex_terms(2, 2))]
    return Space(simplex, terms, read_only([*quadratics, *bubble.T]))


TRIANGLE3 = Element(
    "triangle", TRIANGLE, 1, placed(TRIANGLE), complete(2, 1), partial(triangle_rule, 1), _SOURCE, 5
)
TRIANGLE6 = Element(
    "triangle6",
    TRIANGLE,
    2,
    placed(TRIANGLE, TRIANGLE.edges),
    complete(2, 2),
    partial(triangle_rule, 2),
    _SOURCE,
    22,
)
TRIANGLE7 = Element(
    "triangle7",
    TRIANGLE,
    2,
    placed(TRIANGLE, TRIANGLE.edges, _BODY),
    _with_bubble(),
    partial(triangle_rule, 4),
    Source("published", "VTK 9.7.2, vtkBiQuadraticTriangle: complete quadratics and the cubic bubble"),
    34,
)
ELEMENTS = (TRIANGLE3, TRIANGLE6, TRIANGLE7)
LAGRANGE = Family(
    "VTK_LAGRANGE_TRIANGLE",
    69,
    TRIANGLE,
    corners=((0, 0), (1, 0), (0, 1)),
    space=partial(complete, 2),
    rule=lambda order: triangle_rule(2 * (order - 1)),
    warp=warp_simplex,
    edges=TRIANGLE.edges,
    faces=_BODY,
    refused={7: "a quadratic triangle with a bubble written as a Lagrange cell: write it as triangle7"},
)
