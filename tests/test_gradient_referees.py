"""The gradient of any field against two libraries that nobody here wrote."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import skfem
from vtkmodules.vtkCommonCore import reference, vtkObject
from vtkmodules.vtkCommonDataModel import vtkGenericCell

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.gradient import displacement_gradient

VTK = {
    **ELEMENTS,
    **{
        f"{name.removeprefix('VTK_').lower()}_{order}": element(name, family.n_nodes(order))
        for name, family in FAMILIES.items()
        for order in range(1, 7)
    },
}
WITHOUT_DERIVATIVES = {n for n in VTK if n.startswith("lagrange_curve") or n == "line3"}
WRONG_IN_VTK = {"quad6", "pyramid13"}
WITHOUT_CELL = {"pyramid14"}
RIGHT_IN_VTK = sorted(VTK.keys() - WITHOUT_DERIVATIVES - WRONG_IN_VTK - WITHOUT_CELL)


def one_cell(row: Element) -> meshes.Mesh:
    mesh = meshes.distorted_cell(row)
    if row.dim == 1:  # along x: VTK's derivative of a line in space has no agreed completion
        return mesh._replace(points=mesh.points[:, :1] * [1.0, 0, 0])
    if row.name in {"pixel", "voxel"}:  # axis-parallel by definition
        size = np.array([0.5, 0.7, 0.3])[: row.dim]
        return mesh._replace(points=np.pad(row.nodes * size, ((0, 0), (0, 3 - row.dim))))
    return mesh


def vtk_cell(mesh: meshes.Mesh) -> Any:
    generic = vtkGenericCell()
    generic.SetCellType(mesh.element.vtk_type)
    cell = generic.GetRepresentativeCell()
    cell.GetPointIds().SetNumberOfIds(mesh.element.n_nodes)
    cell.GetPoints().SetNumberOfPoints(mesh.element.n_nodes)
    for i, point in enumerate(mesh.points):
        cell.GetPoints().SetPoint(i, point)
        cell.GetPointIds().SetId(i, i)
    if hasattr(cell, "SetUniformOrderFromNumPoints"):
        cell.SetUniformOrderFromNumPoints(mesh.element.n_nodes)
    if hasattr(cell, "Initialize"):
        cell.Initialize()
    return cell


def parametric(row: Element, xi: np.ndarray) -> np.ndarray:
    """VTK's parametric coordinates: 0 to 1; -1 to 1 for its cubic line, collapsed for its pyramid."""
    if row.name == "line4":
        return np.pad(xi, ((0, 0), (0, 2)))
    low, high = row.shape.vertices.min(axis=0), row.shape.vertices.max(axis=0)
    found = (xi - low) / (high - low)
    if row.shape.name == "pyramid":
        up = xi[:, 2:]
        found = np.concatenate([(xi[:, :2] / (1 - up) + 1) / 2, up], axis=1)
    return np.pad(found, ((0, 0), (0, 3 - row.dim)))


