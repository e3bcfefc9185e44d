"""Large rotations on whole bars: a closed form under refinement, and hyperelastic solves of another library."""

from __future__ import annotations

from functools import cache
from typing import Any

import felupe as fem
import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import CellBlock, Result, strain
from unturn.elements import ELEMENTS
from unturn.fields import LOCATIONS

LENGTH, HEIGHT, WIDTH = 4.0, 1.0, 0.5


def bar(kind: str, n: int) -> meshes.Mesh:
    """A straight bar of `4n x n x n/2` bricks of this kind, along x, its axis on y = 0."""
    counts = (4 * n, n, max(1, n // 2))
    lines = [np.linspace(0, 1, k + 1) for k in counts]
    x, y, z = (a.ravel() for a in np.meshgrid(*lines, indexing="ij"))
    number = np.arange(len(x)).reshape([k + 1 for k in counts])
    corners = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)]
    cells = [number[tuple(slice(s, s + k) for s, k in zip(c, counts))].ravel() for c in corners]
    points = np.stack([x * LENGTH, (y - 0.5) * HEIGHT, z * WIDTH], axis=1)
    return meshes.straight(points, np.stack(cells, axis=1), ELEMENTS[kind])


def centroids(mesh: meshes.Mesh) -> np.ndarray:
    N = mesh.element.shape_functions(mesh.element.centroid[None])[0]
    found: np.ndarray = np.einsum("a,cax->cx", N, mesh.points[mesh.cells])
    return found


def bent(points: np.ndarray, total: float) -> np.ndarray:
    """Return the displacement of the bar bent into an arc of this angle: x = (R - Y) sin(X/R), y = R - (R - Y) cos(X/R)."""
    radius = LENGTH / total
    X, Y, Z = points.T
    moved = np.stack(
        [(radius - Y) * np.sin(X / radius), radius - (radius - Y) * np.cos(X / radius), Z], axis=1
    )
    u: np.ndarray = moved - points
    return u


@pytest.mark.derived(
    "x = (R - Y) sin(X/R), y = R - (R - Y) cos(X/R): U = diag(1 - Y/R, 1, 1), R a turn by X/R about z; "
    "centroid gradients of regular bricks err by the square of their size"
)
@pytest.mark.parametrize("degrees", [90.0, 180.0])
@pytest.mark.parametrize("kind", ["hexahedron", "hexahedron20"])
def test_a_bar_bent_into_an_arc(kind: str, degrees: float) -> None:
    total = np.radians(degrees)
    names = [
        "strain_green_lagrange",
        "strain_hencky",
        "strain_almansi",
        "finite_rotation",
        "small_strain_error",
    ]
    errors = []
    for n in (2, 4, 8):
        mesh = bar(kind, n)
        found = strain(mesh.result(u=bent(mesh.points, total)), measures=names).cell_data
        X, Y, _ = centroids(mesh).T
        stretch = 1 - Y * total / LENGTH
        angle = X * total / LENGTH
        expected = {name: np.zeros((len(X), 6)) for name in names[:3]}
        expected["strain_green_lagrange"][:, 0] = (stretch**2 - 1) / 2
        expected["strain_hencky"][:, 0] = np.log(stretch)
        along = (1 - stretch**-2) / 2
        c, s = np.cos(angle), np.sin(angle)
        expected["strain_almansi"][:, [0, 1, 3]] = np.stack(
            [along * c * c, along * s * s, along * c * s], axis=1
        )
        turned = np.stack([0 * angle, 0 * angle, angle], axis=1)
        errors.append(
            [float(np.sqrt(np.mean((found[name] - expected[name]) ** 2))) for name in names[:3]]
            + [np.abs(found["finite_rotation"] - turned).max()]
        )
    coarse, middle, fine = np.array(errors)
    # second order: a chord over an element of angle a is shorter than its arc by a^2/24
    assert (coarse[:3] < (total / 8) ** 2 / 4).all()
    for rough, smooth in ((coarse, middle), (middle, fine)):
        ratios = rough[:3] / smooth[:3]
        assert (ratios > 3.5).all(), ratios
    assert coarse[3] < 1e-14  # by symmetry the turn at a centroid is right on every mesh


