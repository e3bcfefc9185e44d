"""The record behind one element: reference nodes and a space of functions give everything else."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import NamedTuple

import numpy as np

from unturn.elements._quadrature import Quadrature, rule_of_degree
from unturn.elements._shape import Floats, Shape, read_only
from unturn.elements._space import Space
from unturn.source import Source


class FaceNodes(NamedTuple):
    """One face of a solid: the name of its own cell type, its nodes in that type's order, its element.

    The nodes run so that the face's normal (first reference direction x second) points outward.
    """

    cell_type: str
    nodes: tuple[int, ...]
    element: Element


@dataclass(frozen=True, eq=False)
class Element:
    """One element.

    Parameters
    ----------
    name
        meshio's cell type.
    shape
        The reference shape.
    order
        Highest degree up to which the space holds every polynomial.
    nodes
        ``(n_nodes, dim)`` reference nodes; node order is VTK's.
    space
        The functions: as many as there are nodes.
    rule
        Makes the default quadrature rule.
    source
        Where the space comes from.
    vtk_type
        VTK's cell type number.
    face_elements
        For solids: the element of each face of the shape.
    layout
        ``(n_nodes, dim)`` the nodes at equal spacing, where `nodes` are not. Default: `nodes`.
    node_jacobian_exempt
        Nodes where det J is legitimately zero or undefined (the apex of a pyramid).

    Notes
    -----
    Shape functions are ``N = phi V^-1`` with phi the basis of the space and ``V[a, m] = phi_m(xi_a)`` the
    generalised Vandermonde matrix of the nodes. Reference coordinates are dimensionless.

    Examples
    --------
    >>> from unturn.elements import ELEMENTS
    >>> ELEMENTS["triangle"].shape_functions([[0.25, 0.5]]).round(12)
    array([[0.25, 0.25, 0.5 ]])
    """

    name: str
    shape: Shape = field(repr=False)
    order: int
    nodes: Floats = field(repr=False)
    space: Space = field(repr=False)
    rule: Callable[[], Quadrature] = field(repr=False)
    source: Source = field(repr=False)
    vtk_type: int
    face_elements: tuple[Element, ...] = field(default=(), repr=False)
    layout: Floats | None = field(default=None, repr=False)
    node_jacobian_exempt: tuple[int, ...] = ()

    @property
    def dim(self) -> int:
        """Number of reference coordinates."""
        return self.shape.dim

    @property
    def n_nodes(self) -> int:
        """Number of nodes."""
        return len(self.nodes)

    @property
    def n_corners(self) -> int:
        """Number of corner nodes; they come first."""
        return len(self.shape.vertices)

    @property
    def centroid(self) -> Floats:
        """``(dim,)`` centroid of the reference volume."""
        return self.shape.centroid

    @cached_property
    def quadrature(self) -> Quadrature:
        """The default rule: exact for the volume mean of the gradient on affine elements."""
        return self.rule()

    @cached_property
    def accurate(self) -> Quadrature:
        """The rule at whose points the gradient of the element is most accurate.

        Notes
        -----
        The rule that integrates products of gradients of the complete polynomials of the element exactly: order 1 the
        centroid, order 2 the two-point Gauss products, three points of a triangle, four of a tetrahedron, and so on.
        Products of Gauss points are superconvergent (Barlow 1976, Int. J. Numer. Meth. Eng. 10, 243-251; Zienkiewicz
        and Zhu 1992, Int. J. Numer. Meth. Eng. 33, 1331-1364); those of simplices are only the best sampling points.

        Examples
        --------
        >>> from unturn.elements import ELEMENTS
        >>> [len(ELEMENTS[name].accurate) for name in ("tetra", "tetra10", "hexahedron20")]
        [1, 4, 8]
        """
        return rule_of_degree(self.shape, 2 * (self.order - 1))

    def shape_functions(self, xi: Floats | Sequence[Sequence[float]]) -> Floats:
        """Values of the shape functions.

        Parameters
        ----------
        xi
            ``(p, dim)`` reference coordinates.

        Returns
        -------
        ``(p, n_nodes)``, dimensionless.
        """
        return self.space.values(_points(xi, self.dim)) @ self._cardinal

    def shape_gradients(self, xi: Floats | Sequence[Sequence[float]]) -> Floats:
        """Gradients ``dN_a / dxi_k`` of the shape functions.

        Parameters
        ----------
        xi
            ``(p, dim)`` reference coordinates.

        Returns
        -------
        ``(p, dim, n_nodes)``, dimensionless, read-only. Kept for centroid, quadrature points and nodes.
        """
        points = _points(xi, self.dim)
        for name in ("centroid", "nodes", "quadrature"):
            if np.array_equal(self._known_points(name), points):
                if name not in self._kept:
                    self._kept[name] = self._gradients(points)
                return self._kept[name]
        return self._gradients(points)

    def _known_points(self, name: str) -> Floats:
        if name == "quadrature":
            return self.quadrature.points
        return self.nodes if name == "nodes" else self.centroid[None]

    @cached_property
    def _cardinal(self) -> Floats:
        return self.space.cardinal(self.nodes)

    @cached_property
    def _kept(self) -> dict[str, Floats]:
        return {}

    def _gradients(self, points: Floats) -> Floats:
        return read_only(self.space.gradients(points) @ self._cardinal)

    @property
    def places(self) -> Floats:
        """``(n_nodes, dim)`` the nodes at equal spacing: which node is which, whatever the true spacing."""
        return self.nodes if self.layout is None else self.layout

    @cached_property
    def edges(self) -> tuple[tuple[int, int, tuple[int, ...]], ...]:
        """For each edge: corner a, corner b, and the nodes between them from a to b."""
        found = []
        for a, b in self.shape.edges:
            start, along = self.shape.vertices[a], self.shape.vertices[b] - self.shape.vertices[a]
            t = (self.places - start) @ along / (along @ along)
            off = np.abs(self.places - start - t[:, None] * along).max(axis=1)
            between = np.flatnonzero((off < 1e-9) & (t > 1e-9) & (t < 1 - 1e-9))
            found.append((a, b, tuple(int(n) for n in between[np.argsort(t[between])])))
        return tuple(found)

    @cached_property
    def face_nodes(self) -> tuple[FaceNodes, ...]:
        """For a solid: the nodes of each face in the order of the face's own element, normal outward."""
        found = []
        for corners, face in zip(self.shape.faces, self.face_elements, strict=True):
            v = self.shape.vertices[list(corners)]
            origin = face.shape.vertices[0]
            axes = [(v[b] - v[0]) / np.linalg.norm(face.shape.vertices[b] - origin) for b in (1, -1)]
            places = v[0] + (face.places - origin) @ np.array(axes)
            distance = np.linalg.norm(self.places[None] - places[:, None], axis=-1)
            found.append(FaceNodes(face.name, tuple(int(n) for n in distance.argmin(axis=1)), face))
        return tuple(found)


def _points(xi: Floats | Sequence[Sequence[float]], dim: int) -> Floats:
    points = np.asarray(xi, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != dim:
        raise ValueError(f"reference coordinates have shape {points.shape}; expected (p, {dim})")
    return points


def placed(shape: Shape, *groups: Sequence[Sequence[int]]) -> Floats:
    """Return reference nodes: the vertices of the shape, then the mean of each listed set of vertices."""
    means = [shape.vertices[list(corners)].mean(axis=0) for group in groups for corners in group]
    return read_only([*shape.vertices, *means])
