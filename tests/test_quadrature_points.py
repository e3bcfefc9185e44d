"""Every quadrature point of every element: weights, places, measures."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from unturn import io
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import UsageError
from unturn.fields import compute_fields
from unturn.frames import parse_frame
from unturn.gradient import displacement_gradient
from unturn.measures import MEASURES
from unturn.model import Model, PlaneOptions, build_model
from unturn.quadrature_points import quadrature_result
from unturn.result import CellBlock, Result
from unturn.rigid import take_out
from unturn.thermal import parse_thermal

# Derived: the points are those of the element's own rule, so their weights sum to the volume that `element_volume` has
# and a weighted mean of the gradient is `at="mean"`; values at a point are those of `displacement_gradient` there.

EVERY = [
    *ELEMENTS.values(),
    *(
        element(f.name, f.n_nodes(order), spacing)
        for f in FAMILIES.values()
        for order, spacing in ((2, "equal"), (3, "gll"))
    ),
    element("VTK_LAGRANGE_PYRAMID", 14),
]


def name_of(row: Element) -> str:
    return f"{row.name}-{row.n_nodes}"


def modelled(mesh: meshes.Mesh, seed: int = 0, **options: Any) -> Model:
    u = np.random.default_rng(seed).normal(size=mesh.points.shape) * 1e-3
    flat = np.ptp(mesh.points[:, 2]) == 0
    if flat:
        u[:, 2] = 0
    if flat and mesh.element.dim == 2:
        options.setdefault("plane", PlaneOptions("strain"))
    return build_model(mesh.result(u=u), **options)


def weighted(cloud: Result, name: str, n_cells: int) -> np.ndarray:
    """Sum over the points of each cell of weight times value."""
    values = cloud.point_data[name].reshape(cloud.n_points, -1)
    total = np.zeros((n_cells, values.shape[1]))
    np.add.at(total, cloud.point_data["cell"], cloud.point_data["weight"][:, None] * values)
    return total


@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_weights_and_means(row: Element) -> None:
    mesh = meshes.curved(meshes.patch(row))
    model = modelled(mesh)
    cloud = quadrature_result(model, ["strain", "rotation", "displacement_gradient"])
    n, q = len(mesh.cells), len(row.quadrature)
    data = cloud.point_data
    assert cloud.n_points == cloud.n_cells == n * q
    assert data["cell"].tolist() == np.repeat(np.arange(n), q).tolist()
    assert data["quadrature_point"].tolist() == np.tile(np.arange(q), n).tolist()
    assert (data["dimension"] == row.dim).all()
    mean = compute_fields(model, ["strain", "rotation", "element_volume"], at="mean").arrays
    volume = np.bincount(data["cell"], data["weight"])
    np.testing.assert_allclose(volume, mean["element_volume"], rtol=1e-13)
    for name in ("strain", "rotation"):
        found = weighted(cloud, name, n) / volume[:, None]
        np.testing.assert_allclose(found, mean[name], rtol=1e-11, atol=1e-14)
    assert model.blocks[0].row is row
    if row.dim == 3 and row is element(row.name, row.n_nodes):  # nodes at equal spacing
        H = displacement_gradient(mesh.points, mesh.cells, data_of(model), row.name, at=row.quadrature.points)
        np.testing.assert_allclose(data["displacement_gradient"], H.reshape(-1, 9), atol=1e-15)
    functions = row.shape_functions(row.quadrature.points)
    places = np.einsum("qa,nai->nqi", functions, mesh.points[mesh.cells]).reshape(-1, 3)
    np.testing.assert_allclose(cloud.points, places, atol=1e-14)
    moved = np.einsum("qa,nai->nqi", functions, data_of(model)[mesh.cells]).reshape(-1, 3)
    np.testing.assert_allclose(data["deformed_coordinates"], places + moved, atol=1e-14)
    assert not cloud.left_out


def data_of(model: Model) -> np.ndarray:
    return np.asarray(model.displacement.values)


@pytest.mark.source("linear field: constant gradient in every element (Hughes 2000, section 3.2)")
@pytest.mark.parametrize("base", ["small", "green-lagrange", "hencky"])
@pytest.mark.parametrize("name", ["tetra10", "hexahedron", "hexahedron20", "wedge15", "pyramid"])
def test_every_measure_of_a_linear_field(name: str, base: str) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[name]))
    H = np.array([[1.0, -3.0, 0.5], [2.0, -0.7, 4.0], [-1.5, 0.3, 0.9]]) * 1e-2
    model = build_model(mesh.result(u=mesh.points @ H.T))
    cloud = quadrature_result(model, ["all"], base=base)
    cells = compute_fields(model, ["all"], base=base).arrays
    own = {"cell", "quadrature_point", "dimension", "weight", "deformed_coordinates"}
    assert set(cloud.point_data) - own == set(cells) - {"element_volume", "jacobian_min_over_max"}
    for key in set(cloud.point_data) - own:
        values = cells[key][cloud.point_data["cell"]]
        np.testing.assert_allclose(cloud.point_data[key], values, atol=1e-10, err_msg=key)
        if values.ndim == 2:
            assert cloud.component_names["point", key] == MEASURES[key].components


def test_mixed_cells_in_the_order_of_the_file(tmp_path: Path) -> None:
    points = np.array([(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1),
                       (0.5, 0.5, 2), (3, 0, 0), (4, 0, 0), (4, 1, 0), (3, 1, 0)], dtype=float)  # fmt: skip
    blocks = (
        CellBlock("pyramid", np.array([[4, 5, 6, 7, 8]]), np.array([2])),
        CellBlock("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 7]]), np.array([0])),
        CellBlock("quad", np.array([[9, 10, 11, 12], [0, 1, 2, 3]]), np.array([1, 3])),
        CellBlock("vertex", np.array([[0]]), np.array([4])),
    )
    numbers = np.array([50, 40, 30, 20, 10])
    result = Result(points, blocks, {"u": points * 1e-3}, {"element_id": numbers})
    cloud = quadrature_result(build_model(result))
    data = cloud.point_data
    q = {0: 8, 1: 4, 2: len(ELEMENTS["pyramid"].quadrature)}
    # the quad below the hexahedron is its skin, the vertex has no gradient
    assert data["cell"].tolist() == [c for c, n in q.items() for _ in range(n)]
    assert data["element"].tolist() == numbers[data["cell"]].tolist()
    assert data["dimension"].tolist() == [3] * 8 + [2] * 4 + [3] * q[2]
    np.testing.assert_allclose(np.bincount(data["cell"], data["weight"]), [1, 1, 1 / 3], rtol=1e-14)
    path = tmp_path / "cloud.vtu"
    assert io.write(cloud, path) == ()
    again = io.read(path)
    assert [b.cell_type for b in again.blocks] == ["vertex"]
    assert again.n_cells == again.n_points == cloud.n_points
    np.testing.assert_array_equal(again.points, cloud.points)
    assert set(again.point_data) == set(data)
    for key, values in data.items():
        np.testing.assert_array_equal(again.point_data[key], values)
    assert again.component_names["point", "strain"] == ("XX", "YY", "ZZ", "XY", "YZ", "XZ")


@pytest.mark.source("Pappus: a ring of section A at radius r has the volume 2 pi r A; hoop strain u_r/r")
def test_axisymmetric() -> None:
    mesh = meshes.patch(ELEMENTS["quad8"])
    points = mesh.points + np.array([1.0, 0, 0])
    u = points * [1e-3, 0, 0]
    model = build_model(mesh._replace(points=points).result(u=u), plane=PlaneOptions("axisymmetric"))
    cloud = quadrature_result(model, ["strain"])
    assert cloud.point_data["weight"].sum() == pytest.approx(2 * np.pi * 1.12 * 0.24 * 0.12, rel=1e-12)
    expected = np.broadcast_to([1e-3, 0, 1e-3, 0, 0, 0], (cloud.n_points, 6))
    np.testing.assert_allclose(cloud.point_data["strain"], expected, atol=1e-15)


def test_frames_follow_the_point() -> None:
    # u_r = c r^2: e_rr = 2 c r, e_tt = c r at each point's own radius
    mesh = meshes.patch(ELEMENTS["hexahedron27"])
    points = mesh.points + np.array([1.0, 0.5, 0])
    r = np.hypot(points[:, 0], points[:, 1])
    model = build_model(mesh._replace(points=points).result(u=1e-3 * points * [1, 1, 0]))
    frame = parse_frame("cylindrical z", model.result)
    cloud = quadrature_result(
        model, ["strain", "displacement_gradient", "principal_direction_1"], frame=frame
    )
    expected = np.broadcast_to([1e-3, 1e-3, 0, 0, 0, 0], (cloud.n_points, 6))
    np.testing.assert_allclose(cloud.point_data["strain"], expected, atol=1e-14)
    assert cloud.component_names["point", "strain"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    twist = build_model(
        mesh._replace(points=points).result(
            u=1e-3 * np.stack([-points[:, 1] * points[:, 2], points[:, 0] * points[:, 2], 0 * r], 1)
        )
    )
    found = quadrature_result(twist, ["strain"], frame=frame)
    radius = np.hypot(found.points[:, 0], found.points[:, 1])
    np.testing.assert_allclose(found.point_data["strain"][:, 4], 0.5e-3 * radius, rtol=1e-9)
    with pytest.raises(UsageError, match="surface cells"):
        quadrature_result(model, ["strain"], frame=parse_frame("surface", model.result))


def test_local_axes_of_surfaces() -> None:
    mesh = meshes.patch(ELEMENTS["quad9"])
    bent = mesh._replace(
        points=mesh.points + np.stack([0 * mesh.points[:, 0]] * 2 + [mesh.points[:, 0] ** 2], 1)
    )
    model = build_model(bent.result(u=bent.points * 1e-3))
    names = ["strain", "surface_normal"]
    cloud = quadrature_result(model, names, frame=parse_frame("surface", model.result))
    expected = np.broadcast_to([1e-3, 1e-3, 0, 0, 0, 0], (cloud.n_points, 6))
    np.testing.assert_allclose(cloud.point_data["strain"], expected, atol=1e-14)
    slope = np.stack([-2 * cloud.points[:, 0], 0 * cloud.points[:, 0], np.ones(cloud.n_points)], 1)
    normal = slope / np.linalg.norm(slope, axis=1, keepdims=True)
    np.testing.assert_allclose(cloud.point_data["surface_normal"], normal, atol=1e-12)


@pytest.mark.source(
    "free thermal strain alpha (T - T0): Timoshenko and Goodier, Theory of Elasticity, chapter 13"
)
def test_free_strain_is_taken_at_the_point() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    result = mesh.result(u=mesh.points * 1e-3, T=mesh.points[:, 0] * 100.0)
    model = build_model(result, displacement="u")
    thermal = parse_thermal(result, "12e-6", "T", 20.0)
    cloud = quadrature_result(model, ["mechanical_strain"], thermal=thermal)
    expected = 1e-3 - 12e-6 * (100.0 * cloud.points[:, 0] - 20.0)
    np.testing.assert_allclose(
        cloud.point_data["mechanical_strain"][:, :3], expected[:, None] * np.ones(3), atol=1e-15
    )


def test_rigid_motion_taken_out_does_not_move_the_points() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    u = mesh.points * [1e-3, 0, 0] + np.cross([0, 0, 0.4], mesh.points) + [7.0, 0, 0]
    model = build_model(mesh.result(u=u))
    everything = np.arange(len(mesh.cells))
    still, _ = take_out(model, [("whole", everything, "whole", everything)], "linear", None)
    a, b = quadrature_result(model, ["rotation"]), quadrature_result(still, ["rotation"])
    np.testing.assert_allclose(a.point_data["rotation"][:, 2], 0.4, atol=1e-12)
    np.testing.assert_allclose(b.point_data["rotation"], 0, atol=1e-12)
    np.testing.assert_array_equal(a.points, b.points)
    np.testing.assert_array_equal(a.point_data["deformed_coordinates"], b.point_data["deformed_coordinates"])
    shifted = a.points + a.points * [1e-3, 0, 0] + np.cross([0, 0, 0.4], a.points) + [7.0, 0, 0]
    np.testing.assert_allclose(a.point_data["deformed_coordinates"], shifted, atol=1e-13)


@pytest.mark.source(
    "degenerate elements, Hughes 2000, The Finite Element Method, section 3.6: repeated nodes of a brick"
)
@pytest.mark.parametrize(
    "nodes", [[0, 1, 2, 2, 4, 5, 6, 6], [0, 1, 2, 3, 4, 4, 4, 4], [0, 1, 2, 2, 4, 4, 4, 4]]
)
def test_collapsed_bricks(nodes: list[int]) -> None:
    points = meshes.affine_cell(ELEMENTS["hexahedron"]).points
    mesh = meshes.Mesh(points, np.array([nodes]), ELEMENTS["hexahedron"])
    model = build_model(mesh.result(u=points * [1e-3, -2e-3, 0]))
    cloud = quadrature_result(model, ["strain"])
    np.testing.assert_allclose(cloud.point_data["strain"], [[1e-3, -2e-3, 0, 0, 0, 0]] * 8, atol=1e-15)
    volume = compute_fields(model, ["element_volume"]).arrays["element_volume"]
    assert cloud.point_data["weight"].sum() == pytest.approx(float(volume[0]), rel=1e-13)


def test_nodes_repeated_for_every_cell() -> None:
    mesh = meshes.patch(ELEMENTS["tetra10"])
    model = modelled(mesh)
    u = data_of(model)
    apart = mesh._replace(
        points=mesh.points[mesh.cells].reshape(-1, 3),
        cells=np.arange(mesh.cells.size).reshape(mesh.cells.shape),
    )
    twin = build_model(apart.result(u=u[mesh.cells].reshape(-1, 3)))
    for key, values in quadrature_result(model).point_data.items():
        np.testing.assert_array_equal(quadrature_result(twin).point_data[key], values)


def test_cells_that_are_left_out_and_cells_without_values() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    result = replace(mesh.result(u=mesh.points * 1e-3), cell_data={"alive": np.array([1, 0, 1, 1, 1, 1, 1])})
    cloud = quadrature_result(build_model(result, alive="alive"))
    assert cloud.n_points == 6 * 8
    assert 1 not in cloud.point_data["cell"]
    # tangled: points stay, without weight and values
    points = mesh.points.copy()
    points[[8, 9]] = points[[9, 8]]
    u = points * 1e-3
    u[7] = np.nan
    model = build_model(mesh._replace(points=points).result(u=u))
    cloud = quadrature_result(model)
    cells = compute_fields(model, ["strain", "element_volume"])
    assert {r: np.unique(cloud.point_data["cell"][p]).tolist() for r, p in cloud.left_out.items()} == {
        r: c.tolist() for r, c in cells.left_out.items()
    }
    assert set(cells.left_out) == {"tangled", "displacement not finite"}
    lost = np.isnan(cloud.point_data["strain"]).any(axis=1)
    assert (
        np.unique(cloud.point_data["cell"][lost]).tolist()
        == np.flatnonzero(np.isnan(cells.arrays["strain"]).any(axis=1)).tolist()
    )
    volume = np.bincount(cloud.point_data["cell"], cloud.point_data["weight"])
    np.testing.assert_allclose(volume, cells.arrays["element_volume"], rtol=1e-13)


def test_what_is_refused() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    model = modelled(mesh)
    with pytest.raises(UsageError, match="element_volume belongs to a cell"):
        quadrature_result(model, ["element_volume"])
    with pytest.raises(UsageError, match="no measure is called"):
        quadrature_result(model, ["strian"])
    plate = meshes.patch(ELEMENTS["quad"])
    with pytest.raises(UsageError, match="--plane strain"):
        quadrature_result(build_model(plate.result(u=0 * plate.points)), ["equivalent_strain"])


def test_threads_change_nothing() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    many = mesh._replace(cells=np.tile(mesh.cells, (300, 1)))
    model = modelled(many)
    one, two = (quadrature_result(model, ["all"], threads=t).point_data for t in (1, 2))
    for key, values in one.items():
        np.testing.assert_array_equal(values, two[key])