@pytest.mark.derived(
    "the same bar: the small strain is wrong by its turning, the finite ones by the mesh alone"
)
def test_the_small_strain_of_the_bent_bar_is_wrong() -> None:
    mesh = bar("hexahedron20", 2)
    found = strain(
        mesh.result(u=bent(mesh.points, np.pi / 2)), measures=["strain", "strain_biot", "small_strain_error"]
    ).cell_data
    X, Y, _ = centroids(mesh).T
    end = np.argmax(X)
    stretch, angle = 1 - Y * np.pi / 2 / LENGTH, X * np.pi / 2 / LENGTH
    e_xx = stretch * np.cos(angle) - 1
    np.testing.assert_allclose(found["strain"][:, 0], e_xx, atol=0.02)
    assert abs(found["strain"][end, 0]) > 0.7
    np.testing.assert_allclose(found["strain_biot"][:, 0], stretch - 1, atol=0.02)


Solved = tuple[np.ndarray, np.ndarray, np.ndarray, fem.Region]


@cache
def solved(case: str, kind: str) -> Solved:
    """Return points, cells, displacement of a hyperelastic bar whose ends are turned, solved with felupe."""
    mesh = fem.Cube(a=(0, -0.5, -0.5), b=(4, 0.5, 0.5), n=(7, 3, 3))
    region: Any = fem.RegionHexahedron(mesh)
    if kind == "hexahedron20":
        raised = bar_of(mesh)
        mesh = fem.Mesh(raised.points, raised.cells, "hexahedron20")
        region = fem.RegionQuadraticHexahedron(mesh)
    field = fem.FieldContainer([fem.Field(region, dim=3)])
    body = fem.SolidBody(fem.NeoHookeCompressible(mu=1.0, lmbda=2.0), field)
    X = mesh.points
    left, right = X[:, 0] < 1e-9, X[:, 0] > 4 - 1e-9
    dof0, dof1 = fem.dof.partition(field, {"ends": fem.Boundary(field[0], mask=left | right)})
    steps = 9 if case == "bending" else 4
    for k in range(1, steps + 1):
        held = np.zeros_like(X)
        if case == "bending":  # the end follows an arc through 90 degrees
            angle = np.pi / 2 * k / steps
            turn = axis_angle((0, 0, 1), angle)
            middle = 4 / angle * np.array([np.sin(angle), 1 - np.cos(angle), 0]) - [4, 0, 0]
            held[right] = (X[right] - [4, 0, 0]) @ turn.T + middle
        else:  # twist by 60 degrees, pulled by a tenth
            turn = axis_angle((1, 0, 0), np.radians(60) * k / steps)
            held[right] = X[right] @ turn.T + np.array([0.4, 0, 0]) * k / steps
        fem.newtonraphson(items=[body], dof0=dof0, dof1=dof1, ext0=held.ravel()[dof0], tol=1e-8, verbose=0)
    return X, mesh.cells, field[0].values.copy(), type(region)


def bar_of(mesh: Any) -> meshes.Mesh:
    return meshes.straight(mesh.points, mesh.cells, ELEMENTS["hexahedron20"])


@pytest.mark.source("felupe: F and its strains at element centroids of its own hyperelastic solve")
@pytest.mark.parametrize("kind", ["hexahedron", "hexahedron20"])
@pytest.mark.parametrize("case", ["bending", "twist"])
def test_hyperelastic_bars_of_another_library(case: str, kind: str) -> None:
    points, cells, u, region = solved(case, kind)
    result = Result(points, (CellBlock(kind, cells, np.arange(len(cells))),), {"u": u})
    names = ["strain_green_lagrange", "strain_hencky", "strain_almansi", "finite_rotation", "det_f"]
    found = strain(result, solve="nonlinear", measures=names).cell_data
    rule = fem.GaussLegendre(order=0, dim=3)
    field = fem.FieldContainer(
        [fem.Field(region(fem.Mesh(points, cells, kind), quadrature=rule), dim=3, values=u)]
    )  # type: ignore[operator]
    theirs = field.evaluate.green_lagrange_strain()[:, :, 0]
    pairs = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2))
    np.testing.assert_allclose(
        found["strain_green_lagrange"], np.stack([theirs[p] for p in pairs], axis=1), rtol=0, atol=1e-9
    )
    logs = field.evaluate.log_strain()[:, :, 0]
    np.testing.assert_allclose(
        found["strain_hencky"], np.stack([logs[p] for p in pairs], axis=1), rtol=0, atol=1e-9
    )
    F = field.extract(grad=True, sym=False, add_identity=True)[0][:, :, 0]
    np.testing.assert_allclose(found["det_f"], np.linalg.det(np.moveaxis(F, -1, 0)), rtol=1e-12)
    angles = np.linalg.norm(found["finite_rotation"], axis=1)
    assert np.degrees(angles.max()) > (75 if case == "bending" else 45)
    assert np.abs(theirs).max() > 0.1


