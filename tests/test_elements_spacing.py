"""Where the nodes of higher-order cells lie, and how that is found from coordinates."""

from __future__ import annotations

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, Spacing, detect_spacing, element
from unturn.elements._spacing import gll, simplex_node
from unturn.errors import InputError

pytestmark = pytest.mark.derived("cells made with a known spacing must give that spacing back")

HIGHER = [
    pytest.param(name, order, id=f"{name.removeprefix('VTK_LAGRANGE_').lower()}_{order}")
    for name in FAMILIES
    for order in (3, 4, 5, 6)
]
each_higher = pytest.mark.parametrize(("name", "order"), HIGHER)
each_named = pytest.mark.parametrize("spacing", ["equal", "gll"])


def _row(name: str, order: int, spacing: Spacing = "equal") -> Element:
    return element(name, FAMILIES[name].n_nodes(order), spacing)


def _turned(mesh: meshes.Mesh, size: float = 1.0) -> np.ndarray:
    """The points turned in space, so that nothing lies along an axis."""
    q, _ = np.linalg.qr(np.random.default_rng(4).normal(size=(3, 3)))
    return size * mesh.points @ q.T


@pytest.mark.source("Abramowitz and Stegun 1964, table 25.6 (Lobatto abscissas)")
def test_lobatto_points() -> None:
    np.testing.assert_allclose(gll(2), [0, 0.5, 1], atol=1e-15)
    for order, inner in ((3, [0.44721360]), (4, [0.0, 0.65465367]), (5, [0.28523152, 0.76505532])):
        np.testing.assert_allclose(np.unique(np.abs(2 * gll(order)[1:-1] - 1).round(9)), inner, atol=2e-8)
    np.testing.assert_allclose(gll(3), [0, 0.276, 0.724, 1], atol=5e-4)


@pytest.mark.source("fenics-basix 0.11.0, LagrangeVariant.gll_warped: inner nodes, barycentric, sorted")
@pytest.mark.parametrize(
    ("counts", "expected"),
    [
        ((1, 1, 1), (1 / 3, 1 / 3, 1 / 3)),
        ((1, 1, 2), (0.2242243882153, 0.2242243882153, 0.5515512235693)),
        ((1, 1, 3), (0.1578912144814, 0.1578912144814, 0.6842175710372)),
        ((1, 2, 2), (0.1715894945065, 0.4142052527468, 0.4142052527468)),
        ((1, 1, 4), (0.1165780060601, 0.1165780060601, 0.7668439878797)),
        ((1, 2, 3), (0.1327148379378, 0.3162479734272, 0.551037188635)),
        ((2, 2, 2), (1 / 3, 1 / 3, 1 / 3)),
        ((1, 1, 1, 1), (0.25, 0.25, 0.25, 0.25)),
        ((1, 1, 1, 2), (0.1857947472532, 0.1857947472532, 0.1857947472532, 0.4426157582403)),
        ((1, 1, 1, 3), (0.1412575178909, 0.1412575178909, 0.1412575178909, 0.5762274463273)),
        ((1, 1, 2, 2), (0.1495813067605, 0.1495813067605, 0.3504186932395, 0.3504186932395)),
    ],
)
def test_simplex_nodes(counts: tuple[int, ...], expected: tuple[float, ...]) -> None:
    np.testing.assert_allclose(simplex_node(counts), expected, atol=1e-12)


@each_higher
def test_faces_of_solids_carry_the_nodes_of_the_face_element(name: str, order: int) -> None:
    row = _row(name, order, "gll")
    for face in row.face_nodes:
        corners = face.element.nodes[: face.element.n_corners]
        design = np.concatenate([np.ones((len(corners), 1)), corners], axis=1)
        fit = np.linalg.pinv(design) @ row.nodes[list(face.nodes[: len(corners)])]
        places = np.concatenate([np.ones((face.element.n_nodes, 1)), face.element.nodes], axis=1) @ fit
        np.testing.assert_allclose(places, row.nodes[list(face.nodes)], atol=1e-12)


