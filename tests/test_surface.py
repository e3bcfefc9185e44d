"""Strain on the faces of solids against closed forms."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista as pv

import meshes
from unturn import io
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import UsageError
from unturn.fields import compute_fields
from unturn.kinematics import (
    equivalent_strain,
    rotation_vector,
    tensor_from_components,
    tensor_to_components,
)
from unturn.model import build_model
from unturn.result import CellBlock, Result
from unturn.rigid import take_out
from unturn.surface import (
    SURFACE_MEASURES,
    SurfaceFields,
    choose_surface_measures,
    free_faces,
    surface_result,
)

SOLIDS = [row for row in ELEMENTS.values() if row.dim == 3]
HIGHER = [
    element(f.name, f.n_nodes(order), spacing)
    for f in FAMILIES.values()
    if f.shape.dim == 3
    for order, spacing in ((2, "equal"), (3, "gll"))
]
EVERY = [*SOLIDS, *HIGHER, element("VTK_LAGRANGE_PYRAMID", 14)]
H = np.array([[1.0, -3.0, 0.5], [2.0, -0.7, 4.0], [-1.5, 0.3, 0.9]]) * 1e-3
NU = 0.3


def name_of(row: Element) -> str:
    return f"{row.name}-{row.n_nodes}"


def surface(result: Result, *names: str, **options: Any) -> SurfaceFields:
    model = build_model(result)
    return surface_result(model, free_faces(model), list(names) or ["all"], **options)


def box(row: Element, n: tuple[int, int, int], size: tuple[float, float, float]) -> meshes.Mesh:
    """A regular grid of hexahedra, or cut into tetrahedra, about the origin."""
    axes = [np.linspace(-s / 2, s / 2, k + 1) for s, k in zip(size, n)]
    corners = np.stack(np.meshgrid(*axes, indexing="ij"), -1).reshape(-1, 3)
    k = np.arange(len(corners)).reshape([m + 1 for m in n])
    c = [k[:-1, :-1, :-1], k[1:, :-1, :-1], k[1:, 1:, :-1], k[:-1, 1:, :-1],
         k[:-1, :-1, 1:], k[1:, :-1, 1:], k[1:, 1:, 1:], k[:-1, 1:, 1:]]  # fmt: skip
    cells = np.stack([a.reshape(-1) for a in c], 1)
    if row.shape.name == "tetra":
        cut = [(0, 1, 2, 6), (0, 2, 3, 6), (0, 3, 7, 6), (0, 7, 4, 6), (0, 4, 5, 6), (0, 5, 1, 6)]
        cells = cells[:, cut].reshape(-1, 4)
    return meshes.straight(corners, cells, row)


def normals(found: SurfaceFields) -> np.ndarray:
    values = found.result.cell_data["surface_normal"]
    np.testing.assert_allclose(np.linalg.norm(values, axis=1), 1, rtol=1e-13)
    return np.asarray(values)


def six(tensor: np.ndarray) -> np.ndarray:
    return np.asarray(tensor_to_components(tensor))


@pytest.mark.derived(
    "linear field: the strain in a tangent plane is P e P, P = I - n n^T; H n = -(grad_s u)^T n"
)
@pytest.mark.parametrize("bent", [0.0, 0.02])
@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_patch_test_on_every_face(row: Element, bent: float) -> None:
    mesh = meshes.curved(meshes.patch(row), bent)
    u = mesh.points @ H.T + [5.0, -2.0, 1.0]
    found = surface(mesh.result(u=u), "all", poisson=NU)
    data = found.result.cell_data
    n = normals(found)
    P = np.eye(3) - n[:, :, None] * n[:, None, :]
    e = (H + H.T) / 2
    in_plane = P @ e @ P
    np.testing.assert_allclose(data["surface_strain"], six(in_plane), atol=1e-13)
    t = np.stack([data["surface_direction_1"], data["surface_direction_2"]], axis=1)
    local = t @ e @ np.swapaxes(t, 1, 2)
    expected = np.stack([local[:, 0, 0], local[:, 1, 1], local[:, 0, 1]], 1)
    np.testing.assert_allclose(data["surface_in_plane_strain"], expected, atol=1e-13)
    values, vectors = np.linalg.eigh(local)
    np.testing.assert_allclose(data["surface_principal_strain"], values[:, ::-1], atol=1e-13)
    for k in range(2):
        direction = np.einsum("nk,nki->ni", vectors[:, :, 1 - k], t)
        along = np.abs((direction * data[f"surface_principal_direction_{k + 1}"]).sum(axis=1))
        np.testing.assert_allclose(along, 1, atol=1e-12)
    np.testing.assert_allclose(data["surface_max_shear_strain"], values[:, 1] - values[:, 0], atol=1e-13)
    normal = -NU / (1 - NU) * values.sum(axis=1)
    np.testing.assert_allclose(data["surface_normal_strain"], normal, atol=1e-13)
    whole = in_plane + normal[:, None, None] * n[:, :, None] * n[:, None, :]
    np.testing.assert_allclose(data["surface_equivalent_strain"], equivalent_strain(whole), atol=1e-13)
    along = H @ P
    turned = along - np.einsum("nki,nk,nj->nij", along, n, n)
    np.testing.assert_allclose(data["surface_rotation"], rotation_vector(turned), atol=1e-13)
    np.testing.assert_allclose(
        data["surface_rotation_angle"], np.linalg.norm(rotation_vector(turned), axis=1), atol=1e-13
    )
    assert not found.left_out


@pytest.mark.source("pure bending of a bar: Timoshenko and Goodier, article 102: e_xx = -y/R, e_zz = nu y/R")
@pytest.mark.parametrize("name", ["hexahedron", "hexahedron20", "hexahedron27", "tetra", "tetra10"])
@pytest.mark.parametrize("layers", [1, 2])
def test_a_bent_plate(name: str, layers: int) -> None:
    # on y = const u_x and u_z are linear: every face holds them, whatever the order of the element
    thick, R = 0.1, 40.0
    mesh = box(ELEMENTS[name], (4, layers, 3), (2.0, thick, 1.0))
    x, y, z = mesh.points.T
    u = np.stack([-x * y, (x * x + NU * (y * y - z * z)) / 2, NU * y * z], 1) / R
    result = mesh.result(u=u)
    found = surface(result, "strain", "principal_strain", "equivalent_strain", poisson=NU)
    up = normals(found)[:, 1]
    peak = thick / 2 / R
    for side in (1, -1):
        mask = np.abs(up - side) < 1e-12
        assert mask.sum() > 0
        strain = found.result.cell_data["surface_strain"][mask]
        expected = np.array([-side * peak, 0, side * NU * peak, 0, 0, 0])
        np.testing.assert_allclose(strain, np.broadcast_to(expected, strain.shape), atol=1e-15)
        # pure bending is uniaxial stress: the strain along the normal is nu y / R as well
        normal = surface(result, "normal_strain", poisson=NU).result.cell_data["surface_normal_strain"][mask]
        np.testing.assert_allclose(normal, side * NU * peak, atol=1e-15)
    if name == "tetra":
        return  # one gradient in the whole cell: faces at ends and sides err, and centroids are as good as the top
    largest = found.parent_arrays["surface_principal_strain_max"]
    assert np.nanmax(largest) == pytest.approx(peak, rel=1e-11)
    raw = compute_fields(build_model(result), ["strain"]).arrays["strain"][:, 0]
    share = {"tetra10": (0.5, 0.75), "hexa": (0.0, 0.5)}[name if name == "tetra10" else "hexa"][layers - 1]
    assert np.abs(raw).max() == pytest.approx(share * peak, abs=1e-15)


@pytest.mark.parametrize("name", ["hexahedron", "hexahedron20", "tetra", "tetra10", "wedge15"])
def test_areas_of_a_box(name: str) -> None:
    row = ELEMENTS[name]
    if row.shape.name == "wedge":
        mesh, sides = meshes.patch(row), (0.24, 0.12, 0.12)
    else:
        mesh, sides = box(row, (3, 2, 2), (1.5, 0.7, 2.0)), (1.5, 0.7, 2.0)
    found = surface(mesh.result(u=0 * mesh.points), "strain")
    n, area = normals(found), found.result.cell_data["area"]
    for axis in range(3):
        for sign in (1, -1):
            side = np.abs(n[:, axis] - sign) < 1e-12
            assert area[side].sum() == pytest.approx(np.prod(sides) / sides[axis], rel=1e-12)
    assert area.sum() == pytest.approx(2 * sum(np.prod(sides) / s for s in sides), rel=1e-12)


@pytest.mark.derived("a quadratic surface errs by h^4 in its area, a linear one by h^2")
@pytest.mark.parametrize(
    ("name", "rate"),
    [("hexahedron27", 4), ("hexahedron20", 4), ("tetra10", 4), ("hexahedron", 2), ("tetra", 2)],
)
def test_area_of_a_ball(name: str, rate: int) -> None:
    errors = []
    for n in (2, 4):
        mesh = box(ELEMENTS[name], (n, n, n), (2.0, 2.0, 2.0))
        p = mesh.points
        size = np.linalg.norm(p, axis=1)
        ball = p * (np.abs(p).max(axis=1) / np.where(size > 0, size, 1))[:, None]
        found = surface(mesh._replace(points=ball).result(u=0 * ball), "strain")
        errors.append(abs(found.result.cell_data["area"].sum() / (4 * np.pi) - 1))
        faces = found.result
        middle = np.stack([faces.points[b.connectivity].mean(axis=1) for b in faces.blocks])[0]
        assert ((middle * normals(found)).sum(axis=1) > 0.9 * np.linalg.norm(middle, axis=1)).all()
    assert np.log2(errors[0] / errors[1]) > rate - 0.4, errors
    assert errors[1] < {4: 2e-3, 2: 0.1}[rate]


@pytest.mark.source("surface strain of an inflated ball: u = c x gives c in every tangent direction")
def test_an_inflated_ball() -> None:
    mesh = box(ELEMENTS["hexahedron27"], (2, 2, 2), (2.0, 2.0, 2.0))
    p = mesh.points
    size = np.linalg.norm(p, axis=1)
    ball = p * (np.abs(p).max(axis=1) / np.where(size > 0, size, 1))[:, None]
    found = surface(mesh._replace(points=ball).result(u=1e-3 * ball), "principal_strain", peaks=True)
    for name in ("surface_principal_strain", "surface_principal_strain_peak"):
        np.testing.assert_allclose(found.result.cell_data[name], 1e-3, rtol=1e-10)


def turn(angle: float, axis: tuple[float, float, float]) -> np.ndarray:
    """Rodrigues' formula, minus one."""
    k = np.array(axis) / np.linalg.norm(axis)
    K = np.array([[0, -k[2], k[1]], [k[2], 0, -k[0]], [-k[1], k[0], 0]])
    return np.asarray(np.sin(angle) * K + (1 - np.cos(angle)) * K @ K)


