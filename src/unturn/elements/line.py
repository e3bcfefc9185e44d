"""Lines on ``[-1, 1]``."""

from __future__ import annotations

from functools import partial

from unturn.elements._element import Element, placed
from unturn.elements._lagrange import Family, inner_box, warp_tensor
from unturn.elements._quadrature import box_rule
from unturn.elements._shape import Shape, read_only
from unturn.elements._space import tensor
from unturn.source import Source

LINE = Shape("line", read_only([[-1], [1]]), read_only([0]), 2.0, edges=((0, 1),))
_SOURCE = Source(
    "published", "Zienkiewicz and Taylor, The Finite Element Method, Lagrange polynomials on a line"
)

ELEMENTS = (
    Element("line", LINE, 1, placed(LINE), tensor(1), partial(box_rule, 1, 1), _SOURCE, 3),
    Element("line3", LINE, 2, placed(LINE, LINE.edges), tensor(2), partial(box_rule, 1, 2), _SOURCE, 21),
    Element(
        "line4",
        LINE,
        3,
        read_only([[-1], [1], [-1 / 3], [1 / 3]]),
        tensor(3),
        partial(box_rule, 1, 3),
        _SOURCE,
        35,
    ),
)
LAGRANGE = Family(
    "VTK_LAGRANGE_CURVE",
    68,
    LINE,
    corners=((0,), (1,)),
    space=tensor,
    rule=lambda order: box_rule(1, order),
    warp=warp_tensor,
    body=inner_box(1),
)