@each_named
@each_higher
def test_straight_affine_cells(name: str, order: int, spacing: Spacing) -> None:
    mesh = meshes.affine_cell(_row(name, order, spacing))
    assert detect_spacing(_turned(mesh), mesh.cells, name) == spacing
    assert detect_spacing(_turned(mesh).astype(np.float32), mesh.cells, name) == spacing
    assert detect_spacing(_turned(mesh, 1e-6) + 50.0, mesh.cells, name) == spacing


@each_named
@each_higher
def test_straight_patches_and_curved_patches(name: str, order: int, spacing: Spacing) -> None:
    mesh = meshes.patch(_row(name, order, spacing))
    assert detect_spacing(_turned(mesh), mesh.cells, name) == spacing
    bent = meshes.curved(mesh, 0.1)
    assert detect_spacing(_turned(bent), bent.cells, name) == spacing


@each_named
@pytest.mark.parametrize("order", [3, 4, 5, 6])
@pytest.mark.parametrize("angle", [30, 60, 90, 120])
def test_strongly_curved_arcs_are_not_misread(angle: float, order: int, spacing: Spacing) -> None:
    # Equal thirds of a wide arc lie at chord fractions near those of Gauss-Lobatto-Legendre nodes (0.25 at
    # 180 degrees): the distance along the arc must decide.
    row = _row("VTK_LAGRANGE_QUADRILATERAL", order, spacing)
    polar = np.radians(angle) * (row.nodes[:, 0] + 1) / 2
    radius = 2 + row.nodes[:, 1]
    points = np.stack([radius * np.cos(polar), radius * np.sin(polar), 0.1 * radius**2], axis=1)
    assert detect_spacing(points, np.arange(row.n_nodes)[None], row.name) == spacing


@each_named
def test_arcs_alone(spacing: Spacing) -> None:
    row = _row("VTK_LAGRANGE_CURVE", 3, spacing)
    turn = np.radians(150) * (row.nodes[:, 0] + 1) / 2
    points = np.stack([np.cos(turn), np.sin(turn), 0 * turn], axis=1)
    assert detect_spacing(points, np.arange(4)[None], row.name) == spacing


def _recursive_triangle() -> np.ndarray:
    # Source: fenics-basix 0.11.0, LagrangeVariant.gll_isaac, triangle of order 4: inner nodes.
    nodes = _row("VTK_LAGRANGE_TRIANGLE", 4, "gll").nodes.copy()
    a, b = 0.22215519822894975, 0.5556896035421005
    nodes[12:] = [(a, a), (b, a), (a, b)]
    return nodes


def test_other_nodes_are_measured() -> None:
    name = "VTK_LAGRANGE_TRIANGLE"
    nodes = _recursive_triangle()
    linear = ELEMENTS["triangle"].shape_functions(nodes)
    corners, cells = meshes.PLATE, np.array([(0, 1, 5), (0, 5, 4), (4, 5, 6)])
    points = np.einsum("an,cnx->cax", linear, corners[cells]).reshape(-1, 2)
    points = np.concatenate([points, np.zeros((len(points), 1))], axis=1)
    spacing = detect_spacing(points, np.arange(45).reshape(3, 15), name)
    assert not isinstance(spacing, str)
    np.testing.assert_allclose(spacing, nodes, atol=1e-12)
    row = element(name, 15, spacing)
    assert row is element(name, 15, spacing)
    np.testing.assert_allclose(row.shape_functions(nodes), np.eye(15), atol=1e-12)
    np.testing.assert_allclose(row.shape_gradients([[0.2, 0.3]]) @ row.nodes, [np.eye(2)], atol=1e-12)