@pytest.mark.source("small turn u = theta x X: no small strain (Timoshenko and Goodier, article 83)")
@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_a_small_turn_is_no_strain(row: Element) -> None:
    mesh = meshes.curved(meshes.patch(row))
    theta = np.array([0.02, -0.03, 0.01])
    found = surface(
        mesh.result(u=np.cross(theta, mesh.points) + 100.0), "strain", "rotation"
    ).result.cell_data
    # 100 is known to 1e-14, the shortest edges are of 1e-2
    np.testing.assert_allclose(found["surface_strain"], 0, atol=1e-11)
    np.testing.assert_allclose(
        found["surface_rotation"], np.broadcast_to(theta, (len(found["area"]), 3)), atol=1e-11
    )


@pytest.mark.source(
    "a turn of 90 degrees: no finite strain, rotation vector angle times axis (Rodrigues 1840)"
)
@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_a_right_angle_is_no_finite_strain(row: Element) -> None:
    mesh = meshes.curved(meshes.patch(row))
    u = mesh.points @ turn(np.pi / 2, (1, 2, 2)).T + [3.0, 0, 0]
    for base in ("green-lagrange", "hencky", "biot"):
        found = surface(mesh.result(u=u), "all", base=base, poisson=NU)
        key = base.replace("-", "_")
        for name in ("strain", "in_plane_strain", "principal_strain", "equivalent_strain", "normal_strain"):
            # the equivalent value is a square root of squares, the others are linear in rounding
            np.testing.assert_allclose(found.result.cell_data[f"surface_{name}_{key}"], 0, atol=2e-12)
    turned = found.result.cell_data["surface_finite_rotation"]
    np.testing.assert_allclose(
        turned, np.broadcast_to(np.pi / 2 * np.array([1, 2, 2]) / 3, turned.shape), atol=1e-10
    )
    np.testing.assert_allclose(found.result.cell_data["surface_finite_rotation_angle"], np.pi / 2, atol=1e-10)
    small = surface(mesh.result(u=u), "principal_strain").result.cell_data["surface_principal_strain"]
    assert np.abs(small).max() > 0.3  # the small strain of it is fiction


