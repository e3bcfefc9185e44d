"""Shape functions against other people's: written-out formulas, scikit-fem, VTK."""

from __future__ import annotations

from collections.abc import Callable
from itertools import product

import numpy as np
import pytest
import skfem
import sympy
import vtkmodules.vtkCommonDataModel as vtk

from unturn.elements import ELEMENTS, FAMILIES, Element, element

x, y, z = sympy.symbols("x y z")


def inside(row: Element, n: int = 6) -> np.ndarray:
    return np.random.default_rng(11).dirichlet(np.ones(row.n_corners), n) @ row.shape.vertices


# --- formulas, one function of a node's coordinates each ---


def _serendipity_2d(a: float, b: float, _c: float) -> sympy.Expr:
    if a and b:
        return (1 + a * x) * (1 + b * y) * (a * x + b * y - 1) / 4
    return (1 - x**2) * (1 + b * y) / 2 if not a else (1 - y**2) * (1 + a * x) / 2


def _serendipity_3d(a: float, b: float, c: float) -> sympy.Expr:
    linear = (1 + a * x) * (1 + b * y) * (1 + c * z)
    if a and b and c:
        return linear * (a * x + b * y + c * z - 2) / 8
    along = {0: x, 1: y, 2: z}[[a, b, c].index(0)]
    return (1 - along**2) * linear / 4


def _prism_15(a: float, b: float, c: float) -> sympy.Expr:
    areas = {x: a, y: b, 1 - x - y: 1 - a - b}
    corner = [area for area, value in areas.items() if value == 1]
    if not corner:
        first, second = (area for area, value in areas.items() if value)
        return 2 * first * second * (1 + c * z)
    (area,) = corner
    if c == 0:
        return area * (1 - z**2)
    return area * ((2 * area - 1) * (1 + c * z) - (1 - z**2)) / 2


def _pyramid_13(a: float, b: float, c: float) -> sympy.Expr:
    t = 1 - z
    if c == 1:
        return z * (2 * z - 1)
    if c:
        sx, sy = 2 * a * x, 2 * b * y
        return z * (t + sx) * (t + sy) / t
    if a and b:
        return (a * x + b * y - 1) * ((1 + a * x) * (1 + b * y) - z + a * b * x * y * z / t) / 4
    if not a:
        return (t + x) * (t - x) * (t + b * y) / (2 * t)
    return (t + y) * (t - y) * (t + a * x) / (2 * t)


# Source: Zienkiewicz and Taylor, The Finite Element Method, serendipity and prism families (quad8,
# hexahedron20, wedge15); Bedrosian 1992, Int. J. Numer. Meth. Eng. 35, 95-108 (pyramid13).
# From memory, not looked up: the pyramid's. Independent computation: nodality and sum of one, checked below.
FORMULAS: dict[str, Callable[[float, float, float], sympy.Expr]] = {
    "quad8": _serendipity_2d,
    "hexahedron20": _serendipity_3d,
    "wedge15": _prism_15,
    "pyramid13": _pyramid_13,
}


@pytest.mark.parametrize("name", FORMULAS)
def test_written_out_formulas(name: str) -> None:
    row = ELEMENTS[name]
    symbols = (x, y, z)[: row.dim]
    nodes = [tuple(sympy.nsimplify(c) for c in (*node, 0, 0)[:3]) for node in row.nodes]
    exact = sympy.Matrix([FORMULAS[name](*node) for node in nodes])
    assert sympy.simplify(sum(exact)) == 1
    for n, node in enumerate(nodes):
        if name == "pyramid13" and node[2] == 1:
            continue
        at_node = exact.subs(dict(zip(symbols, node)))
        assert list(at_node) == [int(m == n) for m in range(row.n_nodes)]
    xi = inside(row)
    values = sympy.lambdify(symbols, exact)
    slopes = sympy.lambdify(symbols, exact.jacobian(symbols))
    for point in xi:
        np.testing.assert_allclose(row.shape_functions(point[None])[0], values(*point)[:, 0], atol=2e-14)
        np.testing.assert_allclose(row.shape_gradients(point[None])[0].T, slopes(*point), atol=2e-13)


@pytest.mark.parametrize("name", ["pyramid", "pyramid13", "pyramid14"])
def test_pyramid_apex_is_the_limit_along_the_axis(name: str) -> None:
    # Derived: on the axis X = Y = 0, so the gradient is linear in the distance to the apex for degree 2.
    row = ELEMENTS[name]
    apex = row.shape_gradients([[0.0, 0.0, 1.0]])[0]
    near = row.shape_gradients([[0.0, 0.0, 1 - 1e-9]])[0]
    np.testing.assert_allclose(apex, near, atol=2e-8)
    assert np.isfinite(row.shape_gradients(row.nodes)).all()


@pytest.mark.parametrize("name", ["pyramid", "pyramid14"])
def test_pyramid_space_has_the_dimension_of_its_degree(name: str) -> None:
    # Source: Bergot, Cohen and Durufle 2010, J. Sci. Comput. 42, 345-381: (k+1)(k+2)(2k+3)/6 functions.
    row = ELEMENTS[name]
    k = row.order
    assert row.n_nodes == (k + 1) * (k + 2) * (2 * k + 3) // 6


