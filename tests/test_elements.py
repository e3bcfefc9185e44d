"""Laws that every row of the element table obeys; a new row is tested by being in the table."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, element

# Source: completeness and nodality of shape functions: Zienkiewicz and Taylor, The Finite Element Method;
# Hughes, The Finite Element Method, chapter 3; Bathe, Finite Element Procedures, chapter 5. All checks here.

ROWS = [
    *((name, row) for name, row in ELEMENTS.items()),
    *((f"pyramid_lagrange_{n}", element("VTK_LAGRANGE_PYRAMID", n)) for n in (5, 14)),
    *(
        (
            f"{name.removeprefix('VTK_').lower()}_{order}_{spacing}",
            element(name, family.n_nodes(order), spacing),
        )
        for name, family in FAMILIES.items()
        for order in range(1, 7)
        for spacing in ("equal", "gll")
        if order > 2 or spacing == "equal"
    ),
]
each_row = pytest.mark.parametrize("row", [pytest.param(r, id=n) for n, r in ROWS])
each_solid = pytest.mark.parametrize("row", [pytest.param(r, id=n) for n, r in ROWS if r.dim == 3])


def inside(row: Element, n: int = 7, seed: int = 3) -> np.ndarray:
    """Random points inside the reference shape."""
    weights = np.random.default_rng(seed).dirichlet(np.ones(row.n_corners), n)
    return weights @ row.shape.vertices


def displacement_gradients(row: Element, X: np.ndarray, values: np.ndarray, xi: np.ndarray) -> np.ndarray:
    """``(p, m, dim)`` gradients of m nodal fields ``(n_nodes, m)``, nodes X ``(n_nodes, dim)``."""
    dN = row.shape_gradients(xi)
    jacobian = np.swapaxes(dN @ X, 1, 2)
    return np.swapaxes(dN @ values, 1, 2) @ np.linalg.inv(jacobian)


@each_row
def test_each_function_is_one_at_its_own_node(row: Element) -> None:
    np.testing.assert_allclose(row.shape_functions(row.nodes), np.eye(row.n_nodes), atol=1e-12)


@each_row
def test_functions_sum_to_one_and_gradients_to_zero(row: Element) -> None:
    xi = inside(row)
    np.testing.assert_allclose(row.shape_functions(xi).sum(axis=1), 1, atol=2e-14)
    np.testing.assert_allclose(row.shape_gradients(xi).sum(axis=2), 0, atol=5e-13)


@each_row
def test_gradients_are_the_differences_of_the_functions(row: Element) -> None:
    # Fourth-order central differences: error about step^4 times the fifth derivative, rounding eps / step.
    xi, step = inside(row), 2e-4
    for d in range(row.dim):
        shift = step * np.eye(row.dim)[d]
        f = {s: row.shape_functions(xi + s * shift) for s in (-2, -1, 1, 2)}
        differences = (8 * (f[1] - f[-1]) - (f[2] - f[-2])) / (12 * step)
        np.testing.assert_allclose(row.shape_gradients(xi)[:, d], differences, atol=2e-9 * row.order**3)


@each_row
def test_reference_nodes_map_onto_themselves(row: Element) -> None:
    # The Jacobian of the identity map is the identity: positive everywhere, at the nodes too.
    for xi in (row.nodes, row.quadrature.points, row.centroid[None]):
        jacobian = row.shape_gradients(xi) @ row.nodes
        np.testing.assert_allclose(jacobian, np.broadcast_to(np.eye(row.dim), jacobian.shape), atol=1e-11)


@each_row
def test_every_polynomial_of_the_order_has_its_exact_gradient_on_an_affine_cell(row: Element) -> None:
    X = meshes.affine_cell(row).points[:, : row.dim]
    xi = inside(row)
    x = row.shape_functions(xi) @ X
    powers = np.array([p for p in product(range(row.order + 1), repeat=row.dim) if sum(p) <= row.order])
    values = np.prod(X[:, None, :] ** powers, axis=2)
    found = displacement_gradients(row, X, values, xi)
    for d in range(row.dim):
        lowered = powers - (np.arange(row.dim) == d)
        exact = powers[:, d] * np.prod(x[:, None, :] ** np.maximum(lowered, 0), axis=2)
        np.testing.assert_allclose(found[:, :, d], exact, atol=1e-11 * max(1.0, np.abs(exact).max()))


@each_row
def test_the_order_is_not_understated(row: Element) -> None:
    powers = [p for p in product(range(row.order + 2), repeat=row.dim) if sum(p) == row.order + 1]
    xi = inside(row)
    misses = [
        np.abs(row.shape_functions(xi) @ np.prod(row.nodes**p, axis=1) - np.prod(xi**p, axis=1)).max()
        for p in powers
    ]
    assert max(misses) > 1e-4


@each_row
def test_a_linear_field_is_exact_on_a_distorted_cell(row: Element) -> None:
    X = meshes.distorted_cell(row).points[:, : row.dim]
    H = np.random.default_rng(5).uniform(-1, 1, (row.dim, row.dim))
    for xi in (inside(row), row.quadrature.points, row.centroid[None]):
        found = displacement_gradients(row, X, X @ H.T + 0.3, xi)
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-11)


@each_row
def test_conditioning(row: Element) -> None:
    assert np.linalg.cond(row.space.values(row.nodes)) < 300


@each_row
def test_centroid_is_that_of_the_volume(row: Element) -> None:
    points, weights = row.quadrature.points, row.quadrature.weights
    np.testing.assert_allclose(weights @ points / weights.sum(), row.centroid, atol=1e-14)
    np.testing.assert_allclose(weights.sum(), row.shape.volume, rtol=1e-14)


@each_row
def test_default_rule_gives_the_exact_mean_gradient_on_an_affine_cell(row: Element) -> None:
    # Gauss's theorem needs no rule at all on these shapes: compare with a far finer rule of the same kind.
    fine = _fine_rule(row)
    mean = np.einsum("q,qka->ka", row.quadrature.weights, row.shape_gradients(row.quadrature.points))
    exact = np.einsum("q,qka->ka", fine[1], row.shape_gradients(fine[0]))
    np.testing.assert_allclose(mean, exact, atol=1e-12)


def _fine_rule(row: Element) -> tuple[np.ndarray, np.ndarray]:
    """Collapsed Gauss product on the shape, written here on its own: 10 points a direction."""
    s, w = np.polynomial.legendre.leggauss(10)
    unit, half = (s + 1) / 2, w / 2
    grid = np.array(list(product(unit, repeat=row.dim)))
    weights = np.prod(np.array(list(product(half, repeat=row.dim))), axis=1)
    name = row.shape.name
    if name in {"line", "quad", "pixel", "hexahedron", "voxel"}:
        return 2 * grid - 1, weights * 2**row.dim
    if name == "pyramid":
        t = 1 - grid[:, 2:]
        return np.concatenate([(2 * grid[:, :2] - 1) * t, grid[:, 2:]], axis=1), weights * 4 * t[:, 0] ** 2
    if name == "wedge":
        y = grid[:, 1]
        return np.column_stack([grid[:, 0] * (1 - y), y, 2 * grid[:, 2] - 1]), weights * 2 * (1 - y)
    if name == "triangle":
        y = grid[:, 1]
        return np.column_stack([grid[:, 0] * (1 - y), y]), weights * (1 - y)
    y, z = grid[:, 1] * (1 - grid[:, 2]), grid[:, 2]
    return np.column_stack([grid[:, 0] * (1 - y - z), y, z]), weights * (1 - y - z) * (1 - z)


@each_row
def test_gradients_are_kept_and_cannot_be_changed(row: Element) -> None:
    for xi in (row.centroid[None], row.quadrature.points, row.nodes):
        kept = row.shape_gradients(xi)
        assert kept is row.shape_gradients(xi.copy())
        with pytest.raises(ValueError, match="read-only"):
            kept[0, 0, 0] = 1.0


@each_row
def test_mid_side_nodes_lie_on_their_edges(row: Element) -> None:
    seen = set(range(row.n_corners))
    for a, b, between in row.edges:
        chain = row.nodes[[a, *between, b]]
        fraction = (chain - chain[0]) @ (chain[-1] - chain[0]) / np.sum((chain[-1] - chain[0]) ** 2)
        np.testing.assert_allclose(chain, chain[0] + fraction[:, None] * (chain[-1] - chain[0]), atol=1e-12)
        np.testing.assert_allclose(fraction, 1 - fraction[::-1], atol=1e-12)
        assert (np.diff(fraction) > 0).all()
        if len(between) == 1:
            np.testing.assert_allclose(fraction[1], 0.5, atol=1e-12)
        assert not seen & set(between)
        seen |= set(between)


@each_solid
def test_faces(row: Element) -> None:
    for face, corners in zip(row.face_nodes, row.shape.faces, strict=True):
        local = inside(face.element)
        surface = row.nodes[list(face.nodes)]
        xi = face.element.shape_functions(local) @ surface
        volume_values = row.shape_functions(xi)
        # The trace on the face is the face's own element, and nobody else's.
        np.testing.assert_allclose(
            volume_values[:, face.nodes], face.element.shape_functions(local), atol=1e-11
        )
        others = np.setdiff1d(np.arange(row.n_nodes), face.nodes)
        np.testing.assert_allclose(volume_values[:, others], 0, atol=1e-11)
        tangents = face.element.shape_gradients(local) @ surface
        normals = np.cross(tangents[:, 0], tangents[:, 1])
        assert (np.einsum("pi,pi->p", normals, xi - row.centroid) > 0).all()
        assert face.cell_type == face.element.name
        assert set(face.nodes[: face.element.n_corners]) == set(corners)


@each_solid
def test_faces_close(row: Element) -> None:
    # The outward area vectors of a closed curved surface sum to zero: also on a distorted cell.
    X = meshes.distorted_cell(row).points
    total = np.zeros(3)
    for face in row.face_nodes:
        xi, w = _fine_rule(face.element)
        tangents = face.element.shape_gradients(xi) @ X[list(face.nodes)]
        total += w @ np.cross(tangents[:, 0], tangents[:, 1])
    np.testing.assert_allclose(total, 0, atol=1e-11)


@each_row
def test_extents_give_the_smallest_height_of_an_affine_cell(row: Element) -> None:
    # Practice: the height over a facet is volume times dim over facet area for a simplex; for the others the
    # distance between parallel facets. Here: the spread of all corners along the facet's normal.
    X = meshes.affine_cell(row, seed=2).points[: row.n_corners, : row.dim]
    jacobian = (
        row.shape_gradients(row.centroid[None])[0] @ meshes.affine_cell(row, seed=2).points[:, : row.dim]
    ).T
    covectors = row.shape.extents @ np.linalg.inv(jacobian)
    heights = 1 / np.linalg.norm(covectors, axis=1)
    spread = [np.ptp(X @ (c / np.linalg.norm(c))) for c in covectors]
    np.testing.assert_allclose(heights, spread, rtol=1e-12)


@each_row
def test_jacobian_is_exempt_only_at_the_apex_of_pyramids(row: Element) -> None:
    exempt = [n for n in range(row.n_nodes) if row.shape.name == "pyramid" and row.nodes[n, 2] == 1]
    assert list(row.node_jacobian_exempt) == exempt


def _measures(row: Element, mesh: meshes.Mesh, xi: np.ndarray) -> np.ndarray:
    """``(n_cells, p)`` signed det J of solids, length or area stretch of the others."""
    dX = np.einsum("qka,cax->cqkx", row.shape_gradients(xi), mesh.points[mesh.cells])
    return np.linalg.det(dX) if row.dim == 3 else np.sqrt(np.linalg.det(dX @ np.swapaxes(dX, -1, -2)))


@each_row
def test_patch_has_positive_jacobians_and_shared_nodes(row: Element) -> None:
    linear = ELEMENTS[row.shape.name].quadrature.points
    for mesh in (meshes.patch(row), meshes.curved(meshes.patch(row), 0.02)):
        assert len(mesh.points) < mesh.cells.size
        assert len(np.unique(mesh.cells)) == len(mesh.points)
        assert (_measures(row, mesh, linear) > 0).all()


@each_row
def test_patch_volumes(row: Element) -> None:
    # Source: MacNeal and Harder 1985: the plate has area 0.24 x 0.12, the cube volume 1. The wedges are the
    # plate times 0.12; line, pixel and voxel have no published size: the line is (0.9, 0.4, 0.2) long.
    xi, w = _fine_rule(row)
    total = float((_measures(row, meshes.patch(row), xi) @ w).sum())
    expected = {"quad": 0.0288, "triangle": 0.0288, "wedge": 0.0288 * 0.12, "line": np.sqrt(1.01)}
    expected |= {"pixel": 0.5 * 0.3, "voxel": 0.5 * 0.3 * 0.2}
    np.testing.assert_allclose(total, expected.get(row.shape.name, 1.0), rtol=1e-11)


def test_solid_patch_is_tangled_at_one_corner() -> None:
    # Source: MacNeal and Harder 1985. Measured: one of the 56 corner values of det J is -0.00158, a fact of
    # the published coordinates; all integration points are positive.
    row = ELEMENTS["hexahedron"]
    at_nodes = _measures(row, meshes.patch(row), row.nodes)
    np.testing.assert_allclose(at_nodes[at_nodes < 0], [-0.00158], atol=5e-6)


@each_row
def test_distorted_cell_is_not_tangled(row: Element) -> None:
    for seed in range(3):
        assert (_measures(row, meshes.distorted_cell(row, seed=seed), row.quadrature.points) > 0).all()


def test_wrong_shape_of_reference_coordinates_is_named() -> None:
    with pytest.raises(ValueError, match=r"shape \(3,\); expected \(p, 3\)"):
        ELEMENTS["tetra"].shape_functions([0.1, 0.1, 0.1])  # type: ignore[list-item]
