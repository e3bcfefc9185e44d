"""Quadrilaterals on ``[-1, 1]^2``."""

from __future__ import annotations

from functools import partial

from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, warp_tensor
from unturn.elements._quadrature import box_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import superlinear, tensor
from unturn.source import Source

QUAD = Shape(
    "quad",
    read_only([[-1, -1], [1, -1], [1, 1], [-1, 1]]),
    read_only([0, 0]),
    4.0,
    edges=((0, 1), (1, 2), (2, 3), (3, 0)),
)
PIXEL = Shape(
    "pixel",
    read_only([[-1, -1], [1, -1], [-1, 1], [1, 1]]),
    QUAD.centroid,
    4.0,
    edges=((0, 1), (1, 3), (3, 2), (2, 0)),
)
_TENSOR = Source("published", "Zienkiewicz and Taylor, The Finite Element Method, Lagrange family")
_SERENDIPITY = Source(
    "published",
    "Arnold and Awanou 2011, The serendipity family of finite elements, Found. Comput. Math. 11, 337-344",
)
_HALF_LINEAR = Source("published", "VTK 9.7.2, vtkQuadraticLinearQuad: quadratic along x, linear along y")
_BODY = ((0, 1, 2, 3),)
_RULE = partial(box_rule, 2, 2)

QUAD4 = Element("quad", QUAD, 1, placed(QUAD), tensor(1, 1), _RULE, _TENSOR, 9)
QUAD6 = Element("quad6", QUAD, 1, placed(QUAD, ((0, 1), (2, 3))), tensor(2, 1), _RULE, _HALF_LINEAR, 30)
QUAD8 = Element("quad8", QUAD, 2, placed(QUAD, QUAD.edges), superlinear(2), _RULE, _SERENDIPITY, 23)
QUAD9 = Element("quad9", QUAD, 2, placed(QUAD, QUAD.edges, _BODY), tensor(2, 2), _RULE, _TENSOR, 28)
PIXEL4 = Element("pixel", PIXEL, 1, placed(PIXEL), tensor(1, 1), _RULE, _TENSOR, 8)
ELEMENTS = (QUAD4, QUAD6, QUAD8, QUAD9, PIXEL4)
LAGRANGE = Family(
    "VTK_LAGRANGE_QUADRILATERAL",
    70,
    QUAD,
    corners=((0, 0), (1, 0), (1, 1), (0, 1)),
    space=lambda order: tensor(order, order),
    rule=lambda order: box_rule(2, max(order, 2)),
    warp=warp_tensor,
    edges=((0, 1), (1, 2), (3, 2), (0, 3)),
    faces=_BODY,
)