# --- scikit-fem ---

SKFEM = {
    "line": skfem.ElementLineP1,
    "line3": skfem.ElementLineP2,
    "triangle": skfem.ElementTriP1,
    "triangle6": skfem.ElementTriP2,
    "quad": skfem.ElementQuad1,
    "quad8": skfem.ElementQuadS2,
    "quad9": skfem.ElementQuad2,
    "tetra": skfem.ElementTetP1,
    "tetra10": skfem.ElementTetP2,
    "hexahedron": skfem.ElementHex1,
    "hexahedron20": skfem.ElementHexS2,
    "hexahedron27": skfem.ElementHex2,
    "wedge": skfem.ElementWedge1,
}


@pytest.mark.source("scikit-fem 12.0.2, Element.lbasis; nodes paired by their coordinates")
@pytest.mark.parametrize("name", SKFEM)
def test_scikit_fem(name: str) -> None:
    row, other = ELEMENTS[name], SKFEM[name]()
    low, extent = row.shape.vertices.min(axis=0), np.ptp(row.shape.vertices, axis=0)
    xi = inside(row)
    local = ((xi - low) / extent).T
    places = low + np.asarray(other.doflocs) * extent
    pair = np.linalg.norm(places[:, None] - row.nodes[None], axis=-1).argmin(axis=1)
    assert sorted(pair) == list(range(row.n_nodes))
    values, gradients = row.shape_functions(xi), row.shape_gradients(xi)
    for i, a in enumerate(pair):
        phi, dphi = other.lbasis(local, i)
        np.testing.assert_allclose(values[:, a], phi, atol=1e-14)
        np.testing.assert_allclose(gradients[:, :, a].T * extent[:, None], dphi, atol=1e-13)


# --- VTK ---

VTK = {
    "line": vtk.vtkLine,
    "line3": vtk.vtkQuadraticEdge,
    "line4": vtk.vtkCubicLine,
    "triangle": vtk.vtkTriangle,
    "triangle6": vtk.vtkQuadraticTriangle,
    "triangle7": vtk.vtkBiQuadraticTriangle,
    "quad": vtk.vtkQuad,
    "quad6": vtk.vtkQuadraticLinearQuad,
    "quad8": vtk.vtkQuadraticQuad,
    "quad9": vtk.vtkBiQuadraticQuad,
    "pixel": vtk.vtkPixel,
    "tetra": vtk.vtkTetra,
    "tetra10": vtk.vtkQuadraticTetra,
    "hexahedron": vtk.vtkHexahedron,
    "hexahedron20": vtk.vtkQuadraticHexahedron,
    "hexahedron24": vtk.vtkBiQuadraticQuadraticHexahedron,
    "hexahedron27": vtk.vtkTriQuadraticHexahedron,
    "voxel": vtk.vtkVoxel,
    "wedge": vtk.vtkWedge,
    "wedge12": vtk.vtkQuadraticLinearWedge,
    "wedge15": vtk.vtkQuadraticWedge,
    "wedge18": vtk.vtkBiQuadraticQuadraticWedge,
    "pyramid": vtk.vtkPyramid,
    "pyramid13": vtk.vtkQuadraticPyramid,
}
LAGRANGE = {
    "VTK_LAGRANGE_CURVE": vtk.vtkLagrangeCurve,
    "VTK_LAGRANGE_TRIANGLE": vtk.vtkLagrangeTriangle,
    "VTK_LAGRANGE_QUADRILATERAL": vtk.vtkLagrangeQuadrilateral,
    "VTK_LAGRANGE_TETRAHEDRON": vtk.vtkLagrangeTetra,
    "VTK_LAGRANGE_HEXAHEDRON": vtk.vtkLagrangeHexahedron,
    "VTK_LAGRANGE_WEDGE": vtk.vtkLagrangeWedge,
}


