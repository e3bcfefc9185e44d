"""Hexahedra on ``[-1, 1]^3``."""

from __future__ import annotations

from functools import partial

from unturn.elements import quad
from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, inner_box, warp_tensor
from unturn.elements._quadrature import box_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import superlinear, tensor
from unturn.source import Source

_SQUARE = ((-1, -1), (1, -1), (1, 1), (-1, 1))
HEXAHEDRON = Shape(
    "hexahedron",
    read_only([(x, y, z) for z in (-1, 1) for x, y in _SQUARE]),
    read_only([0, 0, 0]),
    8.0,
    edges=(
        *((0, 1), (1, 2), (2, 3), (3, 0)),
        *((4, 5), (5, 6), (6, 7), (7, 4)),
        *((0, 4), (1, 5), (2, 6), (3, 7)),
    ),
    faces=((0, 4, 7, 3), (1, 2, 6, 5), (0, 1, 5, 4), (3, 7, 6, 2), (0, 3, 2, 1), (4, 5, 6, 7)),
)
VOXEL = Shape(
    "voxel",
    read_only([(x, y, z) for z in (-1, 1) for y in (-1, 1) for x in (-1, 1)]),
    HEXAHEDRON.centroid,
    8.0,
    edges=(
        *((0, 1), (1, 3), (3, 2), (2, 0)),
        *((4, 5), (5, 7), (7, 6), (6, 4)),
        *((0, 4), (1, 5), (3, 7), (2, 6)),
    ),
    faces=((0, 4, 6, 2), (1, 3, 7, 5), (0, 1, 5, 4), (2, 6, 7, 3), (0, 2, 3, 1), (4, 5, 7, 6)),
)
_TENSOR = Source("published", "Zienkiewicz and Taylor, The Finite Element Method, Lagrange family")
_SERENDIPITY = Source(
    "published",
    "Arnold and Awanou 2011, The serendipity family of finite elements, Found. Comput. Math. 11, 337-344",
)
_SIDE_FACES = Source(
    "published",
    "VTK 9.7.2, vtkBiQuadraticQuadraticHexahedron: serendipity and the bubbles of the four side faces",
)
_SIDES, _ENDS = HEXAHEDRON.faces[:4], HEXAHEDRON.faces[4:]
_BODY = (tuple(range(8)),)
_RULE = partial(box_rule, 3, 2)


ELEMENTS = (
    Element(
        "hexahedron",
        HEXAHEDRON,
        1,
        placed(HEXAHEDRON),
        tensor(1, 1, 1),
        _RULE,
        _TENSOR,
        12,
        face_elements=(quad.QUAD4,) * 6,
    ),
    Element(
        "hexahedron20",
        HEXAHEDRON,
        2,
        placed(HEXAHEDRON, HEXAHEDRON.edges),
        superlinear(3),
        _RULE,
        _SERENDIPITY,
        25,
        face_elements=(quad.QUAD8,) * 6,
    ),
    Element(
        "hexahedron24",
        HEXAHEDRON,
        2,
        placed(HEXAHEDRON, HEXAHEDRON.edges, _SIDES),
        superlinear(3, (2, 0, 2), (2, 1, 2), (0, 2, 2), (1, 2, 2)),
        _RULE,
        _SIDE_FACES,
        33,
        face_elements=(quad.QUAD9,) * 4 + (quad.QUAD8,) * 2,
    ),
    Element(
        "hexahedron27",
        HEXAHEDRON,
        2,
        placed(HEXAHEDRON, HEXAHEDRON.edges, _SIDES, _ENDS, _BODY),
        tensor(2, 2, 2),
        _RULE,
        _TENSOR,
        29,
        face_elements=(quad.QUAD9,) * 6,
    ),
    Element(
        "voxel", VOXEL, 1, placed(VOXEL), tensor(1, 1, 1), _RULE, _TENSOR, 11, face_elements=(quad.QUAD4,) * 6
    ),
)
LAGRANGE = Family(
    "VTK_LAGRANGE_HEXAHEDRON",
    72,
    HEXAHEDRON,
    corners=tuple((int(x > 0), int(y > 0), int(z > 0)) for x, y, z in HEXAHEDRON.vertices),
    space=lambda order: tensor(order, order, order),
    rule=lambda order: box_rule(3, max(order, 2)),
    warp=warp_tensor,
    edges=(
        *((0, 1), (1, 2), (3, 2), (0, 3)),
        *((4, 5), (5, 6), (7, 6), (4, 7)),
        *((0, 4), (1, 5), (2, 6), (3, 7)),
    ),
    faces=((0, 3, 7, 4), (1, 2, 6, 5), (0, 1, 5, 4), (3, 2, 6, 7), (0, 1, 2, 3), (4, 5, 6, 7)),
    body=inner_box(3),
    facets=(quad.LAGRANGE,) * 6,
)