@pytest.mark.source("homogeneous F: in-plane stretches from the metric t . C t (Holzapfel 2000, section 2.5)")
@pytest.mark.parametrize("name", ["hexahedron20", "tetra10", "wedge", "pyramid14"])
def test_finite_stretch_with_a_turn(name: str) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[name]), 0.02)
    stretch = np.array([[1.3, 0.1, 0], [0.1, 0.9, -0.05], [0, -0.05, 0.8]])
    F = (np.eye(3) + turn(2.0, (1, 1, 0))) @ stretch
    result = mesh.result(u=mesh.points @ (F - np.eye(3)).T)
    C = stretch @ stretch
    convert = {"green-lagrange": lambda w: np.expm1(2 * w) / 2, "hencky": lambda w: w, "biot": np.expm1}
    for base, of in convert.items():
        key = base.replace("-", "_")
        found = surface(result, "all", base=base, poisson=NU)
        data = found.result.cell_data
        t = np.stack([data["surface_direction_1"], data["surface_direction_2"]], axis=1)
        squares, vectors = np.linalg.eigh(t @ C @ np.swapaxes(t, 1, 2))
        logs = np.log(squares[:, ::-1]) / 2
        np.testing.assert_allclose(data[f"surface_principal_strain_{key}"], of(logs), atol=1e-12)
        third = of(-NU / (1 - NU) * logs.sum(axis=1))
        np.testing.assert_allclose(data[f"surface_normal_strain_{key}"], third, atol=1e-12)
        diagonal = np.zeros((len(third), 3, 3))
        diagonal[:, [0, 1, 2], [0, 1, 2]] = np.column_stack([of(logs), third])
        np.testing.assert_allclose(
            data[f"surface_equivalent_strain_{key}"], equivalent_strain(diagonal), atol=1e-12
        )
        tensor = np.einsum("nk,nik,njk->nij", of(logs), vectors[:, :, ::-1], vectors[:, :, ::-1])
        whole = np.swapaxes(t, 1, 2) @ tensor @ t
        np.testing.assert_allclose(data[f"surface_strain_{key}"], six(whole), atol=1e-12)
        full = tensor_from_components(data[f"surface_strain_{key}"])
        direction = data[f"surface_principal_direction_1_{key}"]
        np.testing.assert_allclose(
            np.einsum("nij,nj->ni", full, direction), of(logs)[:, :1] * direction, atol=1e-12
        )