def _parametric(row: Element, xi: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """VTK's parametric coordinates ``(p, 3)`` of our points, and ``dp/dxi`` as ``(p, dim, dim)``."""
    if row.shape.name == "pyramid":
        # VTK's pyramid is a cube whose upper face is collapsed: (X + 1) / 2, (Y + 1) / 2, z.
        t = 1 - xi[:, 2]
        p = np.stack([(xi[:, 0] / t + 1) / 2, (xi[:, 1] / t + 1) / 2, xi[:, 2]], axis=1)
        slope = np.zeros((len(xi), 3, 3))
        slope[:, 0, 0] = slope[:, 1, 1] = 1 / (2 * t)
        slope[:, :2, 2] = xi[:, :2] / (2 * t**2)[:, None]
        slope[:, 2, 2] = 1
        return p, slope
    low, extent = row.shape.vertices.min(axis=0), np.ptp(row.shape.vertices, axis=0)
    if row.name == "line4":  # the one VTK cell on [-1, 1]
        low, extent = np.zeros(1), np.ones(1)
    p = np.zeros((len(xi), 3))
    p[:, : row.dim] = (xi - low) / extent
    return p, np.broadcast_to(np.diag(1 / extent), (len(xi), row.dim, row.dim))


def _vtk_slopes(row: Element, raw: list[float]) -> np.ndarray:
    """VTK's derivatives as ``(dim, n_nodes)``; measured in 9.7.2: not one layout for all cells."""
    if row.name in {"VTK_LAGRANGE_QUADRILATERAL", "VTK_LAGRANGE_HEXAHEDRON"}:
        return np.reshape(raw, (-1, row.dim)).T  # node by node, the others axis by axis
    if row.name == "VTK_LAGRANGE_CURVE":
        along = np.empty((1, row.n_nodes))
        along[0, np.argsort(row.nodes[:, 0])] = raw  # from end to end, not in node order
        return along
    return np.reshape(raw, (row.dim, -1))


def _vtk_functions(row: Element, cell: vtk.vtkCell, xi: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    p, slope = _parametric(row, xi)
    values, gradients = [], []
    for point in p:
        weights, slopes = [0.0] * row.n_nodes, [0.0] * (row.n_nodes * row.dim)
        cell.InterpolateFunctions(point.tolist(), weights)
        cell.InterpolateDerivs(point.tolist(), slopes)
        values.append(weights)
        gradients.append(_vtk_slopes(row, slopes))
    return np.array(values), np.swapaxes(slope, 1, 2) @ np.array(gradients)


def _lagrange_cell(name: str, n_nodes: int) -> vtk.vtkCell:
    cell = LAGRANGE[name]()
    cell.GetPointIds().SetNumberOfIds(n_nodes)
    cell.GetPoints().SetNumberOfPoints(n_nodes)
    if hasattr(cell, "SetUniformOrderFromNumPoints"):
        cell.SetUniformOrderFromNumPoints(n_nodes)
    cell.Initialize()
    return cell


def test_every_row_with_a_vtk_class_is_compared() -> None:
    assert set(ELEMENTS) - set(VTK) == {"pyramid14"}
    assert set(FAMILIES) == set(LAGRANGE)


@pytest.mark.source("VTK 9.7.2, InterpolateFunctions, InterpolateDerivs and GetParametricCoords of each cell")
@pytest.mark.parametrize("name", [n for n in VTK if n != "pyramid13"])
def test_vtk(name: str) -> None:
    row, cell = ELEMENTS[name], VTK[name]()
    assert cell.GetCellType() == row.vtk_type
    xi = inside(row)
    values, gradients = _vtk_functions(row, cell, xi)
    np.testing.assert_allclose(row.shape_functions(xi), values, atol=1e-14)
    np.testing.assert_allclose(row.shape_gradients(xi), gradients, atol=1e-13)
    if row.shape.name != "pyramid":
        coordinates = np.reshape(cell.GetParametricCoords(), (-1, 3))
        np.testing.assert_allclose(_parametric(row, row.nodes)[0], coordinates, atol=1e-15)


@pytest.mark.source("VTK 9.7.2, vtkQuadraticPyramid::InterpolateFunctions")
def test_vtk_quadratic_pyramid_is_another_space() -> None:
    # Measured: VTK's 13 functions miss quadratic polynomials on the straight pyramid by more than 0.01; ours
    # hold all ten. So the two are not compared.
    row = ELEMENTS["pyramid13"]
    xi = inside(row)
    values, _ = _vtk_functions(row, vtk.vtkQuadraticPyramid(), xi)
    assert row.vtk_type == vtk.vtkQuadraticPyramid().GetCellType()
    worst = {"ours": 0.0, "vtk": 0.0}
    for powers in product(range(3), repeat=3):
        if sum(powers) <= 2:
            nodal, exact = np.prod(row.nodes**powers, axis=1), np.prod(xi**powers, axis=1)
            worst["ours"] = max(worst["ours"], np.abs(row.shape_functions(xi) @ nodal - exact).max())
            worst["vtk"] = max(worst["vtk"], np.abs(values @ nodal - exact).max())
    assert worst["ours"] < 1e-14
    assert worst["vtk"] > 1e-2


@pytest.mark.source("VTK 9.7.2, vtkLagrange*: GetParametricCoords, InterpolateFunctions, InterpolateDerivs")
@pytest.mark.parametrize("order", range(1, 7))
@pytest.mark.parametrize("name", FAMILIES)
def test_vtk_lagrange(name: str, order: int) -> None:
    row = element(name, FAMILIES[name].n_nodes(order))
    cell = _lagrange_cell(name, row.n_nodes)
    assert row.order == order
    assert cell.GetCellType() == row.vtk_type
    coordinates = np.reshape(cell.GetParametricCoords(), (-1, 3))
    np.testing.assert_allclose(_parametric(row, row.nodes)[0], coordinates, atol=1e-14)
    xi = inside(row, 3)
    values, gradients = _vtk_functions(row, cell, xi)
    np.testing.assert_allclose(row.shape_functions(xi), values, atol=2e-13)
    np.testing.assert_allclose(row.shape_gradients(xi), gradients, atol=5e-12)