@pytest.mark.parametrize(
    "name", ["VTK_LAGRANGE_TETRAHEDRON", "VTK_LAGRANGE_HEXAHEDRON", "VTK_LAGRANGE_WEDGE"]
)
def test_measured_nodes_of_solids_reach_their_faces(name: str) -> None:
    # Invented nodes: half-way between the two named families.
    equal, lobatto = _row(name, 4), _row(name, 4, "gll")
    nodes = (equal.nodes + lobatto.nodes) / 2
    mesh = meshes.affine_cell(equal)
    fit = np.linalg.lstsq(np.column_stack([np.ones(equal.n_nodes), equal.nodes]), mesh.points, rcond=None)[0]
    points = np.column_stack([np.ones(equal.n_nodes), nodes]) @ fit
    spacing = detect_spacing(points, mesh.cells, name)
    row = _row(name, 4, spacing)
    np.testing.assert_allclose(row.nodes, nodes, atol=1e-12)
    for face in row.face_nodes:
        xi = face.element.nodes[: face.element.n_corners].mean(axis=0)[None]
        on_solid = face.element.shape_functions(xi) @ row.nodes[list(face.nodes)]
        values = row.shape_functions(on_solid)[0, list(face.nodes)]
        np.testing.assert_allclose(values, face.element.shape_functions(xi)[0], atol=1e-11)


def test_cells_that_disagree_are_refused() -> None:
    row = _row("VTK_LAGRANGE_QUADRILATERAL", 3)
    nodes = [np.where(np.abs(row.nodes) < 1, row.nodes * s, row.nodes) for s in (0.8, 1.1, 1.4)]
    points = np.concatenate([np.column_stack([n + 5 * k, 0 * n[:, 0]]) for k, n in enumerate(nodes)])
    with pytest.raises(InputError, match="neither equally spaced nor at Gauss-Lobatto-Legendre points"):
        detect_spacing(points, np.arange(48).reshape(3, 16), row.name)


def test_nodes_crowded_to_one_end_are_no_spacing() -> None:
    row = _row("VTK_LAGRANGE_CURVE", 3)
    t = ((row.nodes[:, 0] + 1) / 2) ** 2
    with pytest.raises(InputError, match="no other spacing fits"):
        detect_spacing(np.column_stack([t, t, 0 * t]), np.arange(4)[None], row.name)


def test_another_node_order_is_no_spacing() -> None:
    row = _row("VTK_LAGRANGE_QUADRILATERAL", 3)
    mesh = meshes.affine_cell(row)
    turned_edges = mesh.points[[0, 1, 2, 3, 5, 4, 7, 6, 9, 8, 11, 10, 12, 13, 14, 15]]
    with pytest.raises(InputError, match="Check the node order"):
        detect_spacing(turned_edges, mesh.cells, row.name)


def test_most_cells_decide() -> None:
    row = _row("VTK_LAGRANGE_QUADRILATERAL", 3, "gll")
    odd = row.nodes.copy()
    odd[12:] *= 0.9
    points = np.concatenate(
        [np.column_stack([n, 0 * n[:, 0]]) + 3 * k for k, n in enumerate([row.nodes] * 3 + [odd])]
    )
    assert detect_spacing(points, np.arange(64).reshape(4, 16), row.name) == "gll"


@pytest.mark.parametrize("name", ["tetra10", "hexahedron27", "line4", "VTK_LAGRANGE_HEXAHEDRON"])
def test_lower_orders_and_fixed_cells_are_equal(name: str) -> None:
    # Mid-side nodes moved on purpose (towards a crack tip) are geometry, not another element.
    row = ELEMENTS.get(name) or _row(name, 2)
    mesh = meshes.distorted_cell(row, 0.2)
    assert detect_spacing(mesh.points, mesh.cells, name) == "equal"


def test_damaged_and_empty_cells_do_not_count() -> None:
    row = _row("VTK_LAGRANGE_TETRAHEDRON", 3, "gll")
    mesh = meshes.affine_cell(row)
    points = np.concatenate([mesh.points, np.full((20, 3), np.nan), np.zeros((20, 3))])
    assert detect_spacing(points, np.arange(60).reshape(3, 20), row.name) == "gll"
    assert detect_spacing(points, np.arange(20, 60).reshape(2, 20), row.name) == "equal"
    assert detect_spacing(points, np.zeros((0, 20), dtype=np.int64), row.name) == "equal"