@pytest.mark.derived(
    "plate rolled to a circle: the fibre at y is (R - y)/R as long; in the middle of a face an arc of h is seen as its "
    "chord, 1 - (h/R)^2/24 of it, by linear and quadratic faces alike"
)
@pytest.mark.parametrize("name", ["hexahedron", "hexahedron20"])
def test_a_plate_rolled_up(name: str) -> None:
    R, thick, errors = 1.0, 0.2, []
    for n in (6, 12):
        mesh = box(ELEMENTS[name], (n, 1, 1), (np.pi, thick, 0.5))
        x, y, z = mesh.points.T
        u = np.stack([(R - y) * np.sin(x / R) - x, R - (R - y) * np.cos(x / R) - y, 0 * z], 1)
        found = surface(mesh.result(u=u), "principal_strain", base="hencky", solve="nonlinear")
        up, values = normals(found)[:, 1], found.result.cell_data["surface_principal_strain_hencky"]
        errors.append(np.abs(values[up > 0.9, 1] - np.log(1 - thick / 2 / R)).max())
        np.testing.assert_allclose(values[up > 0.9, 0], 0, atol=1e-12)
        assert np.abs(values[up < -0.9, 0] - np.log(1 + thick / 2 / R)).max() == pytest.approx(
            errors[-1], rel=1e-6
        )
    assert errors[1] == pytest.approx((np.pi / 12) ** 2 / 24, rel=0.02)
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2, abs=0.05)


