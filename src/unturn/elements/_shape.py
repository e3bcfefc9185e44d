"""The reference shapes: what a cell looks like before it is mapped into space."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def read_only(values: Any) -> Floats:
    """Return a float64 copy that cannot be written to."""
    array = np.array(values, dtype=np.float64)
    array.setflags(write=False)
    return array


@dataclass(frozen=True, eq=False)
class Shape:
    """A reference shape in dimensionless coordinates.

    Parameters
    ----------
    name
        ``line``, ``triangle``, ``quad``, ``tetra`` ...: the name of the linear cell.
    vertices
        ``(n_vertices, dim)``, in VTK's order of the linear cell.
    centroid
        ``(dim,)``, of the volume (area, length) and not of the vertices.
    volume
        Length, area or volume of the reference shape.
    edges
        Pairs of vertices, in the order in which VTK numbers mid-side nodes.
    faces
        Vertices of each face of a solid, in VTK's order of mid-face nodes, anticlockwise seen from outside.
    """

    name: str
    vertices: Floats
    centroid: Floats
    volume: float
    edges: tuple[tuple[int, int], ...]
    faces: tuple[tuple[int, ...], ...] = ()

    @property
    def dim(self) -> int:
        """Number of reference coordinates."""
        return int(self.vertices.shape[1])

    @property
    def facets(self) -> tuple[tuple[int, ...], ...]:
        """The boundary, one dimension lower: faces of a solid, edges of a face, ends of a line."""
        return {1: ((0,), (1,)), 2: self.edges, 3: self.faces}[self.dim]

    @cached_property
    def facet_normals(self) -> Floats:
        """``(n_facets, dim)`` outward normals of the facets, not of unit length."""
        v = self.vertices
        if self.dim == 1:
            return read_only([[-1.0], [1.0]])
        if self.dim == 2:
            along = np.array([v[b] - v[a] for a, b in self.edges])
            return read_only(np.stack([along[:, 1], -along[:, 0]], axis=1))
        return read_only([np.cross(v[f[1]] - v[f[0]], v[f[-1]] - v[f[0]]) for f in self.faces])

    @cached_property
    def extents(self) -> Floats:
        """``(n, dim)`` covectors g, one per pair of facets: ``g . xi`` varies by one over the shape.

        Notes
        -----
        The height of a mapped cell in that direction is ``1 / |J^-T g|`` (J the Jacobian ``dX/dxi`` at a
        point, exact on affine cells): g is constant on the facet it is normal to.
        """
        heights: list[Floats] = []
        for normal in self.facet_normals:
            g = normal / np.ptp(self.vertices @ normal)
            if not any(np.allclose(g, h) or np.allclose(g, -h) for h in heights):
                heights.append(g)
        return read_only(heights)

    def on_facet(self, xi: Floats, facet: int) -> NDArray[np.bool_]:
        """``(p,)`` whether each point of the shape lies on a facet."""
        normal = self.facet_normals[facet]
        offset = xi @ normal - self.vertices[self.facets[facet][0]] @ normal
        found: NDArray[np.bool_] = np.abs(offset) < 1e-9
        return found
