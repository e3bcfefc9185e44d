"""The skin over the instrument tray: a blown cap of a sphere with an oval rim, in 6-node triangles."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyvista as pv
import skfem

from ._writing import Floats, Ints, symmetric, write_vtu

RADIUS = 0.250
HALF_LENGTH, HALF_WIDTH = 0.160, 0.110
THICKNESS = 0.0004
YOUNG, POISSON = 150.0e6, 0.40
PRETENSION = 300.0  # N/m, in balance with the base pressure 2 * PRETENSION / RADIUS
PRESSURE = 1500.0  # on top of the base pressure: what this result shows


@dataclass(frozen=True)
class Solved:
    """The solved skin and the solver library's own surface strain."""

    points: Floats
    cells: Ints
    displacement: Floats
    strain: Floats
    rim: Ints


def _surface(disc: Floats) -> Floats:
    """Map the unit disc ``(2, n)`` onto the cap ``(n, 3)``, lowest rim point at z = 0."""
    x, y = HALF_LENGTH * disc[0], HALF_WIDTH * disc[1]
    return np.column_stack([x, y, np.sqrt(RADIUS**2 - x**2 - y**2) - np.sqrt(RADIUS**2 - HALF_LENGTH**2)])


def _inverse(tangents: Floats) -> Floats:
    """Return the ``(2, 3, ...)`` pseudo-inverse of ``(3, 2, ...)`` tangents."""
    metric = np.einsum("ia...,ib...->ab...", tangents, tangents)
    det = metric[0, 0] * metric[1, 1] - metric[0, 1] ** 2
    dual = np.array([[metric[1, 1], -metric[0, 1]], [-metric[0, 1], metric[0, 0]]]) / det
    return np.einsum("ab...,ib...->ai...", dual, tangents)


def _normal(tangents: Floats) -> Floats:
    """Return the normal ``(3, ...)``, as long as the area that the tangents span."""
    return np.cross(tangents[:, 0], tangents[:, 1], axis=0)


def _surface_strain(gradient: Floats, tangents: Floats) -> Floats:
    """Return the in-plane strain ``(3, 3, ...)`` for a parametric gradient ``(3, 2, ...)``."""
    inverse = _inverse(tangents)
    full = np.einsum("ia...,aj...->ij...", gradient, inverse)
    plane = np.einsum("ia...,aj...->ij...", tangents, inverse)
    half = np.einsum("ki...,kl...,lj...->ij...", plane, full, plane, optimize=True)
    return 0.5 * (half + np.swapaxes(half, 0, 1))


@skfem.BilinearForm
def _stiffness(u, v, w):  # type: ignore[no-untyped-def]
    tangents = w["position"].grad
    inverse = _inverse(tangents)
    area = np.linalg.norm(_normal(tangents), axis=0)
    strain, virtual = _surface_strain(u.grad, tangents), _surface_strain(v.grad, tangents)
    both = np.einsum("ij...,ij...->...", strain, virtual)
    traces = np.einsum("ii...->...", strain) * np.einsum("ii...->...", virtual)
    stretch = YOUNG * THICKNESS / (1 - POISSON**2) * ((1 - POISSON) * both + POISSON * traces)
    turned, moved = (np.einsum("ia...,aj...->ij...", f.grad, inverse) for f in (u, v))
    return (stretch + PRETENSION * np.einsum("ij...,ij...->...", turned, moved)) * area


@skfem.LinearForm
def _load(v, w):  # type: ignore[no-untyped-def]
    return PRESSURE * np.einsum("i...,i...->...", _normal(w["position"].grad), v)


def solve(refinements: int = 4) -> Solved:
    """Solve the pretensioned membrane, its rim held, for the added pressure."""
    disc = skfem.MeshTri.init_circle(refinements)
    nodes = skfem.Basis(disc, skfem.ElementTriP2())
    rim = nodes.get_dofs(disc.boundary_facets()).all()
    where = nodes.doflocs.copy()
    where[:, rim] /= np.linalg.norm(where[:, rim], axis=0)
    points = _surface(where)
    cells = nodes.element_dofs.T.astype(np.int64)

    basis = skfem.Basis(disc, skfem.ElementVector(skfem.ElementTriP2(), 3), intorder=4)
    order = np.empty(basis.N, dtype=np.int64)  # basis number of component c of node n at 3 n + c
    for axis in range(3):
        order[3 * nodes.element_dofs + axis] = basis.element_dofs[axis::3]
    position = np.empty(basis.N)
    position[order] = points.ravel()
    given = {"position": basis.interpolate(position)}
    held = order.reshape(-1, 3)[rim].ravel()
    u = skfem.solve(
        *skfem.condense(_stiffness.assemble(basis, **given), _load.assemble(basis, **given), D=held)
    )
    centre = skfem.Basis(disc, basis.elem, quadrature=(np.full((2, 1), 1.0 / 3.0), np.array([0.5])))
    strain = _surface_strain(centre.interpolate(u).grad, centre.interpolate(position).grad)[..., 0]
    flag = np.zeros(len(points), dtype=np.int64)
    flag[rim] = 1
    return Solved(
        points, _upward(points, cells), u[order].reshape(-1, 3), symmetric(np.moveaxis(strain, -1, 0)), flag
    )


def _upward(points: Floats, cells: Ints) -> Ints:
    """Turn triangles round whose normal points down."""
    corner = points[cells[:, :3]]
    down = np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0])[:, 2] < 0
    return np.where(down[:, None], cells[:, [0, 2, 1, 5, 4, 3]], cells)


def write(path: Path, solved: Solved) -> None:
    """Write the skin, its rim marked."""
    write_vtu(
        path,
        solved.points,
        solved.cells,
        pv.CellType.QUADRATIC_TRIANGLE,
        point_data={"u": solved.displacement, "rim": solved.rim.astype(np.uint8)},
        cell_data={"thickness": np.full(len(solved.cells), THICKNESS, dtype=np.float32)},
        field_data={"added_pressure": np.array([PRESSURE])},
    )
