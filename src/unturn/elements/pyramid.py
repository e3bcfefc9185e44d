"""Pyramids on the base ``[-1, 1]^2`` at z = 0 with the apex (0, 0, 1)."""

from __future__ import annotations

from dataclasses import replace
from functools import partial

from unturn.elements import quad, triangle
from unturn.elements._element import Element, placed
from unturn.elements._quadrature import pyramid_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import pyramid_space
from unturn.source import Source

_BASE = (0, 1, 2, 3)
_APEX = 4
PYRAMID = Shape(
    "pyramid",
    read_only([[-1, -1, 0], [1, -1, 0], [1, 1, 0], [-1, 1, 0], [0, 0, 1]]),
    read_only([0, 0, 1 / 4]),
    4 / 3,
    edges=((0, 1), (1, 2), (2, 3), (3, 0), (0, 4), (1, 4), (2, 4), (3, 4)),
    faces=((0, 3, 2, 1), (0, 1, 4), (1, 2, 4), (2, 3, 4), (3, 0, 4)),
)
_FULL = Source(
    "published",
    "Bergot, Cohen and Durufle 2010, Higher-order finite elements for hybrid meshes using new nodal "
    "pyramidal elements, J. Sci. Comput. 42, 345-381",
)
_SERENDIPITY = Source(
    "published",
    "Bedrosian 1992, Shape functions and integration formulas for three-dimensional finite element analysis, "
    "Int. J. Numer. Meth. Eng. 35, 95-108",
)
_RULE = partial(pyramid_rule, 2)

ELEMENTS = (
    Element(
        "pyramid",
        PYRAMID,
        1,
        placed(PYRAMID),
        pyramid_space(1),
        _RULE,
        _FULL,
        14,
        face_elements=(quad.QUAD4,) + (triangle.TRIANGLE3,) * 4,
        node_jacobian_exempt=(_APEX,),
    ),
    Element(
        "pyramid13",
        PYRAMID,
        2,
        placed(PYRAMID, PYRAMID.edges),
        pyramid_space(2, (2, 2, 2)),
        _RULE,
        _SERENDIPITY,
        27,
        face_elements=(quad.QUAD8,) + (triangle.TRIANGLE6,) * 4,
        node_jacobian_exempt=(_APEX,),
    ),
    Element(
        "pyramid14",
        PYRAMID,
        2,
        placed(PYRAMID, PYRAMID.edges, (_BASE,)),
        pyramid_space(2),
        _RULE,
        _FULL,
        74,
        face_elements=(quad.QUAD9,) + (triangle.TRIANGLE6,) * 4,
        node_jacobian_exempt=(_APEX,),
    ),
)
# VTK 9.7.2 has the number 74 and no class behind it: only the orders with one possible numbering are offered.
LAGRANGE_BY_NODES = {
    row.n_nodes: replace(row, name="VTK_LAGRANGE_PYRAMID", vtk_type=74) for row in (ELEMENTS[0], ELEMENTS[2])
}