def test_the_local_frame() -> None:
    mesh = box(ELEMENTS["hexahedron"], (1, 1, 1), (1.0, 1.0, 1.0))
    found = surface(mesh.result(u=mesh.points @ H.T), "in_plane_strain")
    data = found.result.cell_data
    e = (H + H.T) / 2
    for axis, first, second in ((0, 2, 1), (1, 0, 2), (2, 0, 1)):
        for sign in (1, -1):
            (k,) = np.flatnonzero(np.abs(data["surface_normal"][:, axis] - sign) < 1e-12)
            np.testing.assert_allclose(data["surface_direction_1"][k], np.eye(3)[first], atol=1e-15)
            third = np.cross(data["surface_direction_1"][k], data["surface_direction_2"][k])
            np.testing.assert_allclose(third, data["surface_normal"][k], atol=1e-15)
            sense = data["surface_direction_2"][k] @ np.eye(3)[second]
            expected = [e[first, first], e[second, second], sense * e[first, second]]
            np.testing.assert_allclose(data["surface_in_plane_strain"][k], expected, atol=1e-15)
    assert found.result.component_names["cell", "surface_in_plane_strain"] == ("11", "22", "12")


def test_peaks_within_a_face() -> None:
    # u_x = x^2 on the top: the strain 2 x is largest at the quadrature point farthest from the middle
    mesh = box(ELEMENTS["hexahedron20"], (1, 1, 1), (2.0, 2.0, 2.0))
    u = 1e-3 * np.stack([mesh.points[:, 0] ** 2, 0 * mesh.points[:, 0], 0 * mesh.points[:, 0]], 1)
    found = surface(mesh.result(u=u), "principal_strain", "equivalent_strain", poisson=0.0, peaks=True)
    data = found.result.cell_data
    top = data["surface_normal"][:, 2] > 0.9
    np.testing.assert_allclose(data["surface_principal_strain"][top], 0, atol=1e-15)
    edge = 2e-3 / np.sqrt(3)
    np.testing.assert_allclose(data["surface_principal_strain_peak"][top], [[edge, -edge]], rtol=1e-12)
    np.testing.assert_allclose(data["surface_equivalent_strain_peak"][top], 2 / 3 * edge, rtol=1e-12)
    assert found.parent_arrays["surface_principal_strain_max"][0] == pytest.approx(edge)
    assert found.parent_arrays["surface_principal_strain_min"][0] == pytest.approx(-edge)


def test_back_on_the_solids() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    u = np.random.default_rng(0).normal(size=mesh.points.shape) * 1e-3
    found = surface(mesh.result(u=u), "principal_strain", "equivalent_strain", poisson=NU)
    data = found.result.cell_data
    assert set(found.parent_arrays) == {
        "surface_principal_strain_max", "surface_principal_strain_min", "surface_equivalent_strain_max",
    }  # fmt: skip
    for name, column, take in (
        ("principal_strain", 0, max),
        ("principal_strain", 1, min),
        ("equivalent_strain", None, max),
    ):
        values = data[f"surface_{name}"]
        values = values if column is None else values[:, column]
        back = found.parent_arrays[f"surface_{name}_{take.__name__}"]
        assert np.isnan(back[0])  # the core has no free face
        for cell in range(1, 7):
            assert back[cell] == take(values[data["parent_cell"] == cell])