def vtk_place(cell: Any, n_nodes: int, at: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    place, weights = [0.0] * 3, [0.0] * n_nodes
    cell.EvaluateLocation(reference(0), list(at), place, weights)
    return np.array(place), np.array(weights)


def vtk_gradient(cell: Any, at: np.ndarray, u: np.ndarray) -> np.ndarray:
    found = [0.0] * 9
    cell.Derivatives(0, list(at), list(u.reshape(-1)), 3, found)
    return np.array(found).reshape(3, 3)


def inside(row: Element) -> np.ndarray:
    return np.random.default_rng(3).dirichlet(np.ones(row.n_corners), 4) @ row.shape.vertices


@pytest.mark.source("VTK 9.7, vtkCell::Derivatives at matching parametric points")
@pytest.mark.parametrize("name", RIGHT_IN_VTK)
def test_any_field_against_vtk(name: str) -> None:
    row = VTK[name]
    mesh, xi = one_cell(row), inside(row)
    u = np.random.default_rng(1).normal(size=mesh.points.shape)
    ours = displacement_gradient(mesh.points, mesh.cells, u, row.name, at=xi)[0, :, :, : row.dim]
    cell = vtk_cell(mesh)
    for point, at, H in zip(xi, parametric(row, xi), ours):
        place, _ = vtk_place(cell, row.n_nodes, at)
        np.testing.assert_allclose(place, row.shape_functions(point[None])[0] @ mesh.points, atol=1e-13)
        theirs = vtk_gradient(cell, at, u)[:, : row.dim]
        np.testing.assert_allclose(H, theirs, atol=1e-12 + 1e-13 * np.abs(ours).max())


@pytest.mark.source("VTK 9.7: line3 and the Lagrange curves have functions but no derivatives")
@pytest.mark.parametrize("name", sorted(WITHOUT_DERIVATIVES))
def test_lines_against_differences_of_vtks_functions(name: str) -> None:
    row = VTK[name]
    mesh, xi, step = one_cell(row), inside(row), 1e-4
    u = np.random.default_rng(1).normal(size=mesh.points.shape)
    ours = displacement_gradient(mesh.points, mesh.cells, u, row.name, at=xi)[0]
    cell = vtk_cell(mesh)
    for at, H in zip(parametric(row, xi), ours):
        ends = [vtk_place(cell, row.n_nodes, at + s * np.array([step, 0, 0])) for s in (-2, -1, 1, 2)]
        x, y = (np.array([e[0][0] for e in ends]), np.array([e[1] @ u[:, 0] for e in ends]))
        slope = (8 * (y[2] - y[1]) - (y[3] - y[0])) / (8 * (x[2] - x[1]) - (x[3] - x[0]))
        assert H[0, 0] == pytest.approx(slope, rel=1e-8, abs=1e-8)


@pytest.mark.source("VTK 9.7, measured: vtkQuadraticLinearQuad::Derivatives misses a linear field")
def test_vtk_is_no_referee_for_the_six_node_quadrilateral() -> None:
    row = ELEMENTS["quad6"]
    mesh, H = meshes.affine_cell(row), np.array([[1.0, 2, 0], [3, 4, 0], [0, 0, 0]])
    u = mesh.points @ H.T
    assert np.abs(vtk_gradient(vtk_cell(mesh), np.array([0.3, 0.4, 0]), u) - H).max() > 0.1
    np.testing.assert_allclose(displacement_gradient(mesh.points, mesh.cells, u, "quad6")[0], H, atol=1e-13)


@pytest.mark.source("VTK 9.7, measured: vtkQuadraticPyramid's derivatives are not those of its own functions")
def test_vtk_is_no_referee_for_the_thirteen_node_pyramid() -> None:
    row = ELEMENTS["pyramid13"]
    cell, at, step = vtk_cell(meshes.affine_cell(row)), np.array([0.3, 0.4, 0.2]), 1e-5
    slopes: list[float] = [0.0] * (3 * row.n_nodes)
    cell.InterpolateDerivs(list(at), slopes)
    differences = []
    for axis in np.eye(3):
        ends = []
        for sign in (1, -1):
            weights = [0.0] * row.n_nodes
            cell.InterpolateFunctions(list(at + sign * step * axis), weights)
            ends.append(np.array(weights))
        differences.append((ends[0] - ends[1]) / (2 * step))
    assert np.abs(np.array(slopes).reshape(3, -1) - differences).max() > 0.1


@pytest.mark.source("VTK 9.7, measured: cell type 74 has no class behind it")
def test_vtk_has_no_fourteen_node_pyramid() -> None:
    shown = vtkObject.GetGlobalWarningDisplay()
    vtkObject.GlobalWarningDisplayOff()
    try:
        generic = vtkGenericCell()
        generic.SetCellType(ELEMENTS["pyramid14"].vtk_type)
        assert generic.GetRepresentativeCell().GetClassName() == "vtkEmptyCell"
    finally:
        vtkObject.SetGlobalWarningDisplay(shown)


def bend(points: np.ndarray) -> np.ndarray:
    """A smooth map that curves every edge, for `(n, dim)` points."""
    x, size = points, np.ptp(points, axis=0).max()
    shifted = np.roll(x, 1, axis=1) / size
    return points + 0.04 * size * np.sin(2.5 * shifted + 0.3)


def field(points: np.ndarray) -> np.ndarray:
    """A displacement that no element holds, `(n, 3)`."""
    x = np.pad(points, ((0, 0), (0, 3 - points.shape[1])))
    return np.stack(
        [np.sin(5 * x[:, 1]) + x[:, 0] ** 3, np.exp(x[:, 0] + x[:, 2]), np.cos(4 * x.sum(axis=1))], 1
    )


HEXA = "hexahedron"
SCIKIT_FEM: dict[str, tuple[Element, str, Callable[[], Any], Any, Any]] = {
    "triangle": (ELEMENTS["triangle"], "triangle", skfem.ElementTriP1, skfem.MeshTri1, None),
    "triangle6": (ELEMENTS["triangle6"], "triangle", skfem.ElementTriP2, skfem.MeshTri1, skfem.MeshTri2),
    "triangle10": (VTK["lagrange_triangle_3"], "triangle", skfem.ElementTriP3, skfem.MeshTri1, None),
    "triangle15": (VTK["lagrange_triangle_4"], "triangle", skfem.ElementTriP4, skfem.MeshTri1, None),
    "quad": (ELEMENTS["quad"], "quad", skfem.ElementQuad1, skfem.MeshQuad1, None),
    "quad8": (ELEMENTS["quad8"], "quad", skfem.ElementQuadS2, skfem.MeshQuad1, None),
    "quad9": (ELEMENTS["quad9"], "quad", skfem.ElementQuad2, skfem.MeshQuad1, skfem.MeshQuad2),
    "tetra": (ELEMENTS["tetra"], "tetra", skfem.ElementTetP1, skfem.MeshTet1, None),
    "tetra10": (ELEMENTS["tetra10"], "tetra", skfem.ElementTetP2, skfem.MeshTet1, skfem.MeshTet2),
    "hexahedron": (ELEMENTS["hexahedron"], HEXA, skfem.ElementHex1, skfem.MeshHex1, None),
    "hexahedron20": (ELEMENTS["hexahedron20"], HEXA, skfem.ElementHexS2, skfem.MeshHex1, None),
    "hexahedron27": (
        ELEMENTS["hexahedron27"],
        "hexahedron",
        skfem.ElementHex2,
        skfem.MeshHex1,
        skfem.MeshHex2,
    ),
    "wedge": (ELEMENTS["wedge"], "wedge", skfem.ElementWedge1, skfem.MeshWedge1, None),
}


def their_corners(linear: Element, refdom: np.ndarray) -> list[int]:
    """For each corner of scikit-fem's reference cell, ours: the same place on 0 to 1."""
    low, high = linear.shape.vertices.min(axis=0), linear.shape.vertices.max(axis=0)
    ours = (linear.shape.vertices - low) / (high - low)
    return [int(np.abs(ours - corner).sum(axis=1).argmin()) for corner in refdom.T]


@pytest.mark.source("scikit-fem, InteriorBasis.interpolate(...).grad on the same mesh and nodal values")
@pytest.mark.parametrize(
    ("name", "curved"),
    [(name, False) for name in SCIKIT_FEM] + [(name, True) for name, row in SCIKIT_FEM.items() if row[4]],
)
def test_any_field_against_scikit_fem(name: str, curved: bool) -> None:
    row, shape, their_element, mesh_class, curved_class = SCIKIT_FEM[name]
    dim, linear = row.dim, ELEMENTS[shape]
    ours, coarse = meshes.patch(row), meshes.patch(linear)
    order = their_corners(linear, mesh_class.elem.refdom.p)
    theirs = mesh_class(coarse.points[:, :dim].T, np.ascontiguousarray(coarse.cells[:, order].T))
    points = ours.points[:, :dim]
    if curved:
        theirs = curved_class.from_mesh(theirs)
        theirs = curved_class(bend(theirs.doflocs.T).T, theirs.t)
        points = bend(points)
    weights = np.random.default_rng(7).dirichlet(np.ones(linear.n_corners), 3)  # of scikit-fem's corners
    X = mesh_class.elem.refdom.p @ weights.T
    basis = skfem.Basis(theirs, their_element(), quadrature=(X, np.ones(3)))
    values = field(basis.doflocs.T)
    grad = np.stack([basis.interpolate(values[:, i]).grad for i in range(3)])  # (3, dim, cells, points)
    for k, cell in enumerate(ours.cells):
        corners = theirs.t[:, k].tolist()  # scikit-fem may sort the corners of simplices
        sorted_ = [int(np.flatnonzero(coarse.cells[k] == c)[0]) for c in corners]
        if shape in {"triangle", "tetra"}:
            xi = weights @ linear.shape.vertices[sorted_]
        else:
            xi = X.T * np.ptp(linear.shape.vertices, axis=0) + linear.shape.vertices.min(axis=0)
        found = displacement_gradient(points, cell[None], field(points), row.name, at=xi)[0]
        np.testing.assert_allclose(found[:, :, :dim], np.moveaxis(grad[:, :, k], -1, 0), atol=1e-11)
