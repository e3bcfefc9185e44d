"""The displacement gradient of every element: what it must give whatever the element."""

from __future__ import annotations

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import kinematics as kin
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import InputError, UsageError
from unturn.gradient import displacement_gradient

# Source: a linear field is exact on any isoparametric element, rigid motion has no strain: Hughes, The Finite
# Element Method, section 3.9; Zienkiewicz and Taylor. All checks of this file that state no other source.

ROWS = {
    **ELEMENTS,
    **{f"pyramid_lagrange_{n}": element("VTK_LAGRANGE_PYRAMID", n) for n in (5, 14)},
    **{
        f"{name.removeprefix('VTK_').lower()}_{order}": element(name, family.n_nodes(order))
        for name, family in FAMILIES.items()
        for order in range(1, 7)
    },
}
SOLIDS = {name: row for name, row in ROWS.items() if row.dim == 3}
FLAT = {name: row for name, row in ROWS.items() if row.dim == 2}


def each(rows: dict[str, Element]) -> pytest.MarkDecorator:
    return pytest.mark.parametrize("row", list(rows.values()), ids=list(rows))


def inside(row: Element, n: int = 4) -> np.ndarray:
    """Random points inside the reference shape."""
    return np.random.default_rng(3).dirichlet(np.ones(row.n_corners), n) @ row.shape.vertices


def places(row: Element) -> tuple[object, ...]:
    return "centroid", "mean", inside(row)


def gradients(mesh: meshes.Mesh, u: np.ndarray, at: object) -> np.ndarray:
    """`(n, 3, 3)`, one row per cell and point."""
    return displacement_gradient(mesh.points, mesh.cells, u, mesh.cell_type, at=at).reshape(-1, 3, 3)


def random_gradient(dim: int, size: float = 1.0) -> np.ndarray:
    """A gradient of a motion within the first `dim` coordinates."""
    H = np.zeros((3, 3))
    H[:dim, :dim] = np.random.default_rng(5).uniform(-1, 1, (dim, dim))
    return size * H


def curved_cell(row: Element) -> meshes.Mesh:
    return meshes.curved(meshes.distorted_cell(row))


@each({**SOLIDS, **FLAT})
def test_a_linear_field_is_exact_on_a_curved_distorted_cell(row: Element) -> None:
    mesh = curved_cell(row)
    H = random_gradient(row.dim)
    for at in places(row):
        found = gradients(mesh, mesh.points @ H.T + 0.7, at)
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-12)


@each({name: row for name, row in ROWS.items() if row.dim == 1})
def test_a_line_has_its_axial_strain_and_its_turn(row: Element) -> None:
    mesh = meshes.distorted_cell(row)
    t = np.array([0.6, 0.0, 0.8])
    mesh = mesh._replace(points=mesh.points[:, :1] * t)
    stretch, theta = 3e-3, np.array([0.02, -0.01, 0.015])
    u = stretch * mesh.points + np.cross(theta, mesh.points)
    across = theta - (theta @ t) * t  # the twist about the line cannot be seen
    for at in places(row):
        for H in gradients(mesh, u, at):
            np.testing.assert_allclose(kin.strain(H), stretch * np.outer(t, t), atol=1e-14)
            np.testing.assert_allclose(kin.rotation_vector(H), across, atol=1e-13)


@each({**SOLIDS, **FLAT})
def test_small_rigid_rotation_is_rotation_and_no_strain(row: Element) -> None:
    mesh = curved_cell(row)
    theta = np.array([0.02, -0.01, 0.03]) if row.dim == 3 else np.array([0, 0, 0.03])
    for at in places(row):
        for H in gradients(mesh, np.cross(theta, mesh.points) + np.array([0.4, -0.2, 0]), at):
            assert np.abs(kin.strain(H)).max() < 1e-14
            np.testing.assert_allclose(kin.rotation_vector(H), theta, atol=1e-13)


