"""Frames: cartesian, cylindrical, from arrays, of the surface; components follow, invariants do not."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from strategies import axis_angle
from unturn import Result, UsageError, strain
from unturn.elements import ELEMENTS

H = np.array([[2e-3, 5e-4, -3e-4], [1e-3, -1e-3, 4e-4], [7e-4, -2e-4, 5e-4]])
COMPONENTS = ["strain", "rotation", "displacement_gradient", "deviatoric_strain", "strain_hencky", "finite_rotation",
              "strain_almansi"]  # fmt: skip
INVARIANTS = ["equivalent_strain", "principal_strain", "max_shear_strain", "volumetric_strain", "rotation_angle",
              "principal_direction_1", "equivalent_strain_hencky", "principal_strain_biot", "det_f",
              "finite_rotation_angle", "small_strain_error"]  # fmt: skip
SIX = [(0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2)]


def full(six: np.ndarray) -> np.ndarray:
    return six[..., [0, 3, 5, 3, 1, 4, 5, 4, 2]].reshape(*six.shape[:-1], 3, 3)


def homogeneous(kind: str = "hexahedron", **cell_data: Any) -> Result:
    mesh = meshes.patch(ELEMENTS[kind])
    return mesh.result(u=mesh.points @ H.T).with_arrays(cell_data=cell_data)


def centroids(mesh: meshes.Mesh) -> np.ndarray:
    N = mesh.element.shape_functions(mesh.element.centroid[None])[0]
    found: np.ndarray = np.einsum("a,cax->cx", N, mesh.points[mesh.cells])
    return found


def assert_turned(result: Result, frame: str, axes: np.ndarray) -> Result:
    """Assert that components are those in `axes` `(n, 3, 3)` (rows) and that nothing else changes; return the result."""
    plain = strain(result, measures=COMPONENTS + INVARIANTS).cell_data
    turned = strain(result, measures=COMPONENTS + INVARIANTS, frame=frame)
    for name in INVARIANTS:
        np.testing.assert_array_equal(turned.cell_data[name], plain[name], err_msg=name)
    for name in COMPONENTS:
        before, after = plain[name], turned.cell_data[name]
        if before.shape[1] == 3:
            expected = np.einsum("nai,ni->na", axes, before)
        elif before.shape[1] == 9:
            expected = np.einsum("nai,nij,nbj->nab", axes, before.reshape(-1, 3, 3), axes).reshape(-1, 9)
        else:
            tensor = np.einsum("nai,nij,nbj->nab", axes, full(before), axes)
            expected = np.stack([tensor[:, i, j] for i, j in SIX], axis=1)
        np.testing.assert_allclose(after, expected, rtol=0, atol=1e-17, err_msg=name)
    return turned


@pytest.mark.derived("e'_ab = a_i e_ij b_j: by matrix products")
def test_cartesian() -> None:
    result = homogeneous()
    first, third = np.array([1.0, 1, 0]) / np.sqrt(2), np.array([0, 0, 1.0])
    axes = np.tile(np.stack([first, third, np.cross(first, third)]), (7, 1, 1))
    out = assert_turned(result, "cartesian 1,1,0 0,0,1", axes)
    names = out.component_names
    assert names["cell", "strain"] == ("11", "22", "33", "12", "23", "13")
    assert names["cell", "rotation"] == ("1", "2", "3")
    assert names["cell", "displacement_gradient"][:4] == ("11", "12", "13", "21")
    assert names["cell", "principal_strain"] == ("1", "2", "3")
    assert names["cell", "principal_direction_1"] == ("X", "Y", "Z")
    skewed = strain(result, measures=["strain"], frame="cartesian x 5,0.2,0").cell_data["strain"]
    np.testing.assert_allclose(skewed, strain(result, measures=["strain"]).cell_data["strain"], atol=1e-18)


@pytest.mark.derived("R from the axis outward at the centroid, Z along the axis, T = Z x R")
@pytest.mark.parametrize(
    ("frame", "direction", "point"),
    [
        ("cylindrical z", (0, 0, 1), (0, 0, 0)),
        ("cylindrical x", (1, 0, 0), (0, 0, 0)),
        ("cylindrical 0,0,-2 through 10,0,0", (0, 0, -1), (10, 0, 0)),
        ("cylindrical 0.36,0.48,0.8 through -1,0,3", (0.36, 0.48, 0.8), (-1, 0, 3)),
    ],
)
def test_cylindrical(frame: str, direction: Any, point: Any) -> None:
    n = np.array(direction, dtype=float)
    arm = centroids(meshes.patch(ELEMENTS["hexahedron"])) - np.array(point)
    radial = arm - np.outer(arm @ n, n)
    radial /= np.linalg.norm(radial, axis=1, keepdims=True)
    axes = np.stack([radial, np.cross(n, radial), np.broadcast_to(n, radial.shape)], axis=1)
    out = assert_turned(homogeneous(), frame, axes)
    assert out.component_names["cell", "strain"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert out.component_names["cell", "strain_hencky"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert out.component_names["cell", "finite_rotation"] == ("R", "T", "Z")


@pytest.mark.derived(
    "fibre axes: 1 along the first array, 2 in the plane of both; NaN where they are parallel or missing"
)
def test_directions_from_arrays() -> None:
    rng = np.random.default_rng(2)
    fibre, side = rng.normal(size=(2, 7, 3))
    one = fibre / np.linalg.norm(fibre, axis=1, keepdims=True)
    two = side - (side * one).sum(axis=1, keepdims=True) * one
    two /= np.linalg.norm(two, axis=1, keepdims=True)
    axes = np.stack([one, two, np.cross(one, two)], axis=1)
    assert_turned(homogeneous(fibre=fibre, side=side), "arrays fibre side", axes)
    side[3] = 2 * fibre[3]
    fibre[5] = 0
    out = strain(
        homogeneous(fibre=fibre, side=side),
        measures=["strain", "equivalent_strain"],
        frame="arrays fibre side",
    )
    assert np.isnan(out.cell_data["strain"]).any(axis=1).tolist() == [k in (3, 5) for k in range(7)]
    assert np.isnan(out.cell_data["strain"][5]).all()
    assert np.isnan(out.cell_data["strain"][3]).tolist() == [
        False,
        True,
        True,
        True,
        True,
        True,
    ]  # 11 is known
    assert np.isfinite(out.cell_data["equivalent_strain"]).all()


@pytest.mark.derived(
    "on the axis of a cylindrical frame there is no radial direction: NaN, but ZZ and invariants stay"
)
def test_on_the_axis() -> None:
    mesh = meshes.affine_cell(ELEMENTS["hexahedron"])
    mesh = mesh._replace(points=mesh.points - centroids(mesh)[0])
    out = strain(
        mesh.result(u=mesh.points @ H.T),
        measures=["strain", "rotation", "equivalent_strain"],
        frame="cylindrical z",
    )
    assert np.isnan(out.cell_data["strain"][0]).tolist() == [
        True,
        True,
        False,
        True,
        True,
        True,
    ]  # ZZ is known
    assert out.cell_data["strain"][0, 2] == pytest.approx(H[2, 2])
    assert np.isfinite(out.cell_data["equivalent_strain"]).all()


INNER, OUTER, A, B = 1.0, 2.0, 1e-3, 2e-3  # u_r = A r + B / r


def ring(n_r: int, n_t: int, depth: int = 0) -> meshes.Mesh:
    """A quarter ring of quadratic quads, or of bricks when it has a depth."""
    r, t = np.linspace(INNER, OUTER, n_r + 1), np.linspace(0, np.pi / 2, n_t + 1)
    z = np.linspace(0, 0.3, depth + 1)
    number = np.arange((n_r + 1) * (n_t + 1) * (depth + 1)).reshape(n_r + 1, n_t + 1, depth + 1)
    R, T, Z = (a.ravel() for a in np.meshgrid(r, t, z, indexing="ij"))
    if depth:
        corners = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)]
        cells = [number[i : i + n_r, j : j + n_t, k : k + depth].ravel() for i, j, k in corners]
        element = ELEMENTS["hexahedron20"]
    else:
        cells = [number[i : i + n_r, j : j + n_t, 0].ravel() for i, j in ((0, 0), (1, 0), (1, 1), (0, 1))]
        element = ELEMENTS["quad8"]
    flat = meshes.straight(np.stack([R, T, Z], axis=1), np.stack(cells, axis=1), element)
    radius, angle, height = flat.points.T
    return flat._replace(points=np.stack([radius * np.cos(angle), radius * np.sin(angle), height], axis=1))


def expansion(points: np.ndarray) -> np.ndarray:
    radius = np.linalg.norm(points[:, :2], axis=1)
    u: np.ndarray = points * (A + B / radius**2)[:, None]
    u[:, 2] = 0
    return u


@pytest.mark.source(
    "Lame; Timoshenko and Goodier: u_r = A r + B/r: e_rr = A - B/r^2, e_tt = A + B/r^2, e_zz = 0"
)
def test_ring_in_a_cylindrical_frame_against_the_formula() -> None:
    errors = []
    for n in (6, 12, 24):
        mesh = ring(n, 2 * n)
        out = strain(
            mesh.result(u=expansion(mesh.points)), measures=["strain"], plane="strain", frame="cylindrical z"
        )
        r = np.linalg.norm(centroids(mesh)[:, :2], axis=1)
        expected = np.zeros((len(r), 6))
        expected[:, 0], expected[:, 1] = A - B / r**2, A + B / r**2
        errors.append(np.abs(out.cell_data["strain"] - expected).max())
    # quadratic elements: gradients at centroids fall as the square of their size
    assert errors[0] < 0.02 * B
    assert errors[0] / errors[1] > 3.3
    assert errors[1] / errors[2] > 3.6


@pytest.mark.source("Lame; Timoshenko and Goodier, Theory of Elasticity: three meshes of the same ring")
def test_ring_axisymmetric_plane_strain_and_solid_agree() -> None:
    n = 6
    found = {}
    flat, solid = ring(n, 24), ring(n, 24, 1)
    r, z = np.linspace(INNER, OUTER, n + 1), np.linspace(0, 0.3, 2)
    R, Z = (a.ravel() for a in np.meshgrid(r, z, indexing="ij"))
    number = np.arange(len(R)).reshape(n + 1, 2)
    cells = np.stack([number[:-1, 0], number[1:, 0], number[1:, 1], number[:-1, 1]], axis=1)
    section = meshes.straight(np.stack([R, Z], axis=1), cells, ELEMENTS["quad8"])
    u_section = np.stack(
        [A * section.points[:, 0] + B / section.points[:, 0], *np.zeros((2, len(section.points)))], axis=1
    )
    for base in ("small", "hencky"):
        name = "strain" if base == "small" else "strain_hencky"
        options: dict[str, Any] = {"measures": ["strain"], "base": base}
        ours = strain(section.result(u=u_section), plane="axisymmetric", **options).cell_data[name]
        found["axisymmetric"] = ours[:, [0, 2, 1]]  # in x, y: r is X, the axis is Y, the hoop is ZZ
        for kind, mesh, more in (("plane", flat, {"plane": "strain"}), ("solid", solid, {})):
            out = strain(mesh.result(u=expansion(mesh.points)), frame="cylindrical z", **options, **more)  # type: ignore[arg-type]
            values = out.cell_data[name].reshape(n, 24, 6)
            np.testing.assert_allclose(values, np.broadcast_to(values[:, :1], values.shape), atol=1e-15)
            np.testing.assert_allclose(values[..., 3:], 0, atol=1e-15)
            found[kind] = values[:, 0, :3]
        np.testing.assert_allclose(found["solid"], found["plane"], atol=1e-15)
        np.testing.assert_allclose(found["axisymmetric"], found["plane"], atol=5e-6)


@pytest.mark.derived(
    "a plane mesh without a stated third direction: in the plane nothing is lost by a frame about its normal"
)
def test_an_unknown_component_spoils_only_what_it_enters() -> None:
    mesh = ring(4, 8)
    result = mesh.result(u=expansion(mesh.points))
    known = strain(result, measures=["strain"], plane="strain", frame="cylindrical z").cell_data["strain"]
    out = strain(result, measures=["strain", "displacement_gradient"], frame="cylindrical z").cell_data
    np.testing.assert_array_equal(
        np.isnan(out["strain"]).all(axis=0), [False, False, True, False, False, False]
    )
    np.testing.assert_allclose(np.delete(out["strain"], 2, axis=1), np.delete(known, 2, axis=1), atol=1e-18)
    assert np.isnan(out["displacement_gradient"]).any(axis=0).tolist() == [k == 8 for k in range(9)]
    tilted = strain(result, measures=["strain"], frame="cartesian x 0,1,1").cell_data["strain"]
    assert np.isnan(tilted).any(axis=0).tolist() == [False, True, True, False, True, False]


def patch_in_space() -> meshes.Mesh:
    mesh = meshes.patch(ELEMENTS["quad"])
    return mesh._replace(points=mesh.points @ (axis_angle([0.6, 0.0, 0.8], 0.4) + np.eye(3)).T)


@pytest.mark.practice(
    "shells: first local axis is x laid into the surface, third the normal by the order of the nodes"
)
def test_the_frame_of_a_surface() -> None:
    mesh = patch_in_space()
    result = mesh.result(u=mesh.points @ H.T)
    names = ["surface_direction_1", "surface_direction_2", "surface_normal"]
    out = strain(result, measures=[*names, "strain"], frame="surface")
    axes = np.stack([out.cell_data[n] for n in names], axis=1)
    normal = (axis_angle([0.6, 0.0, 0.8], 0.4) + np.eye(3))[:, 2]
    np.testing.assert_allclose(axes @ axes.swapaxes(1, 2), np.tile(np.eye(3), (5, 1, 1)), atol=1e-15)
    np.testing.assert_allclose(np.linalg.det(axes), 1.0)
    np.testing.assert_allclose(axes[:, 2], np.tile(normal, (5, 1)), atol=1e-14)
    assert (axes[:, 0, 0] > 0).all()
    np.testing.assert_allclose(axes[:, 1, 0], 0, atol=1e-15)  # x lies in the plane of 1 and 3
    local = strain(result, measures=["strain"], frame="surface")
    np.testing.assert_allclose(local.cell_data["strain"][:, [2, 4, 5]], 0, atol=1e-18)  # nothing across
    assert_turned(result, "surface", axes)
    assert out.component_names["cell", "surface_normal"] == ("X", "Y", "Z")
    assert out.component_names["cell", "strain"] == ("11", "22", "33", "12", "23", "13")


def test_the_frame_of_a_surface_across_x_starts_from_z() -> None:
    mesh = meshes.patch(ELEMENTS["quad"])
    mesh = mesh._replace(points=np.roll(mesh.points, 1, axis=1))  # in y, z
    out = strain(
        mesh.result(u=mesh.points @ H.T), measures=["surface_direction_1", "surface_normal"]
    ).cell_data
    np.testing.assert_allclose(out["surface_direction_1"], np.tile([0, 0, 1.0], (5, 1)), atol=1e-15)
    np.testing.assert_allclose(out["surface_normal"], np.tile([1.0, 0, 0], (5, 1)), atol=1e-15)


def test_the_frame_of_a_surface_is_not_one_of_solids() -> None:
    for options in ({"frame": "surface"}, {"measures": ["surface_normal"]}):
        with pytest.raises(UsageError, match="needs surface cells"):
            strain(homogeneous(), **options)  # type: ignore[arg-type]
    assert (
        "surface_normal"
        not in strain(patch_in_space().result(u=patch_in_space().points), measures=["all"]).cell_data
    )


@pytest.mark.parametrize(
    ("frame", "said"),
    [
        ("", "is not understood"),
        ("spherical z", "is not understood"),
        ("cylindrical w", "is not understood"),
        ("cylindrical 1,2", "is not understood"),
        ("cylindrical z by 1,0,0", "is not understood"),
        ("cylindrical z through 1,0", "is not understood"),
        ("cylindrical nan,0,1", "is not understood"),
        ("cylindrical 0,0,0", "a direction has no length"),
        ("cartesian x", "is not understood"),
        ("cartesian x -2,0,0", "the two directions are parallel"),
        ("arrays fibre", "is not understood"),
        ("arrays fibre fiber", "no cell array is called 'fiber'. Did you mean 'fibre'"),
        ("arrays fibre part", "has shape"),
    ],
)
def test_frames_that_are_refused(frame: str, said: str) -> None:
    result = homogeneous(fibre=np.ones((7, 3)), part=np.ones(7))
    with pytest.raises(UsageError) as error:
        strain(result, frame=frame)
    assert said in str(error.value)


def test_component_names_reach_the_file(tmp_path: Path) -> None:
    from unturn import io

    out = strain(homogeneous(), base="hencky", frame="cylindrical z")
    io.write(out, tmp_path / "out.vtu")
    assert io.read(tmp_path / "out.vtu").component_names["cell", "strain_hencky"] == (
        "RR",
        "TT",
        "ZZ",
        "RT",
        "TZ",
        "RZ",
    )
