"""Rigid motion: fitted over volumes, taken out exactly, unwrapped over a series, stored."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from documents import run
from strategies import axis_angle
from unturn import InputError, UsageError, io, strain
from unturn.elements import ELEMENTS
from unturn.model import Model, PlaneOptions, build_model
from unturn.options import StrainOptions
from unturn.pipeline import compute
from unturn.result import CellBlock, Result
from unturn.rigid import Axis, Fit, RigidMotion, fit_rigid_motion, take_out, turn_of, unwrapped

OBLIQUE = np.array([0.36, 0.48, 0.8])
SHIFT = np.array([1.0, -2.0, 0.5])
TILT = axis_angle([0.6, 0.0, 0.8], 0.4) + np.eye(3)


def model_of(mesh: meshes.Mesh, u: Any, **options: Any) -> Model:
    return build_model(mesh.result(u=np.asarray(u)), **options)


def fitted(mesh: meshes.Mesh, u: Any, fit: Fit, axis: Axis | None = None, **options: Any) -> RigidMotion:
    return fit_rigid_motion(model_of(mesh, u, **options), np.arange(len(mesh.cells)), fit, axis)


def body(kind: str) -> meshes.Mesh:
    mesh = meshes.curved(meshes.patch(ELEMENTS[kind]))
    return mesh._replace(points=mesh.points @ TILT.T) if mesh.element.dim == 2 else mesh


def block(
    n: tuple[int, int, int], grade: float = 1.0, size: tuple[float, float, float] = (1, 1, 1)
) -> meshes.Mesh:
    """Bricks of 27 nodes on a box; `grade` above one crowds them towards x = 0."""
    lines = [np.linspace(0, 1, k + 1) ** (grade if i == 0 else 1) for i, k in enumerate(n)]
    x, y, z = (a.ravel() for a in np.meshgrid(*lines, indexing="ij"))
    number = np.arange(len(x)).reshape(n[0] + 1, n[1] + 1, n[2] + 1)
    corners = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)]
    cells = [number[i : i + n[0], j : j + n[1], k : k + n[2]].ravel() for i, j, k in corners]
    points = np.stack([x, y, z], axis=1) * size
    return meshes.straight(points, np.stack(cells, axis=1), ELEMENTS["hexahedron27"])


@pytest.mark.derived("a motion that is rigid is found whole: u = (R - I) X + t, u = theta x X + t")
@pytest.mark.parametrize("degrees", [1e-9, 1e-6, 1e-3, 0.06, 5.0, 90.0, 179.99, 180.0])
@pytest.mark.parametrize("kind", ["hexahedron20", "tetra", "pyramid", "quad8", "triangle"])
def test_a_rigid_motion_is_found(kind: str, degrees: float) -> None:
    mesh = body(kind)
    angle = np.radians(degrees)
    rounding = 1e-14 / float(np.ptp(mesh.points, axis=0).max())
    for fit, u in (
        ("finite", mesh.points @ axis_angle(OBLIQUE, angle).T),
        ("linearised", np.cross(angle * OBLIQUE, mesh.points)),
    ):
        found = fitted(mesh, u + SHIFT, fit)  # type: ignore[arg-type]
        np.testing.assert_allclose(found.rotation, angle * OBLIQUE, rtol=0, atol=rounding)
        turn = axis_angle(OBLIQUE, angle) if fit == "finite" else None
        moved = np.cross(angle * OBLIQUE, found.center) if turn is None else turn @ found.center
        np.testing.assert_allclose(found.translation, SHIFT + moved, atol=1e-14)
        assert found.residual < 1e-14
    # without translation to blur it, a small turn keeps its digits
    small = fitted(mesh, mesh.points @ axis_angle(OBLIQUE, angle).T, "finite")
    np.testing.assert_allclose(small.rotation, angle * OBLIQUE, rtol=0, atol=1e-13 * angle)


@pytest.mark.derived("a straight line does not tell its turn about itself: the smallest turn is taken")
@pytest.mark.parametrize("degrees", [1e-6, 5.0, 90.0, 120.0, 179.99, 180.0])
def test_a_straight_line(degrees: float) -> None:
    mesh = meshes.patch(ELEMENTS["line3"])
    t = mesh.points[-1] / np.linalg.norm(mesh.points[-1])
    across = np.cross(t, OBLIQUE)
    axis = across / np.linalg.norm(across)
    u = mesh.points @ axis_angle(axis, np.radians(degrees)).T
    found = fitted(mesh, u, "finite")
    assert found.residual < 1e-14
    assert np.linalg.norm(found.rotation) == pytest.approx(np.radians(degrees), abs=1e-13)
    if degrees < 179:
        np.testing.assert_allclose(found.rotation, np.radians(degrees) * axis, atol=1e-13)
    np.testing.assert_allclose(
        fitted(mesh, np.cross(1e-3 * axis, mesh.points), "linearised").rotation, 1e-3 * axis, atol=1e-15
    )


@pytest.mark.derived("a flat patch in space: the turn out of its plane is found too")
@pytest.mark.parametrize("degrees", [1e-6, 60.0, 179.0])
def test_a_flat_surface_in_space(degrees: float) -> None:
    mesh = meshes.patch(ELEMENTS["quad"])
    u = mesh.points @ axis_angle([0.8, 0.6, 0], np.radians(degrees)).T
    found = fitted(mesh, u, "finite")
    np.testing.assert_allclose(found.rotation, np.radians(degrees) * np.array([0.8, 0.6, 0]), atol=1e-13)
    assert found.residual < 1e-15


@pytest.mark.derived("in the plane the only turn is about the normal; the strain assumption changes nothing")
@pytest.mark.parametrize("normal", [0, 1, 2])
@pytest.mark.parametrize("degrees", [1e-6, 5.0, 120.0, 180.0])
def test_plane_meshes(normal: int, degrees: float) -> None:
    mesh = meshes.patch(ELEMENTS["quad8"])
    mesh = mesh._replace(points=np.roll(mesh.points, normal + 1, axis=1))
    n = np.eye(3)[normal]
    angle = np.radians(degrees)
    u = mesh.points @ axis_angle(n, angle).T + 0.1 * (1 - n)
    for plane in (None, PlaneOptions("stress", 0.3)):
        found = fitted(mesh, u, "finite", plane=plane)
        np.testing.assert_allclose(found.rotation, angle * n, atol=1e-13)
        assert found.residual < 1e-15
    found = fitted(mesh, np.cross(angle * n, mesh.points), "linearised")
    np.testing.assert_allclose(found.rotation, angle * n, atol=1e-13)


@pytest.mark.derived(
    "axisymmetric: along the axis is the only rigid motion; weight 2 pi r; mean of z^2 over a disc"
)
def test_axisymmetric_meshes_move_along_their_axis() -> None:
    mesh = meshes.patch(ELEMENTS["quad9"])
    u = np.stack([0.1 * mesh.points[:, 0], mesh.points[:, 0] ** 2, 0 * mesh.points[:, 0]], axis=1)
    for fit in ("finite", "linearised"):
        found = fitted(mesh, u, fit, plane=PlaneOptions("axisymmetric"))  # type: ignore[arg-type]
        # mean of r^2 over a disc of radius a: a^2/2
        np.testing.assert_allclose(found.translation, [0, 0.24**2 / 2, 0], atol=1e-15)
        assert not found.rotation.any()


@pytest.mark.derived(
    "u_x = y^2 on the unit cube: theta_z = -(1/12)/(1/6); mean of y^2 = 1/3; what is left by hand"
)
def test_the_fit_is_integrated() -> None:
    even, graded = block((3, 2, 2)), block((4, 1, 2), grade=4.0)
    assert np.sort(np.diff(np.unique(graded.points[:, 0])))[0] < 2e-3  # nodes crowd at one side
    for mesh in (even, graded):
        x, y, z = mesh.points.T
        found = fitted(mesh, np.stack([y**2, 0 * y, 0 * y], axis=1), "linearised")
        np.testing.assert_allclose(found.center, 0.5, atol=1e-14)
        np.testing.assert_allclose(found.translation, [1 / 3, 0, 0], atol=1e-14)
        np.testing.assert_allclose(found.rotation, [0, 0, -0.5], atol=1e-13)
        # left: (y'^2 - 1/12 + y'/2, -x'/2) with the turn (y'/2, -x'/2) taken: 1/80 - 1/144 + 1/48 + 1/48
        assert found.residual == pytest.approx(np.sqrt(1 / 80 - 1 / 144 + 1 / 24), rel=1e-12)
        del x, z


@pytest.mark.derived("the same field on two meshes of the same body: the same best rotation")
def test_a_graded_mesh_gives_the_same_rotation() -> None:
    found = []
    for mesh in (block((3, 2, 2)), block((4, 1, 2), grade=4.0)):
        x, y, z = mesh.points.T
        bent = np.stack([0.3 * y**2 - 0.2 * x * z, 0.4 * x**2 + 0.1 * z, 0.3 * x * y], axis=1)
        turned = mesh.points + bent
        found.append(fitted(mesh, turned @ (np.eye(3) + axis_angle(OBLIQUE, 1.1)).T - mesh.points, "finite"))
    np.testing.assert_allclose(found[0].rotation, found[1].rotation, atol=1e-13)
    assert found[0].residual == pytest.approx(found[1].residual, rel=1e-12)
    lumped = [np.mean(m.points, axis=0) for m in (block((3, 2, 2)), block((4, 1, 2), grade=4.0))]
    assert abs(lumped[0][0] - lumped[1][0]) > 0.1  # the nodes would say otherwise


@pytest.mark.source("scipy.spatial.transform.Rotation.align_vectors: the best rotation of weighted points")
def test_the_best_rotation_against_scipy() -> None:
    from scipy.spatial.transform import Rotation

    mesh = block((3, 2, 1), size=(2.0, 1.0, 0.3))
    rng = np.random.default_rng(3)
    A = rng.normal(size=(3, 3)) * 0.3
    u = mesh.points @ (axis_angle(OBLIQUE, 2.0) + A).T
    # a homogeneous field: its moments are those of the box, the corners of a box of the same second moments
    corners = np.array([(i, j, k) for i in (-1, 1) for j in (-1, 1) for k in (-1, 1)]) * [2.0, 1.0, 0.3]
    moved = corners @ (np.eye(3) + axis_angle(OBLIQUE, 2.0) + A).T
    expected = Rotation.align_vectors(moved, corners)[0]
    found = fitted(mesh, u, "finite")
    np.testing.assert_allclose(np.eye(3) + turn_of(found.rotation), expected.as_matrix(), atol=1e-12)


@pytest.mark.derived("a known axis: only the angle about it is fitted; a motion about it is found whole")
@pytest.mark.parametrize("degrees", [1e-6, 5.0, 120.0, 179.0])
def test_a_known_axis(degrees: float) -> None:
    mesh = body("hexahedron20")
    angle, point = np.radians(degrees), np.array([10.0, 0, -3])
    axis = Axis(point, 7.0 * OBLIQUE)
    arm = mesh.points - point
    for fit, u in (
        ("finite", arm @ axis_angle(OBLIQUE, angle).T),
        ("linearised", np.cross(angle * OBLIQUE, arm)),
    ):
        found = fitted(mesh, u, fit, axis)  # type: ignore[arg-type]
        np.testing.assert_allclose(found.rotation, angle * OBLIQUE, atol=1e-14)
        assert found.residual < 5e-14
        off = fitted(mesh, u + 0.1 * OBLIQUE, fit, axis)  # type: ignore[arg-type]
        assert off.residual == pytest.approx(0.1, rel=1e-9)  # along the axis nothing is fitted


def test_an_axis_that_does_not_fit_the_mesh_is_refused() -> None:
    flat = meshes.patch(ELEMENTS["quad"])
    u = flat.points * 0.01
    with pytest.raises(UsageError, match="a plane mesh turns about z only"):
        fitted(flat, u, "finite", Axis(np.zeros(3), np.array([0.0, 1, 0])))
    with pytest.raises(UsageError, match="axisymmetric mesh cannot turn"):
        fitted(
            flat, u, "finite", Axis(np.zeros(3), np.array([0, 0, 1.0])), plane=PlaneOptions("axisymmetric")
        )
    with pytest.raises(UsageError, match="no length"):
        fitted(flat, u, "finite", Axis(np.zeros(3), np.zeros(3)))
    line = meshes.patch(ELEMENTS["line"])
    with pytest.raises(UsageError, match="lies on the axis"):
        fitted(line, line.points, "finite", Axis(np.zeros(3), np.array([0.9, 0.4, 0.2])))


def test_nothing_to_fit_over_is_refused() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    with pytest.raises(InputError, match="no rigid motion can be fitted"):
        fitted(mesh, mesh.points * np.nan, "finite")


def test_nodes_without_a_displacement_spoil_their_own_cells_only() -> None:
    mesh = body("tetra")
    u = mesh.points @ axis_angle(OBLIQUE, 0.5).T
    u[3] = np.nan
    np.testing.assert_allclose(fitted(mesh, u, "finite").rotation, 0.5 * OBLIQUE, atol=1e-13)


def two_bodies(kind: str = "hexahedron") -> tuple[np.ndarray, CellBlock, np.ndarray]:
    """Points, cells and part number of two separate patches, the second five to the right."""
    mesh = meshes.patch(ELEMENTS[kind])
    n = len(mesh.points)
    cells = np.concatenate([mesh.cells, mesh.cells + n])
    points = np.concatenate([mesh.points, mesh.points + np.array([5.0, 0, 0])])
    part = np.repeat([1, 2], len(mesh.cells)).astype(np.int32)
    return points, CellBlock(kind, cells, np.arange(len(cells))), part


SMALL = np.array([[1e-3, 4e-4, 0], [4e-4, -3e-4, 2e-4], [0, 2e-4, 5e-4]])


def two_turned(linear: bool = False) -> Result:
    """Both strained by SMALL; the first then turned by 0.2 about z, the second by 0.5 about x."""
    points, cells, part = two_bodies()
    turns = [0.2 * np.array([0, 0, 1.0]), 0.5 * np.array([1.0, 0, 0])]
    u = np.empty_like(points)
    for half, theta in zip(np.split(np.arange(len(points)), 2), turns):
        X = points[half]
        strained = X @ SMALL.T
        if linear:
            u[half] = strained + np.cross(theta, X)
        else:
            u[half] = strained + (X + strained) @ turn_of(theta).T
    groups = {"foot": np.flatnonzero(part == 1), "arm": np.flatnonzero(part == 2)}
    return Result(points, (cells,), {"u": u}, {"part": part}, groups=groups)


SIX = SMALL[[0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]]


@pytest.mark.derived(
    "u = E X + theta x X: the linear result without theta x X is E, with no rotation and no error"
)
@pytest.mark.parametrize("how", ["bodies", "regions"])
def test_removal_from_a_linear_result_leaves_the_strain(how: str) -> None:
    result = two_turned(linear=True)
    out = strain(
        result, measures=["strain", "rotation", "small_strain_error"], solve="linear", remove_rigid=how
    )
    np.testing.assert_allclose(out.cell_data["strain"], np.tile(SIX, (14, 1)), atol=1e-15)
    # the best theta of E X is zero for a cube, as far as the rule integrates products on distorted bricks
    np.testing.assert_allclose(out.cell_data["rotation"], 0, atol=1e-6)
    # E is not turned: only H^T H of E itself is left
    assert out.cell_data["small_strain_error"].max() < 1e-9
    assert out.field_data["rigid_rotation"].shape == (2, 3)
    np.testing.assert_allclose(np.abs(out.field_data["rigid_rotation"]).max(axis=1), [0.2, 0.5], atol=1e-6)


@pytest.mark.derived("theta x X alone: nothing is left")
def test_removal_of_theta_cross_x_leaves_zero() -> None:
    mesh = body("tetra10")
    result = mesh.result(u=np.cross([0.3, -0.2, 0.4], mesh.points) + SHIFT)
    out = strain(result, measures=["all"], solve="linear", remove_rigid="whole")
    for name in (
        "strain",
        "rotation",
        "equivalent_strain",
        "principal_strain",
        "small_strain_error",
        "displacement_gradient",
    ):
        assert np.abs(out.cell_data[name]).max() < 2e-14, name


@pytest.mark.derived("x = R (X + E X): without R the small strain is E again, as Biot's was before")
@pytest.mark.parametrize("how", ["bodies", "regions"])
@pytest.mark.parametrize("solve", ["nonlinear", "unknown"])
def test_removal_from_a_nonlinear_result_leaves_the_strain(how: str, solve: Any) -> None:
    result = two_turned()
    before = strain(result, measures=["strain_biot"], solve=solve).cell_data["strain_biot"]
    out = strain(
        result,
        measures=["strain", "strain_biot", "finite_rotation", "rotation"],
        solve=solve,
        remove_rigid=how,
    ).cell_data
    np.testing.assert_allclose(before, np.tile(SIX, (14, 1)), atol=1e-14)
    np.testing.assert_allclose(
        out["strain"], np.tile(SIX, (14, 1)), atol=1e-8
    )  # the best fit of a cube: R to E^2
    np.testing.assert_allclose(out["strain_biot"], before, atol=1e-14)
    np.testing.assert_allclose(out["finite_rotation"], 0, atol=1e-3)


@pytest.mark.derived("the foot's turn taken from the arm: the arm keeps what it turns more than the foot")
def test_the_foot_carries_the_arm() -> None:
    result = two_turned()
    options: dict[str, Any] = {"measures": ["finite_rotation"], "solve": "nonlinear", "remove_rigid": "foot"}
    out = strain(result, **options, rigid_to="arm")
    turn = (np.eye(3) + turn_of(np.array([0, 0, 0.2]))).T @ (np.eye(3) + turn_of(np.array([0.5, 0, 0])))
    from scipy.spatial.transform import Rotation

    expected = Rotation.from_matrix(turn).as_rotvec()
    np.testing.assert_allclose(out.cell_data["finite_rotation"][7:], np.tile(expected, (7, 1)), atol=1e-4)
    np.testing.assert_allclose(out.cell_data["finite_rotation"][:7], np.tile([0, 0, 0.2], (7, 1)), atol=1e-14)
    whole = strain(result, **options, rigid_to="whole").cell_data["finite_rotation"]
    np.testing.assert_allclose(whole[7:], out.cell_data["finite_rotation"][7:], atol=1e-14)
    np.testing.assert_allclose(whole[:7], 0, atol=1e-4)
    alone = strain(result, **options).cell_data["finite_rotation"]
    np.testing.assert_allclose(alone[7:], np.tile([0.5, 0, 0], (7, 1)), atol=1e-14)


@pytest.mark.derived(
    "unknown solve: both fits, the one that leaves less is taken, the other's residual is told"
)
def test_unknown_solve_takes_what_leaves_less() -> None:
    mesh = body("hexahedron")
    cells = np.arange(len(mesh.cells))
    theta = np.array([0, 0, 0.3])
    parts = [("whole", cells, "whole", cells)]
    for u, kind in ((np.cross(theta, mesh.points), "linearised"), (mesh.points @ turn_of(theta).T, "finite")):
        _, (removal,) = take_out(model_of(mesh, u), parts, "unknown")
        assert removal.motion.fit == kind
        assert removal.motion.residual < 1e-14
        assert removal.other is not None
        assert removal.other.residual > 1e-3
        for solve in ("linear", "nonlinear"):
            _, (known,) = take_out(model_of(mesh, u), parts, solve)  # type: ignore[arg-type]
            assert known.other is None
    # nothing moves, or a translation: both are equal, and the rotation is taken, so that a series stays of one kind
    for u in (np.zeros_like(mesh.points), np.ones_like(mesh.points)):
        _, (removal,) = take_out(model_of(mesh, u), parts, "unknown")
        assert removal.motion.fit == "finite"


@pytest.mark.derived("ten steps of 50 degrees, a whole turn among them: the vector goes on to 500 degrees")
@pytest.mark.parametrize("axis", [(0, 0, 1), (0, 0, -1), (0.36, -0.48, 0.8)])
@pytest.mark.parametrize("step", [50.0, 90.0, 60.0, -50.0])
def test_unwrapping(axis: Any, step: float) -> None:
    mesh = body("hexahedron")
    n = np.asarray(axis, dtype=float)
    previous: tuple[RigidMotion, ...] = ()
    options = StrainOptions(remove_rigid="whole")
    for k in range(11):
        u = mesh.points @ axis_angle(n, np.radians(step * k)).T
        computed = compute(mesh.result(u=u), options, previous=previous)
        previous = tuple(r.motion for r in computed.removals)
        np.testing.assert_allclose(previous[0].rotation, np.radians(step * k) * n, atol=1e-12)
        assert previous[0].residual < 1e-14
        assert np.abs(computed.fields.arrays["strain"]).max() < 1e-13


def test_unwrapping_from_rest_and_through_whole_turns() -> None:
    z = np.array([0, 0, 1.0])
    np.testing.assert_allclose(unwrapped(0.3 * z, np.zeros(3)), 0.3 * z)
    np.testing.assert_allclose(unwrapped(0.0 * z, 6.2 * z), 2 * np.pi * z)
    np.testing.assert_allclose(unwrapped(-0.1 * z, 6.2 * z), (2 * np.pi - 0.1) * z)
    np.testing.assert_allclose(unwrapped(0.1 * z, -6.2 * z), (0.1 - 2 * np.pi) * z)
    np.testing.assert_allclose(unwrapped(np.pi * z, -3.1 * z), -np.pi * z)


@pytest.mark.derived(
    "theta of a linear result has no whole turns: 4 rad stays 4 rad, and after it 0.1 rad stays 0.1"
)
def test_a_linear_series_is_not_unwrapped() -> None:
    mesh = body("hexahedron")
    options = StrainOptions(remove_rigid="whole", solve="linear")
    previous: tuple[RigidMotion, ...] = ()
    for size in (4.0, 0.1, 7.0):
        computed = compute(mesh.result(u=np.cross([0, 0, size], mesh.points)), options, previous=previous)
        previous = tuple(r.motion for r in computed.removals)
        np.testing.assert_allclose(previous[0].rotation, [0, 0, size], atol=1e-12)


LEVER = Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf"


@pytest.mark.derived("the sample's shaft makes a quarter turn about z in six equal steps; the hub follows it")
def test_the_lever_series(tmp_path: Path) -> None:
    target = tmp_path / "lever.xdmf"
    status, said = run(
        ["strain", str(LEVER), "-o", str(target), "--step", "all", "--solve", "nonlinear", "--remove-rigid", "part=2",
         "--rigid-to", "whole"]
    )  # fmt: skip
    assert status == 0, said
    assert "rigid motion taken out of whole (as fitted over part=2)" in said
    assert "where it was taken out, strain is in the axes of the undeformed part" in said
    for k in range(7):
        found = io.read(target, k)
        np.testing.assert_allclose(
            np.degrees(found.field_data["rigid_rotation"]), [[0, 0, 15.0 * k]], atol=0.6
        )
        assert found.field_data["rigid_center"].shape == found.field_data["rigid_translation"].shape == (1, 3)


@pytest.mark.parametrize("suffix", [".vtu", ".vtk", ".xdmf", ".vtkhdf"])
def test_the_motion_is_stored_and_read_back(tmp_path: Path, suffix: str) -> None:
    result = two_turned()
    out = strain(result, solve="nonlinear", remove_rigid="bodies", prefix="r_")
    io.write(out, tmp_path / f"out{suffix}")
    found = io.read(tmp_path / f"out{suffix}").field_data
    for name in ("r_rigid_translation", "r_rigid_rotation", "r_rigid_center"):
        np.testing.assert_array_equal(found[name], out.field_data[name])
    # what is stored takes the motion out: x = c + t + R (X - c)
    X = result.points[: len(result.points) // 2]
    c, t, theta = (found[f"r_rigid_{n}"][0] for n in ("center", "translation", "rotation"))
    left = X + result.point_data["u"][: len(X)] - (c + t + (X - c) @ (np.eye(3) + turn_of(theta)).T)
    assert np.abs(left).max() < 2e-3  # the strain of SMALL alone


def test_removal_changes_no_array_of_the_file() -> None:
    result = two_turned()
    before = result.point_data["u"].copy()
    out = strain(result, solve="nonlinear", remove_rigid="bodies")
    np.testing.assert_array_equal(out.point_data["u"], before)
    np.testing.assert_array_equal(out.points, result.points)


@pytest.mark.derived("taken out far from the origin: digits are lost to storage alone")
def test_removal_far_from_the_origin() -> None:
    mesh = body("hexahedron")
    points = np.round(mesh.points * 2**20) / 2**20 + np.array([5e5, -5e5, 2.5e5])
    u = (points - points[0]) @ axis_angle(OBLIQUE, 1.0).T
    result = Result(points, (CellBlock("hexahedron", mesh.cells, np.arange(7)),), {"u": u})
    out = strain(result, measures=["strain"], solve="nonlinear", remove_rigid="whole")
    assert np.abs(out.cell_data["strain"]).max() < 1e-14