@each({**SOLIDS, **FLAT})
def test_far_origin_and_large_translation_keep_the_digits(row: Element) -> None:
    mesh = curved_cell(row)
    H = random_gradient(row.dim, 1e-3)
    near = gradients(mesh, mesh.points @ H.T, "mean")
    # coordinates on a grid of 2^-20, so that the offset itself rounds nothing
    points = np.round(mesh.points * 2**20) / 2**20
    u = np.round(points @ H.T * 2**30) / 2**30
    here = gradients(mesh._replace(points=points), u, "mean")
    offset = np.array([5e5, -5e5, 5e5 if row.dim == 3 else 0])
    far = gradients(mesh._replace(points=points + offset), u, "mean")
    np.testing.assert_allclose(far, here, rtol=1e-13, atol=1e-18)
    np.testing.assert_allclose(here, near, atol=1e-8 * row.order**2)
    moved = gradients(
        mesh._replace(points=points), u + np.array([1e6, -1e6, 1e6 if row.dim == 3 else 0]), "mean"
    )
    np.testing.assert_allclose(moved, here, atol=2e-8 * row.order**2)  # u rounds to 1e6 x 1.1e-16


@each({**SOLIDS, **FLAT})
def test_a_translation_of_a_million_sizes_has_no_gradient(row: Element) -> None:
    mesh = curved_cell(row)
    shift = np.array([1e6, -2e6, 3e6 if row.dim == 3 else 0])
    for at in places(row):
        np.testing.assert_array_equal(gradients(mesh, np.broadcast_to(shift, mesh.points.shape), at), 0)


@each(SOLIDS)
def test_mirrored_numbering_gives_the_right_gradient(row: Element) -> None:
    mesh = curved_cell(row)
    mirrored = mesh._replace(points=mesh.points * [1, 1, -1])  # det J is negative everywhere
    H = random_gradient(3)
    for at in places(row):
        found = gradients(mirrored, mirrored.points @ H.T, at)
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-12)


@pytest.mark.source("MacNeal and Harder 1985, Finite Elem. Anal. Des. 1, 3-20: patch tests")
@each({**SOLIDS, **FLAT})
def test_patches_of_macneal_and_harder(row: Element) -> None:
    mesh = meshes.patch(row)
    x, y, z = mesh.points.T
    if mesh.element.dim == 2:
        u = 1e-3 * np.stack([x + y / 2, y + x / 2, 0 * x], 1)
        exact = 1e-3 * np.array([[1, 0.5, 0], [0.5, 1, 0], [0, 0, 0]])
    else:
        u = 1e-3 * np.stack([2 * x + y + z, x + 2 * y + z, x + y + 2 * z], 1) / 2
        exact = 1e-3 * (np.eye(3) + np.ones((3, 3))) / 2
    for at in places(mesh.element):
        found = gradients(mesh, u, at)
        np.testing.assert_allclose(kin.strain(found), np.broadcast_to(exact, found.shape), atol=1e-15)
    assert 2 * kin.strain(found)[0, 0, 1] == pytest.approx(1e-3, rel=1e-12)  # engineering shear


@pytest.mark.derived("a linear field is exact on every cell of a bent patch as well")
@pytest.mark.parametrize("name", [n for n, row in ELEMENTS.items() if row.dim > 1])
def test_bent_patches(name: str) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[name]))
    H = random_gradient(mesh.element.dim, 1e-3)
    for at in ("centroid", "mean"):
        found = gradients(mesh, mesh.points @ H.T, at)
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-15)


@pytest.mark.derived("the mean of p x^(p-1) over the cell by twelve Gauss points a direction")
@each({n: row for n, row in SOLIDS.items() if row.shape.name in {"hexahedron", "tetra"}})
def test_mean_of_a_field_of_the_elements_order_on_an_affine_cell(row: Element) -> None:
    mesh = meshes.affine_cell(row)
    origin = mesh.points.mean(axis=0)
    x = mesh.points - origin
    p = row.order
    u = np.stack([x[:, 0] ** p, x[:, 0] * 0, x[:, 0] * 0], 1)
    fine = 12
    s, w = np.polynomial.legendre.leggauss(fine)
    if row.shape.name == "hexahedron":
        grid = np.stack(np.meshgrid(s, s, s, indexing="ij"), -1).reshape(-1, 3)
        weight = np.einsum("i,j,k->ijk", w, w, w).reshape(-1)
    else:  # collapsed coordinates on the unit tetrahedron
        a, b, c = (v.reshape(-1) for v in np.meshgrid((s + 1) / 2, (s + 1) / 2, (s + 1) / 2, indexing="ij"))
        grid = np.stack([a * (1 - b) * (1 - c), b * (1 - c), c], 1)
        weight = np.einsum("i,j,k->ijk", w, w, w).reshape(-1) / 8 * (1 - b) * (1 - c) ** 2
    where = row.shape_functions(grid) @ x
    exact = (weight @ (p * where[:, 0] ** (p - 1))) / weight.sum()
    assert gradients(mesh, u, "mean")[0, 0, 0] == pytest.approx(exact, rel=1e-11, abs=1e-12)


