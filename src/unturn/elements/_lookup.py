"""From a cell type and a number of nodes to an element, or to the reason why there is none."""

from __future__ import annotations

from functools import lru_cache

from unturn.elements import hexahedron, line, pyramid, quad, tetra, triangle, wedge
from unturn.elements._element import Element
from unturn.elements._lagrange import MAX_ORDER, Family, lagrange
from unturn.elements._spacing import Spacing
from unturn.errors import InputError, close_matches

_SHAPES = (line, triangle, quad, tetra, hexahedron, wedge, pyramid)
_VTK_MAX_ORDER = 10
_PYRAMID = "VTK_LAGRANGE_PYRAMID"

ELEMENTS: dict[str, Element] = {row.name: row for module in _SHAPES for row in module.ELEMENTS}
FAMILIES: dict[str, Family] = {
    module.LAGRANGE.name: module.LAGRANGE for module in (line, triangle, quad, tetra, hexahedron, wedge)
}
_ORDERS: dict[str, dict[int, int]] = {
    **{f.name: {f.n_nodes(k): k for k in range(1, MAX_ORDER + 1)} for f in FAMILIES.values()},
    _PYRAMID: {n: row.order for n, row in pyramid.LAGRANGE_BY_NODES.items()},
}
"""Number of nodes -> order of the Lagrange cells that are computed."""

_REASONS = {
    "empty": "an empty cell has no nodes",
    "vertex": "a vertex has no extent, so no gradient",
    "poly_vertex": "a set of vertices has no extent, so no gradient",
    "poly_line": "a polyline is a chain of lines: write its parts as lines",
    "polyline": "a polyline is a chain of lines: write its parts as lines",
    "triangle_strip": "a triangle strip is a drawing form: write its parts as triangles",
    "polygon": "a polygon has no agreed shape functions between its nodes",
    "polyhedron": "a polyhedron has no agreed shape functions between its nodes",
    "convex_point_set": "a convex point set has no agreed shape functions between its nodes",
    "penta_prism": "a pentagonal prism has no agreed polynomial shape functions",
    "hexa_prism": "a hexagonal prism has no agreed polynomial shape functions",
}
_BEZIER = "the points of a Bezier cell are control points: displacements there are not those of the material"


@lru_cache(maxsize=512)
def element(cell_type: str, n_nodes: int, spacing: Spacing = "equal") -> Element:
    """Return the element of a cell type with this number of nodes.

    Parameters
    ----------
    cell_type
        meshio's name, including ``VTK_LAGRANGE_*`` of order 1 to 6: the number of nodes tells the order.
    n_nodes
        Nodes of each cell.
    spacing
        Where the nodes of a Lagrange cell lie: ``"equal"``, ``"gll"`` or measured reference nodes, as
        `detect_spacing` returns it.

    Raises
    ------
    InputError
        The cell type cannot be computed, or the number of nodes does not fit it.

    Examples
    --------
    >>> element("VTK_LAGRANGE_TETRAHEDRON", 20).order
    3
    >>> element("tetra10", 9)
    Traceback (most recent call last):
    unturn.errors.InputError: a tetra10 cell has 10 nodes; 9 were found. The cell type or the list of nodes
        was written wrongly: write the file again.
    """
    reason = not_computable(cell_type, n_nodes)
    if reason is not None:
        raise InputError(f"{cell_type} cells with {n_nodes} nodes cannot be computed: {reason}.")
    if cell_type in ELEMENTS:
        row = ELEMENTS[cell_type]
        if row.n_nodes != n_nodes:
            raise InputError(
                f"a {cell_type} cell has {row.n_nodes} nodes; {n_nodes} were found. The cell type or the "
                "list of nodes was written wrongly: write the file again."
            )
        return row
    orders = _ORDERS[cell_type]
    if n_nodes not in orders:
        listed = ", ".join(f"{n} (order {order})" for n, order in orders.items())
        raise InputError(
            f"a {cell_type} cell has {listed} nodes; {n_nodes} were found. Cells of another order along each "
            "axis are not computed: write cells of one order, or correct the list of nodes."
        )
    if cell_type == _PYRAMID:
        return pyramid.LAGRANGE_BY_NODES[n_nodes]
    return lagrange(FAMILIES[cell_type], orders[n_nodes], spacing if orders[n_nodes] > 2 else "equal")


@lru_cache(maxsize=512)
def not_computable(cell_type: str, n_nodes: int) -> str | None:
    """Return in words why a cell type gives no gradient; None when it does.

    A known type with a number of nodes that no such cell can have is an error of `element`, not a reason.

    Examples
    --------
    >>> not_computable("vertex", 1)
    'a vertex has no extent, so no gradient'
    >>> not_computable("tetra10", 10) is None
    True
    """
    if cell_type in ELEMENTS:
        return None
    if cell_type in _ORDERS:
        return _not_computable_lagrange(cell_type, n_nodes)
    if cell_type.startswith("VTK_BEZIER"):
        return _BEZIER
    reason = _REASONS.get(cell_type.rstrip("0123456789"))
    if reason is not None:
        return reason
    hint = close_matches(cell_type, [*ELEMENTS, *_ORDERS]).rstrip("?").replace(" Did you mean", "; similar:")
    return f"the cell type {cell_type!r} is not in the element table{hint}"


def _not_computable_lagrange(cell_type: str, n_nodes: int) -> str | None:
    if cell_type == _PYRAMID:
        counts = {k: sum((c + 1) ** 2 for c in range(k + 1)) for k in range(3, _VTK_MAX_ORDER + 1)}
        beyond = "no node numbering is agreed for pyramids above order 2"
    else:
        family = FAMILIES[cell_type]
        if n_nodes in family.refused:
            return family.refused[n_nodes]
        counts = {k: family.n_nodes(k) for k in range(MAX_ORDER + 1, _VTK_MAX_ORDER + 1)}
        beyond = f"orders 1 to {MAX_ORDER} are computed"
    return next((f"it is of order {k}, and {beyond}" for k, n in counts.items() if n == n_nodes), None)
