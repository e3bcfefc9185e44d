"""Wedges: the triangle (0, 0), (1, 0), (0, 1) times ``[-1, 1]``; nodes 0, 1, 2 below, 3, 4, 5 above them."""

from __future__ import annotations

from functools import partial

from unturn.elements import quad, triangle
from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, inner_prism, inner_rows, warp_prism
from unturn.elements._quadrature import wedge_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import prism_space
from unturn.source import Source

_QUADS = ((0, 1, 4, 3), (1, 2, 5, 4), (2, 0, 3, 5))
WEDGE = Shape(
    "wedge",
    read_only([(x, y, z) for z in (-1, 1) for x, y in ((0, 0), (1, 0), (0, 1))]),
    read_only([1 / 3, 1 / 3, 0]),
    1.0,
    edges=((0, 1), (1, 2), (2, 0), (3, 4), (4, 5), (5, 3), (0, 3), (1, 4), (2, 5)),
    faces=((0, 2, 1), (3, 4, 5), *_QUADS),
)
_PRODUCT = Source("published", "Zienkiewicz and Taylor, The Finite Element Method, triangle times line")
_SERENDIPITY = Source(
    "published", "Zienkiewicz and Taylor, The Finite Element Method, 15-node prism: P1 x P2 + P2 x P1"
)
_HALF_LINEAR = Source(
    "published", "VTK 9.7.2, vtkQuadraticLinearWedge: quadratic in the triangle, linear along it"
)
_RULE = partial(wedge_rule, 2, 2)


ELEMENTS = (
    Element(
        "wedge",
        WEDGE,
        1,
        placed(WEDGE),
        prism_space((1, 1)),
        _RULE,
        _PRODUCT,
        13,
        face_elements=(triangle.TRIANGLE3,) * 2 + (quad.QUAD4,) * 3,
    ),
    Element(
        "wedge12",
        WEDGE,
        1,
        placed(WEDGE, WEDGE.edges[:6]),
        prism_space((2, 1)),
        _RULE,
        _HALF_LINEAR,
        31,
        face_elements=(triangle.TRIANGLE6,) * 2 + (quad.QUAD6,) * 3,
    ),
    Element(
        "wedge15",
        WEDGE,
        2,
        placed(WEDGE, WEDGE.edges),
        prism_space((1, 2), (2, 1)),
        _RULE,
        _SERENDIPITY,
        26,
        face_elements=(triangle.TRIANGLE6,) * 2 + (quad.QUAD8,) * 3,
    ),
    Element(
        "wedge18",
        WEDGE,
        2,
        placed(WEDGE, WEDGE.edges, _QUADS),
        prism_space((2, 2)),
        _RULE,
        _PRODUCT,
        32,
        face_elements=(triangle.TRIANGLE6,) * 2 + (quad.QUAD9,) * 3,
    ),
)
LAGRANGE = Family(
    "VTK_LAGRANGE_WEDGE",
    73,
    WEDGE,
    corners=tuple((int(x), int(y), int(z > 0)) for x, y, z in WEDGE.vertices),
    space=lambda order: prism_space((order, order)),
    rule=lambda order: wedge_rule(max(2 * (order - 1), 2), max(order, 2)),
    warp=warp_prism,
    edges=WEDGE.edges,
    faces=((0, 1, 2), (3, 4, 5), *_QUADS),
    body=inner_prism,
    inner_triangle=inner_rows,
    facets=(triangle.LAGRANGE,) * 2 + (quad.LAGRANGE,) * 3,
    refused={21: "a quadratic wedge with face and centre nodes, which has no row in the element table"},
)