@pytest.mark.derived("a superposed turn of the bent bar: referential measures stay, whatever the location")
@pytest.mark.parametrize("at", LOCATIONS)
@pytest.mark.parametrize("kind", ["hexahedron20", "hexahedron"])
def test_a_superposed_turn_on_a_strained_bar(kind: str, at: Any) -> None:
    mesh = bar(kind, 2)
    u = bent(mesh.points, np.pi / 2)
    names = [
        "strain_green_lagrange",
        "strain_hencky",
        "strain_biot",
        "strain_almansi",
        "principal_strain_almansi",
        "det_f",
    ]
    before = strain(mesh.result(u=u), measures=names, at=at).cell_data
    Q = axis_angle((0.36, 0.48, 0.8), 2.2) + np.eye(3)
    after = strain(mesh.result(u=(mesh.points + u) @ Q.T - mesh.points), measures=names, at=at).cell_data
    for name in set(names) - {"strain_almansi"}:
        np.testing.assert_allclose(after[name], before[name], rtol=0, atol=1e-13, err_msg=name)
    full = [a["strain_almansi"][:, [0, 3, 5, 3, 1, 4, 5, 4, 2]].reshape(-1, 3, 3) for a in (before, after)]
    np.testing.assert_allclose(full[1], Q @ full[0] @ Q.T, atol=1e-13)


@pytest.mark.derived("coordinates that are already moved: X = x - u; the same result written both ways")
@pytest.mark.parametrize("suffix", [".vtu", ".xdmf"])
def test_the_same_result_written_both_ways(tmp_path: Any, suffix: str) -> None:
    from unturn import io

    mesh = bar("hexahedron20", 2)
    # numbers of few binary digits: x = X + u is exact, and so is X = x - u
    points = np.round(mesh.points * 2**20) / 2**20
    u = np.round(bent(points, np.pi / 2) * 2**20) / 2**20
    block = CellBlock("hexahedron20", mesh.cells, np.arange(len(mesh.cells)))
    io.write(Result(points, (block,), {"u": u}), tmp_path / f"reference{suffix}")
    io.write(Result(points + u, (block,), {"u": u}), tmp_path / f"deformed{suffix}")
    measures = ["all", "strain_green_lagrange", "strain_hencky", "strain_almansi", "finite_rotation", "det_f"]
    for more in ({}, {"remove_rigid": "whole", "solve": "nonlinear"}, {"at": "mean"}):
        plain = strain(io.read(tmp_path / f"reference{suffix}"), measures=measures, **more)  # type: ignore[arg-type]
        moved = strain(
            io.read(tmp_path / f"deformed{suffix}"), measures=measures, coordinates="deformed", **more
        )  # type: ignore[arg-type]
        assert set(plain.cell_data) == set(moved.cell_data)
        for name, values in plain.cell_data.items():
            np.testing.assert_array_equal(moved.cell_data[name], values, err_msg=name)
        np.testing.assert_array_equal(moved.points, points + u)  # what the file had stays


@pytest.mark.derived("of the sample lever: the same, where storing x rounds")
def test_the_lever_written_both_ways(tmp_path: Any) -> None:
    from pathlib import Path

    from unturn import io

    result = io.read(Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf")
    moved = Result(
        result.points + result.point_data["u"], result.blocks, dict(result.point_data), dict(result.cell_data)
    )
    io.write(moved, tmp_path / "moved.vtu")
    measures = ["strain", "strain_hencky", "finite_rotation"]
    plain = strain(result, measures=measures).cell_data
    back = strain(io.read(tmp_path / "moved.vtu"), measures=measures, coordinates="deformed").cell_data
    for name in measures:
        np.testing.assert_allclose(back[name], plain[name], rtol=0, atol=1e-12)
