"""Surfaces and lines in space: what their nodes tell, and how the rest of the gradient is completed."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import kinematics as kin
from unturn.elements import ELEMENTS, Element, element
from unturn.fields import compute_fields
from unturn.gradient import ElementChunk, NodalFields, displacement_gradient, sample_points
from unturn.model import build_model

# The normal keeps zero strain and takes the tilt of the surface: H n = -(grad_s u)^T n. Finite: F n is the unit
# normal of the deformed surface. Derived: with both, a rigid turn of the surface turns its normal alike.
pytestmark = pytest.mark.derived("completion of surface and line gradients as stated in this file")

SURFACES = {
    **{name: row for name, row in ELEMENTS.items() if row.dim == 2},
    "lagrange_triangle_3": element("VTK_LAGRANGE_TRIANGLE", 10),
    "lagrange_quadrilateral_4": element("VTK_LAGRANGE_QUADRILATERAL", 25),
}
LINES = {
    **{name: row for name, row in ELEMENTS.items() if row.dim == 1},
    "lagrange_curve_5": element("VTK_LAGRANGE_CURVE", 6),
}
POSES = [np.eye(3), np.eye(3) + axis_angle((0.48, 0.64, 0.6), 2.2)]
AXES = [(1, 0, 0), (0, 1, 0), (0, 0, 1), (0.48, 0.64, 0.6), (-0.6, 0, 0.8)]


def each(rows: dict[str, Element]) -> pytest.MarkDecorator:
    return pytest.mark.parametrize("row", list(rows.values()), ids=list(rows))


def inside(row: Element) -> np.ndarray:
    return np.random.default_rng(3).dirichlet(np.ones(row.n_corners), 4) @ row.shape.vertices


def surface_cell(row: Element, curved: bool, pose: np.ndarray) -> meshes.Mesh:
    mesh = meshes.distorted_cell(row)
    points = mesh.points.copy()
    if curved:
        points[:, 2] = 0.2 * points[:, 0] ** 2 + 0.15 * points[:, 0] * points[:, 1]
    return mesh._replace(points=points @ pose.T)


def line_cell(row: Element) -> meshes.Mesh:
    s = meshes.distorted_cell(row).points[:, :1]
    return meshes.Mesh(np.concatenate([s, 0.2 * s**2, 0.1 * s**3], axis=1), np.arange(row.n_nodes)[None], row)


def chunk(mesh: meshes.Mesh, u: np.ndarray) -> ElementChunk:
    return ElementChunk(NodalFields(mesh.points, u), mesh.cells, mesh.element, None)


def frames(mesh: meshes.Mesh, xi: np.ndarray) -> np.ndarray:
    """`(p, dim, 3)` tangents of the cell at reference points."""
    return mesh.element.shape_gradients(xi) @ mesh.points


def finite(mesh: meshes.Mesh, u: np.ndarray, xi: np.ndarray) -> np.ndarray:
    """`F` at reference points, `(p, 3, 3)`."""
    cells, where = chunk(mesh, u), sample_points(mesh.element, xi)
    found = [cells.finite(cells.at(g, f))[:, :, 0] for g, f in zip(where.gradients, where.functions)]
    return np.array(found) + np.eye(3)


@each(SURFACES)
@pytest.mark.parametrize("curved", [False, True], ids=["flat", "curved"])
@pytest.mark.parametrize("pose", POSES, ids=["in xy", "in space"])
def test_small_completion(row: Element, curved: bool, pose: np.ndarray) -> None:
    mesh, xi = surface_cell(row, curved, pose), inside(row)
    u = np.random.default_rng(2).normal(size=mesh.points.shape) * 1e-3
    found = displacement_gradient(mesh.points, mesh.cells, u, row.name, at=xi)[0]
    du = row.shape_gradients(xi) @ u  # along the two reference coordinates
    for H, (a, b), (ua, ub) in zip(found, frames(mesh, xi), du):
        n = np.cross(a, b) / np.linalg.norm(np.cross(a, b))
        np.testing.assert_allclose(H @ a, ua, atol=1e-15 * row.n_nodes)  # what the nodes tell is kept
        np.testing.assert_allclose(H @ b, ub, atol=1e-15 * row.n_nodes)
        surface = H @ (np.eye(3) - np.outer(n, n))
        np.testing.assert_allclose(H @ n, -surface.T @ n, atol=1e-15 * row.n_nodes)
        np.testing.assert_allclose(kin.strain(H) @ n, 0, atol=1e-15 * row.n_nodes)


@each(SURFACES)
@pytest.mark.parametrize("curved", [False, True], ids=["flat", "curved"])
def test_small_rotation_about_any_axis(row: Element, curved: bool) -> None:
    mesh = surface_cell(row, curved, POSES[1])
    for axis, at in product(AXES, ("centroid", "mean", inside(row))):
        theta = 0.02 * np.array(axis)
        found = displacement_gradient(mesh.points, mesh.cells, np.cross(theta, mesh.points), row.name, at=at)
        for H in found.reshape(-1, 3, 3):
            np.testing.assert_allclose(kin.strain(H), 0, atol=2e-15)
            np.testing.assert_allclose(kin.rotation_vector(H), theta, atol=2e-14)


def test_a_flat_sheet_that_tilts_turns_its_normal() -> None:
    mesh = surface_cell(ELEMENTS["quad"], False, POSES[0])
    u = np.zeros((4, 3))
    u[:, 2] = 1e-3 * mesh.points[:, 0]  # the sheet rises along x: a turn about -y
    H = displacement_gradient(mesh.points, mesh.cells, u, "quad")[0]
    np.testing.assert_allclose(kin.rotation_vector(H), [0, -1e-3, 0], atol=1e-17)
    np.testing.assert_allclose(kin.strain(H), 0, atol=1e-17)
    np.testing.assert_allclose(H @ [0, 0, 1], [-1e-3, 0, 0], atol=1e-17)


@each(SURFACES)
@pytest.mark.parametrize("curved", [False, True], ids=["flat", "curved"])
def test_a_rigid_turn_of_a_surface_has_no_stretch(row: Element, curved: bool) -> None:
    mesh = surface_cell(row, curved, POSES[1])
    for axis, degrees in product(AXES, (90, 180, 137)):
        turn = axis_angle(axis, np.radians(degrees))
        for F in finite(mesh, mesh.points @ turn.T + 3.0, inside(row)):
            np.testing.assert_allclose(F, np.eye(3) + turn, atol=1e-12)
            np.testing.assert_allclose(F.T @ F, np.eye(3), atol=1e-12)


def test_a_stretched_and_turned_sheet_keeps_its_stretch_and_unit_thickness() -> None:
    mesh, xi = surface_cell(ELEMENTS["quad9"], False, POSES[0]), inside(ELEMENTS["quad9"])
    turn = np.eye(3) + axis_angle((0.48, 0.64, 0.6), 2.0)
    U = np.array([[1.2, 0.1, 0], [0.1, 0.9, 0], [0, 0, 1.0]])
    for F in finite(mesh, mesh.points @ (turn @ U - np.eye(3)).T, xi):
        np.testing.assert_allclose(F, turn @ U, atol=1e-12)


@each(LINES)
def test_small_rotation_of_a_line_without_the_twist(row: Element) -> None:
    mesh, xi = line_cell(row), inside(row)
    for axis in AXES:
        theta = 0.02 * np.array(axis)
        u = np.cross(theta, mesh.points)
        for H, (a,) in zip(
            displacement_gradient(mesh.points, mesh.cells, u, row.name, at=xi)[0], frames(mesh, xi)
        ):
            t = a / np.linalg.norm(a)
            np.testing.assert_allclose(kin.strain(H), 0, atol=1e-15)
            np.testing.assert_allclose(kin.rotation_vector(H), theta - (theta @ t) * t, atol=1e-13)


@each(LINES)
@pytest.mark.parametrize("degrees", [30, 90, 170])
def test_a_line_is_turned_by_the_smallest_rotation(row: Element, degrees: float) -> None:
    mesh, xi, stretch = line_cell(row), inside(row), 1.25
    for axis in AXES:
        turn = np.eye(3) + axis_angle(axis, np.radians(degrees))
        u = stretch * mesh.points @ turn.T - mesh.points
        for F, (a,) in zip(finite(mesh, u, xi), frames(mesh, xi)):
            t = a / np.linalg.norm(a)
            new = turn @ t
            np.testing.assert_allclose(F @ t, stretch * new, atol=1e-13)
            Q = F @ (np.eye(3) + (1 / stretch - 1) * np.outer(t, t))  # F = Q (I + (stretch - 1) t t^T)
            np.testing.assert_allclose(Q.T @ Q, np.eye(3), atol=1e-12)
            assert np.linalg.det(Q) == pytest.approx(1, rel=1e-12)
            # the smallest rotation: no part of its axis along the tangent, its angle that between the tangents
            assert np.trace(Q) == pytest.approx(1 + 2 * t @ new, abs=1e-12)
            across = np.array([Q[2, 1] - Q[1, 2], Q[0, 2] - Q[2, 0], Q[1, 0] - Q[0, 1]])
            np.testing.assert_allclose(across, 2 * np.cross(t, new), atol=1e-12)


def test_twist_of_a_line_is_not_seen() -> None:
    mesh = line_cell(ELEMENTS["line"])
    a = np.ptp(mesh.points, axis=0)
    axis = (mesh.points[1] - mesh.points[0]) / np.linalg.norm(a)
    u = (mesh.points - mesh.points[0]) @ axis_angle(axis, 1.0).T
    np.testing.assert_allclose(finite(mesh, u, np.zeros((1, 1)))[0], np.eye(3), atol=1e-14)


def test_a_line_turned_end_for_end_has_no_single_smallest_rotation_but_a_strain() -> None:
    mesh = meshes.Mesh(np.array([[0.0, 0, 0], [1, 0, 0]]), np.array([[0, 1]]), ELEMENTS["line"])
    F = finite(mesh, np.array([[0.0, 0, 0], [-2.5, 0, 0]]), np.zeros((1, 1)))[0]
    np.testing.assert_allclose(F.T @ F, np.diag([1.5**2, 1, 1]), atol=1e-15)
    np.testing.assert_allclose(F[0], [-1.5, 0, 0])
    assert np.linalg.det(F) == pytest.approx(1.5)


@each({**SURFACES, **LINES})
def test_far_origin_keeps_the_digits(row: Element) -> None:
    mesh = surface_cell(row, True, POSES[0]) if row.dim == 2 else line_cell(row)
    points = np.round(mesh.points * 2**20) / 2**20
    u = np.round(np.sin(points) * 1e-3 * 2**30) / 2**30
    near = displacement_gradient(points, mesh.cells, u, row.name, at="mean")
    origin, shift = np.array([5e5, -5e5, 5e5]), np.array([1024.0, 0, -512.0])
    far = displacement_gradient(points + origin, mesh.cells, u + shift, row.name, at="mean")
    np.testing.assert_allclose(far, near, atol=1e-16)


@each(SURFACES)
def test_the_mean_of_a_curved_surface_that_turns_has_no_stretch(row: Element) -> None:
    mesh = surface_cell(row, True, POSES[1])
    turn = axis_angle((0.48, 0.64, 0.6), np.radians(80))
    fields = compute_fields(build_model(mesh.result(u=mesh.points @ turn.T)), at="mean", diagnose=True)
    assert fields.diagnostics is not None
    assert fields.diagnostics.stretch[0] < 1e-12
    assert np.degrees(fields.diagnostics.angle[0]) == pytest.approx(80, rel=1e-9)