@pytest.mark.parametrize("name", ["hexahedron20", "tetra10", "wedge18", "hexahedron27", "pyramid13"])
def test_written_and_read_back(name: str, tmp_path: Path) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    n = len(mesh.cells)
    result = replace(
        mesh.result(u=mesh.points @ H.T, heat=np.arange(len(mesh.points), dtype=np.float32)),
        cell_data={
            "part": np.arange(n, dtype=np.int32) % 3,
            "element_id": 1000 + np.arange(n),
            "EL": np.zeros((n, 6)),
        },
        component_names={("cell", "EL"): ("a", "b", "c", "d", "e", "f")},
        groups={"first": np.arange(n // 2)},
    )
    # a node of no cell stays behind
    result = replace(
        result,
        points=np.concatenate([[[9.0, 9, 9]], result.points]),
        point_data={k: np.concatenate([v[:1], v]) for k, v in result.point_data.items()},
        blocks=tuple(CellBlock(b.cell_type, b.connectivity + 1, b.index) for b in result.blocks),
    )
    found = surface(result, "all", poisson=NU).result
    data = found.cell_data
    assert data["parent_element"].tolist() == (1000 + data["parent_cell"]).tolist()
    assert "element_id" not in data
    assert data["part"].tolist() == (data["parent_cell"] % 3).tolist()
    assert data["part"].dtype == np.int32
    assert found.groups["first"].tolist() == np.flatnonzero(data["parent_cell"] < n // 2).tolist()
    assert not (found.points == 9.0).any()
    used = np.unique(np.concatenate([b.connectivity.ravel() for b in found.blocks]))
    assert used.tolist() == list(range(found.n_points))
    kept = np.array([int(np.flatnonzero((result.points == p).all(axis=1))[0]) for p in found.points])
    assert found.point_data["heat"].tolist() == result.point_data["heat"][kept].tolist()
    path = tmp_path / "skin.vtu"
    assert all("group" in sentence for sentence in io.write(found, path))
    again = io.read(path)
    for key, values in data.items():
        np.testing.assert_array_equal(again.cell_data[key], values)
    for key, values in found.point_data.items():
        np.testing.assert_array_equal(again.point_data[key], values)
    theirs = pv.read(path)
    sizes = [theirs.extract_cells([k]).area for k in range(theirs.n_cells)]
    np.testing.assert_allclose(sizes, data["area"], rtol=1e-6)


def test_own_arrays_are_not_hidden_by_those_of_the_solids() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    result = replace(mesh.result(u=mesh.points @ H.T), cell_data={"area": np.zeros(len(mesh.cells))})
    found = surface(result, "strain").result
    assert found.cell_data["area"].sum() == pytest.approx(6.0)
    assert found.notes == ("cell array 'area' of the solids is not carried over: the surface has its own.",)


def test_between_groups_both_sides_have_the_same_strain() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    u = np.random.default_rng(1).normal(size=mesh.points.shape) * 1e-3
    model = build_model(replace(mesh.result(u=u), groups={"core": np.array([0]), "mantle": np.arange(1, 7)}))
    found = surface_result(model, free_faces(model, between_groups=True), ["strain"])
    data = found.result.cell_data
    inner = data["between_groups"] == 1
    assert inner.sum() == 12
    core, mantle = (
        data["surface_strain"][inner & w] for w in (data["parent_cell"] == 0, data["parent_cell"] > 0)
    )
    centers = [
        found.result.points[found.result.blocks[0].connectivity[inner & w][:, :4]].mean(axis=1)
        for w in (data["parent_cell"] == 0, data["parent_cell"] > 0)
    ]
    pairs = np.linalg.norm(centers[0][:, None] - centers[1][None], axis=-1).argmin(axis=1)
    np.testing.assert_allclose(core, mantle[pairs], atol=1e-15)


def test_rigid_motion_taken_out_of_the_model() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    stretch = mesh.points * [1e-3, -3e-4, 2e-4]
    R = turn(1.0, (0, 1, 1)) + np.eye(3)
    moved = (mesh.points + stretch) @ R.T - mesh.points
    model = build_model(mesh.result(u=moved))
    everything = np.arange(len(mesh.cells))
    still, _ = take_out(model, [("whole", everything, "whole", everything)], "nonlinear", None)
    faces = free_faces(still)
    found = surface_result(still, faces, ["strain"]).result.cell_data["surface_strain"]
    plain = surface(mesh.result(u=stretch), "strain").result.cell_data["surface_strain"]
    np.testing.assert_allclose(found, plain, atol=3e-6)
    assert np.abs(surface_result(model, faces, ["strain"]).result.cell_data["surface_strain"]).max() > 0.1


def test_values_that_are_not_to_be_had() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    u = mesh.points @ H.T
    u[0] = np.nan
    found = surface(mesh.result(u=u), "strain")
    touched = np.array([0 in mesh.cells[p] for p in found.result.cell_data["parent_cell"]])
    lost = np.isnan(found.result.cell_data["surface_strain"]).any(axis=1)
    assert lost.sum() == 3  # three sides meet in the corner
    assert (touched | ~lost).all()
    assert (
        found.left_out["displacement not finite"].tolist()
        == found.result.cell_data["parent_cell"][lost].tolist()
    )
    # a face whose corners differ in number and motion and not in place
    points = np.array(
        [(x, y, z) for z in (-1, 0, 1) for x, y in ((0, 0), (1, 0), (1, 1), (0, 1))], dtype=float
    )
    points[8:] = [0.5, 0.5, 1.0]
    apart = np.zeros((12, 3))
    apart[8:, 0] = [0, 1e-6, 2e-6, 3e-6]
    two = meshes.Mesh(points, np.arange(8)[None] + [[0], [4]], ELEMENTS["hexahedron"])
    flat = surface(two.result(u=apart), "strain")
    assert len(flat.faces) == 10
    assert {k: v.tolist() for k, v in flat.left_out.items()} == {"face without area": [1]}
    assert np.isnan(flat.result.cell_data["surface_strain"]).all(axis=1).sum() == 1
    assert flat.result.cell_data["area"].min() == 0


def test_no_face_at_all() -> None:
    points = meshes.affine_cell(ELEMENTS["hexahedron"]).points.copy()
    points[[0, 1, 2, 3]] = points[[1, 0, 3, 2]]
    model = build_model(meshes.Mesh(points, np.arange(8)[None], ELEMENTS["hexahedron"]).result(u=0 * points))
    faces = free_faces(model)
    assert len(faces) == 0
    assert faces.left_out["tangled or without volume"].tolist() == [0]
    with pytest.raises(UsageError, match="there is no face to compute on"):
        surface_result(model, faces)


def test_collapsed_faces_hold_a_linear_field() -> None:
    points = meshes.affine_cell(ELEMENTS["hexahedron"]).points
    mesh = meshes.Mesh(points, np.array([[0, 1, 2, 2, 4, 5, 6, 6]]), ELEMENTS["hexahedron"])
    found = surface(mesh.result(u=points @ H.T), "strain")
    n = normals(found)
    assert len(n) == 5
    P = np.eye(3) - n[:, :, None] * n[:, None, :]
    np.testing.assert_allclose(
        found.result.cell_data["surface_strain"], six(P @ ((H + H.T) / 2) @ P), atol=1e-14
    )


def test_what_is_asked_for() -> None:
    assert choose_surface_measures() == ("surface_strain", "surface_principal_strain", "surface_rotation")
    assert choose_surface_measures(poisson=0.3) == (
        "surface_strain", "surface_principal_strain", "surface_normal_strain", "surface_equivalent_strain",
        "surface_rotation",
    )  # fmt: skip
    assert choose_surface_measures(["surface_strain_hencky"]) == ("surface_strain_hencky",)
    assert choose_surface_measures(["surface_strain"], "hencky") == ("surface_strain_hencky",)
    small = {n for n, m in SURFACE_MEASURES.items() if not m.finite}
    assert set(choose_surface_measures(["all"], poisson=0.3)) == small
    assert set(choose_surface_measures(["all"])) == {n for n in small if not SURFACE_MEASURES[n].needs_normal}
    for names, base, text in (
        (["equivalent_strain"], "small", "--poisson"),
        (["volumetric_strain"], "small", "no measure on surfaces is called 'volumetric_strain'"),
        (["strian"], "small", "Did you mean 'strain'"),
        (["strain"], "almansi", "no base on surfaces is called 'almansi'"),
    ):
        with pytest.raises(UsageError, match=text):
            choose_surface_measures(names, base)
    mesh = meshes.patch(ELEMENTS["tetra"])
    with pytest.raises(UsageError, match="fiction"):
        surface(mesh.result(u=0 * mesh.points), "strain", base="hencky", solve="linear")
    with pytest.raises(UsageError, match="between -1 and"):
        surface(mesh.result(u=0 * mesh.points), "strain", poisson=0.7)


def test_effective_poisson_ratio() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    pull = mesh.result(u=mesh.points * [1e-3, -NU * 1e-3, -NU * 1e-3])
    found = surface(pull, "equivalent_strain", poisson=NU, equivalent_poisson=NU).result.cell_data
    across = np.abs(found["surface_normal"][:, 0]) < 1e-9
    np.testing.assert_allclose(found["surface_equivalent_strain"][across], 1e-3, rtol=1e-12)
    plain = surface(pull, "equivalent_strain", poisson=NU).result.cell_data["surface_equivalent_strain"]
    np.testing.assert_allclose(plain[across], 867e-6, rtol=1e-3)
