"""Plane meshes: the third direction by what was stated of it, in any coordinate plane."""

from __future__ import annotations

from typing import Literal

import numpy as np
import pytest

import meshes
from unturn import kinematics as kin
from unturn.elements import ELEMENTS
from unturn.fields import CellFields, compute_fields
from unturn.gradient import ElementChunk, NodalFields, Plane, sample_points
from unturn.model import PlaneOptions, build_model

At = Literal["centroid", "mean"]
FLAT = [name for name, row in ELEMENTS.items() if row.dim == 2]
PLANES = {"xy": (0, 1), "xz": (0, 2), "yz": (1, 2)}
H2 = np.array([[2e-3, 5e-4], [-3e-4, 1e-3]])


def plane_mesh(name: str, plane: str, offset: float = 0.7) -> meshes.Mesh:
    """A patch laid into a coordinate plane at some distance from the origin's."""
    mesh = meshes.curved(meshes.patch(ELEMENTS[name])) if name != "pixel" else meshes.patch(ELEMENTS[name])
    points = np.full(mesh.points.shape, offset)
    points[:, PLANES[plane]] = mesh.points[:, :2] + 0.3
    return mesh._replace(points=points)


def computed(mesh: meshes.Mesh, u: np.ndarray, options: PlaneOptions | None, at: At) -> CellFields:
    model = build_model(mesh.result(u=u), plane=options)
    return compute_fields(model, ["displacement_gradient", "element_volume"], at=at, diagnose=True)


def in_plane(mesh: meshes.Mesh, plane: str) -> tuple[np.ndarray, np.ndarray, int]:
    """Displacement of the in-plane gradient H2, that gradient in space, and the normal axis."""
    a, b = PLANES[plane]
    H = np.zeros((3, 3))
    H[np.ix_((a, b), (a, b))] = H2
    return mesh.points @ H.T, H, 3 - a - b


@pytest.mark.parametrize("name", FLAT)
@pytest.mark.parametrize("plane", PLANES)
@pytest.mark.parametrize("at", ["centroid", "mean"])
class TestPlanes:
    def test_strain(self, name: str, plane: str, at: At) -> None:
        mesh = plane_mesh(name, plane)
        u, H, _ = in_plane(mesh, plane)
        found = (
            computed(mesh, u, PlaneOptions("strain"), at).arrays["displacement_gradient"].reshape(-1, 3, 3)
        )
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-14)

    @pytest.mark.source("plane stress: e_zz = -nu/(1-nu) (e_xx + e_yy): Timoshenko and Goodier, article 16")
    def test_stress(self, name: str, plane: str, at: At) -> None:
        mesh = plane_mesh(name, plane)
        u, H, n = in_plane(mesh, plane)
        H[n, n] = -0.3 / 0.7 * np.trace(H2)
        found = (
            computed(mesh, u, PlaneOptions("stress", 0.3), at)
            .arrays["displacement_gradient"]
            .reshape(-1, 3, 3)
        )
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-14)

    def test_nothing_stated(self, name: str, plane: str, at: At) -> None:
        mesh = plane_mesh(name, plane)
        u, H, n = in_plane(mesh, plane)
        H[n, n] = np.nan
        fields = computed(mesh, u, None, at)
        found = fields.arrays["displacement_gradient"].reshape(-1, 3, 3)
        np.testing.assert_allclose(found, np.broadcast_to(H, found.shape), atol=1e-14)
        assert not fields.left_out
        assert fields.diagnostics is not None
        assert np.isfinite(fields.diagnostics.error).all()


@pytest.mark.source("axisymmetric strain: e_tt = u_r / r: Timoshenko and Goodier, article 30")
@pytest.mark.parametrize("name", FLAT)
@pytest.mark.parametrize(
    ("plane", "axis", "radial"), [("xy", "y", 0), ("xy", "x", 1), ("xz", "x", 2), ("yz", "y", 2)]
)
def test_hoop_strain_and_ring_volume(name: str, plane: str, axis: Literal["x", "y"], radial: int) -> None:
    mesh = plane_mesh(name, plane)
    u = np.zeros(mesh.points.shape)
    u[:, radial] = 2e-3 * mesh.points[:, radial] + 5e-4  # du_r/dr = 2e-3, u_r/r = 2e-3 + 5e-4/r
    fields = computed(mesh, u, PlaneOptions("axisymmetric", axis=axis), "centroid")
    H = fields.arrays["displacement_gradient"].reshape(-1, 3, 3)
    centre = mesh.element.shape_functions(mesh.element.centroid[None])[0]
    r = mesh.points[mesh.cells][:, :, radial] @ centre
    n = 3 - sum(PLANES[plane])
    np.testing.assert_allclose(H[:, radial, radial], 2e-3, rtol=1e-12)
    np.testing.assert_allclose(H[:, n, n], 2e-3 + 5e-4 / r, rtol=1e-12)
    # the volume of a ring is 2 pi times the first moment of its section; here by a finer rule
    total = float(fields.arrays["element_volume"].sum())
    exact = mesh.element.n_nodes == mesh.element.n_corners  # bent edges: the element's own rule is not exact
    assert total == pytest.approx(ring_volume(mesh, PLANES[plane], radial), rel=1e-12 if exact else 2e-6)
    assert fields.diagnostics is not None
    np.testing.assert_allclose(fields.diagnostics.volume, fields.arrays["element_volume"])