def test_threads_and_chunks_change_nothing() -> None:
    rng = np.random.default_rng(0)
    points = rng.uniform(size=(300, 3))
    cells = rng.integers(0, 300, (20_000, 4))
    u = rng.normal(size=(300, 3))
    one = displacement_gradient(points, cells, u, "tetra", threads=1)
    np.testing.assert_array_equal(one, displacement_gradient(points, cells, u, "tetra", threads=4))
    picked = displacement_gradient(points, cells[12_345:12_346], u, "tetra")
    np.testing.assert_allclose(one[12_345:12_346], picked, rtol=1e-13)


def test_a_finite_rotation_shows_as_its_own_gradient() -> None:
    mesh = curved_cell(ELEMENTS["hexahedron20"])
    turn = axis_angle((0.6, 0.0, 0.8), np.radians(120))
    for H in gradients(mesh, mesh.points @ turn.T, "mean"):
        np.testing.assert_allclose(H, turn, atol=1e-13)
        assert np.abs(kin.green_lagrange_strain(H)).max() < 1e-13


def test_plane_arrays_of_two_columns_count_as_z_zero() -> None:
    points = np.array([[0, 0], [2, 0], [0, 1.0]])
    found = displacement_gradient(points, [[0, 1, 2]], points * [1e-3, -2e-3], "triangle")
    np.testing.assert_allclose(found[0], np.diag([1e-3, -2e-3, 0]), atol=1e-18)


TETRA = (np.zeros((4, 3)), [[0, 1, 2, 3]], np.zeros((4, 3)), "tetra", "centroid")


@pytest.mark.parametrize(
    ("position", "value", "error", "words"),
    [
        (0, np.zeros((4, 1)), UsageError, "points have shape"),
        (1, [0, 1, 2, 3], UsageError, "n_cells, n_nodes"),
        (1, [[0, 1, 2, 4]], UsageError, "outside 0 to 3"),
        (1, [[0, 1, 2, -1]], UsageError, "outside 0 to 3"),
        (1, [[0, 1, 2]], InputError, "has 4 nodes"),
        (2, np.zeros((5, 3)), UsageError, "one row per point"),
        (3, "vertex", InputError, "no extent"),
        (4, "corner", UsageError, "'corner'"),
        (4, [[0, 0]], UsageError, "3 coordinates"),
    ],
)
def test_what_does_not_fit_is_refused(
    position: int, value: object, error: type[Exception], words: str
) -> None:
    arguments = [*TETRA[:position], value, *TETRA[position + 1 :]]
    with pytest.raises(error, match=words):
        displacement_gradient(*arguments)  # type: ignore[arg-type]


@pytest.mark.parametrize("name", ["tetra", "hexahedron", "wedge", "pyramid", "triangle", "quad", "line"])
def test_a_cell_without_volume_is_nan_and_its_neighbour_is_right(name: str) -> None:
    mesh = meshes.affine_cell(ELEMENTS[name])
    points = np.concatenate([mesh.points, mesh.points * ([0, 0, 0] if name == "line" else [1, 0, 0])])
    cells = np.concatenate([mesh.cells, mesh.cells + len(mesh.points)])
    u = points @ random_gradient(mesh.element.dim, 1e-3).T
    found = displacement_gradient(points, cells, u, name)
    assert np.isfinite(found[0]).all()
    assert np.isnan(found[1]).any()
