"""Tetrahedra with the corners (0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)."""

from __future__ import annotations

from functools import partial

from unturn.elements import triangle
from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, warp_simplex
from unturn.elements._quadrature import tetra_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import complete
from unturn.source import Source

TETRA = Shape(
    "tetra",
    read_only([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]]),
    read_only([1 / 4] * 3),
    1 / 6,
    edges=((0, 1), (1, 2), (2, 0), (0, 3), (1, 3), (2, 3)),
    faces=((0, 1, 3), (1, 2, 3), (2, 0, 3), (0, 2, 1)),
)
_SOURCE = Source(
    "published", "Zienkiewicz and Taylor, The Finite Element Method, complete polynomials on a tetrahedron"
)


def _inner(order: int) -> list[tuple[int, ...]]:
    if order < 4:
        return []
    inner = LAGRANGE.lattice(order - 4).tolist() if order > 4 else [(0, 0, 0)]
    return [tuple(c + 1 for c in row) for row in inner]


ELEMENTS = (
    Element(
        "tetra",
        TETRA,
        1,
        placed(TETRA),
        complete(3, 1),
        partial(tetra_rule, 1),
        _SOURCE,
        10,
        face_elements=(triangle.TRIANGLE3,) * 4,
    ),
    Element(
        "tetra10",
        TETRA,
        2,
        placed(TETRA, TETRA.edges),
        complete(3, 2),
        partial(tetra_rule, 2),
        _SOURCE,
        24,
        face_elements=(triangle.TRIANGLE6,) * 4,
    ),
)
LAGRANGE = Family(
    "VTK_LAGRANGE_TETRAHEDRON",
    71,
    TETRA,
    corners=((0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)),
    space=partial(complete, 3),
    rule=lambda order: tetra_rule(2 * (order - 1)),
    warp=warp_simplex,
    edges=TETRA.edges,
    faces=((0, 1, 3), (2, 3, 1), (0, 3, 2), (0, 2, 1)),
    body=_inner,
    facets=(triangle.LAGRANGE,) * 4,
    refused={15: "a quadratic tetrahedron with face and centre nodes, which has no row in the element table"},
)