def ring_volume(mesh: meshes.Mesh, plane: tuple[int, int], radial: int) -> float:
    """`2 pi` times the integral of r over the cells, twelve Gauss points a direction."""
    s, w = np.polynomial.legendre.leggauss(12)
    grid = np.stack(np.meshgrid(s, s, indexing="ij"), -1).reshape(-1, 2)
    weight = np.outer(w, w).reshape(-1)
    if mesh.element.shape.name == "triangle":
        a, b = (grid.T + 1) / 2
        grid, weight = np.stack([a * (1 - b), b], 1), weight / 4 * (1 - b)
    x = mesh.points[mesh.cells][:, :, plane]
    J = np.einsum("qka,nai->nqik", mesh.element.shape_gradients(grid), x)
    r = mesh.points[mesh.cells][:, :, radial] @ mesh.element.shape_functions(grid).T
    return float(2 * np.pi * np.sum(weight * r * np.abs(np.linalg.det(J))))


@pytest.mark.derived(
    "a block that touches the axis, volume of the cylinder pi R^2 L; on the axis u_r/r -> du_r/dr"
)
@pytest.mark.parametrize(("axis", "radial"), [("y", 0), ("x", 1)])
@pytest.mark.parametrize("name", ["quad", "quad8", "triangle", "triangle6"])
def test_cells_that_touch_the_axis(name: str, axis: Literal["x", "y"], radial: int) -> None:
    row = ELEMENTS[name]
    corners = np.array([[0.0, 0.0], [2, 0], [2, 3], [0, 3]])
    if radial == 1:
        corners = corners[:, ::-1]
    cells = np.array([[0, 1, 2, 3]]) if row.shape.name == "quad" else np.array([[0, 1, 2], [0, 2, 3]])
    mesh = meshes.straight(corners, cells, row)
    u = np.zeros(mesh.points.shape)
    u[:, radial] = 1e-3 * mesh.points[:, radial]
    fields = computed(mesh, u, PlaneOptions("axisymmetric", axis=axis), "mean")
    assert fields.arrays["element_volume"].sum() == pytest.approx(np.pi * 2**2 * 3, rel=1e-12)
    found = fields.arrays["displacement_gradient"].reshape(-1, 3, 3)
    np.testing.assert_allclose(found[:, 2, 2], 1e-3, rtol=1e-12)

    plane = Plane(2, "axisymmetric", None, {"x": 0, "y": 1}[axis])
    chunk = ElementChunk(NodalFields(mesh.points, u), mesh.cells, row, plane)
    where = sample_points(row, row.nodes)
    for gradients, functions in zip(where.gradients, where.functions):
        H = chunk.at(gradients, functions).H
        np.testing.assert_allclose(H[2, 2], 1e-3, rtol=1e-11)  # at the nodes on the axis as well


@pytest.mark.derived("finite plane stress: ln l3 = -nu/(1-nu) (ln l1 + ln l2)")
@pytest.mark.parametrize("nu", [-0.2, 0.0, 0.3, 0.5])
def test_finite_thickness_stretch(nu: float) -> None:
    mesh = plane_mesh("quad", "xy")
    F = np.array([[1.3, 0.2, 0], [-0.1, 0.9, 0], [0, 0, 1]])
    u = mesh.points @ (F - np.eye(3)).T
    u[:, 2] = 0
    chunk = ElementChunk(NodalFields(mesh.points, u), mesh.cells, mesh.element, Plane(2, "stress", nu))
    where = sample_points(mesh.element, "centroid")
    found = chunk.finite(chunk.at(where.gradients[0], where.functions[0]))
    stretches = np.linalg.svd(F[:2, :2], compute_uv=False)
    expected = np.exp(-nu / (1 - nu) * np.log(stretches).sum())
    np.testing.assert_allclose(found[2, 2] + 1, expected, rtol=1e-13)
    np.testing.assert_allclose(found[:2, :2, 0] + np.eye(2), F[:2, :2], atol=1e-13)


@pytest.mark.derived("in-plane strain and rotation do not depend on what is stated of the third direction")
def test_positive_rotation_is_anticlockwise_in_each_plane() -> None:
    for plane, (a, b) in PLANES.items():
        mesh = plane_mesh("quad", plane)
        n = 3 - a - b
        theta = np.eye(3)[n] * 1e-3
        u = np.cross(theta, mesh.points)
        u[:, n] = 0
        H = (
            computed(mesh, u, PlaneOptions("strain"), "centroid")
            .arrays["displacement_gradient"]
            .reshape(-1, 3, 3)
        )
        np.testing.assert_allclose(kin.rotation_vector(H), np.broadcast_to(theta, (len(H), 3)), atol=1e-15)
        np.testing.assert_allclose(kin.strain(H), 0, atol=1e-15)
