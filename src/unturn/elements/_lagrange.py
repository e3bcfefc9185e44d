"""VTK's Lagrange cells: node numbering of any order, and elements made from it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import lru_cache
from itertools import product

import numpy as np
from numpy.typing import NDArray

from unturn.elements._element import Element
from unturn.elements._quadrature import Quadrature
from unturn.elements._shape import Floats, Shape, read_only
from unturn.elements._space import Space
from unturn.elements._spacing import Spacing, gll, simplex_node
from unturn.source import Source

Lattice = NDArray[np.int64]
MAX_ORDER = 6
NUMBERING = Source(
    "published",
    "VTK 9.7.2, classes vtkLagrange*: parametric coordinates of the points; spaces as for the fixed elements",
)


def triangle_lattice(order: int) -> list[tuple[int, int]]:
    """Return ``(i, j)`` of the nodes of a triangle: corners, edges, then the inner triangle alike."""
    if order < 0:
        return []
    if order == 0:
        return [(0, 0)]
    k = order
    ring = [(0, 0), (k, 0), (0, k)]
    steps = range(1, k)
    ring += [(s, 0) for s in steps] + [(k - s, s) for s in steps] + [(0, k - s) for s in steps]
    return ring + [(i + 1, j + 1) for i, j in triangle_lattice(k - 3)]


def inner_triangle(order: int) -> list[tuple[int, int]]:
    """Inner nodes of a triangle, again as a triangle: VTK's order in triangles and faces of tetrahedra."""
    return [(i + 1, j + 1) for i, j in triangle_lattice(order - 3)]


def inner_rows(order: int) -> list[tuple[int, int]]:
    """Inner nodes of a triangle row by row: VTK's order in wedges, a different one from order 5 on."""
    return [(i, j) for j in range(1, order) for i in range(1, order - j)]


def _inner_square(order: int) -> list[tuple[int, int]]:
    return [(i, j) for j in range(1, order) for i in range(1, order)]


@dataclass(frozen=True, eq=False)
class Family:
    """The Lagrange cells of one shape.

    Parameters
    ----------
    name, vtk_type, shape
        meshio's name, VTK's number, the reference shape.
    corners
        The vertices as integers: multiples of the order along each lattice axis.
    space, rule
        Space of an order; default quadrature of an order.
    warp
        ``(lattice, order) -> (n, dim)`` reference nodes at Gauss-Lobatto-Legendre spacing.
    edges, faces
        In the direction in which VTK numbers their inner nodes; a face's first axis runs from its first
        corner to the second, its second axis from the first to the last.
    body
        Inner nodes of a line or solid (a triangle or quadrilateral has its inner nodes through `faces`).
    inner_triangle
        Order of the inner nodes of triangular faces.
    facets
        Families of the shape's faces, for solids.
    refused
        Number of nodes -> why such a cell is not computed.
    """

    name: str
    vtk_type: int
    shape: Shape
    corners: tuple[tuple[int, ...], ...]
    space: Callable[[int], Space]
    rule: Callable[[int], Quadrature]
    warp: Callable[[Lattice, int], Floats]
    edges: tuple[tuple[int, int], ...] = ()
    faces: tuple[tuple[int, ...], ...] = ()
    body: Callable[[int], list[tuple[int, ...]]] = lambda order: []
    inner_triangle: Callable[[int], list[tuple[int, int]]] = inner_triangle
    facets: tuple[Family, ...] = ()
    refused: dict[int, str] = field(default_factory=dict)

    def lattice(self, order: int) -> Lattice:
        """``(n_nodes, dim)`` integer positions of the nodes in VTK's numbering."""
        corners = np.array(self.corners, dtype=np.int64)
        nodes = [order * corners]
        steps = np.arange(1, order)[:, None]
        nodes += [order * corners[a] + steps * (corners[b] - corners[a]) for a, b in self.edges]
        for face in self.faces:
            inner = self.inner_triangle(order) if len(face) == 3 else _inner_square(order)
            first, second = (corners[face[c]] - corners[face[0]] for c in (1, -1))
            nodes.append(np.array([order * corners[face[0]] + i * first + j * second for i, j in inner]))
        nodes.append(np.array(self.body(order), dtype=np.int64))
        return np.concatenate([n.reshape(-1, self.shape.dim) for n in nodes]).astype(np.int64)

    def n_nodes(self, order: int) -> int:
        """Number of nodes of an order."""
        return len(self.space(order).terms)

    def placed(self, fractions: Floats) -> Floats:
        """Turn lattice fractions (0 to 1 along each axis) into reference coordinates of the shape."""
        low = self.shape.vertices.min(axis=0)
        return read_only(low + fractions * np.ptp(self.shape.vertices, axis=0))

    def layout(self, order: int) -> Floats:
        """``(n_nodes, dim)`` reference nodes at equal spacing."""
        return self.placed(self.lattice(order) / order)


@lru_cache(maxsize=256)
def lagrange(family: Family, order: int, spacing: Spacing = "equal") -> Element:
    """Return the element of a family and order with its nodes at the given spacing."""
    layout = family.layout(order)
    if spacing == "equal":
        nodes = layout
    elif spacing == "gll":
        nodes = family.placed(family.warp(family.lattice(order), order))
    else:
        nodes = read_only(spacing)
    faces = tuple(
        lagrange(
            facet, order, spacing if isinstance(spacing, str) else _on_face(family, f, facet, order, nodes)
        )
        for f, facet in enumerate(family.facets)
    )
    return Element(
        name=family.name,
        shape=family.shape,
        order=order,
        nodes=nodes,
        space=family.space(order),
        rule=lambda: family.rule(order),
        source=NUMBERING,
        vtk_type=family.vtk_type,
        face_elements=faces,
        layout=layout,
    )


def _on_face(family: Family, face: int, facet: Family, order: int, nodes: Floats) -> Spacing:
    """Measured nodes of a solid seen on one of its faces."""
    equal = lagrange(family, order).face_nodes[face]
    corners = family.shape.vertices[list(family.shape.faces[face])]
    lengths = np.ptp(facet.shape.vertices, axis=0)
    axes = np.stack([corners[1] - corners[0], corners[-1] - corners[0]]) / lengths[:, None]
    local = (nodes[list(equal.nodes)] - corners[0]) @ np.linalg.pinv(axes)
    return tuple(tuple(float(c) for c in row) for row in facet.shape.vertices[0] + local)


def warp_tensor(lattice: Lattice, order: int) -> Floats:
    """Gauss-Lobatto-Legendre points along each axis."""
    return gll(order)[lattice]


def warp_simplex(lattice: Lattice, order: int) -> Floats:
    """Nodes of a triangle or tetrahedron moved along its edges to the Gauss-Lobatto-Legendre points."""
    counts = [(order - sum(row), *row) for row in lattice.tolist()]
    return np.array([simplex_node(c)[1:] for c in counts])


def warp_prism(lattice: Lattice, order: int) -> Floats:
    """Triangle nodes times Gauss-Lobatto-Legendre points."""
    return np.concatenate([warp_simplex(lattice[:, :2], order), gll(order)[lattice[:, 2:]]], axis=1)


def inner_box(dim: int) -> Callable[[int], list[tuple[int, ...]]]:
    """Inner nodes of a tensor cell, the first axis fastest."""
    return lambda order: [t[::-1] for t in product(range(1, order), repeat=dim)]


def inner_prism(order: int) -> list[tuple[int, ...]]:
    """Inner nodes of a wedge: the inner triangle, layer by layer."""
    return [(i, j, k) for k in range(1, order) for i, j in inner_rows(order)]
