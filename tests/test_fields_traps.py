"""What real files hold: values that are no numbers, cells without volume, collapsed, tangled or mirrored cells."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS
from unturn.fields import CellFields, compute_fields
from unturn.gradient import displacement_gradient
from unturn.model import PlaneOptions, build_model
from unturn.regions import find_regions
from unturn.result import CellBlock, Result
from unturn.statistics import statistics
from unturn.verdict import judge

# Derived: a linear field is exact on every sound cell, so H itself is what a cell must show, whatever lies beside it.
H = np.array([[2e-3, 5e-4, -1e-3], [-3e-4, 1e-3, 7e-4], [4e-4, -6e-4, -2e-3]])
PLACES = pytest.mark.parametrize("at", ["centroid", "mean"])


def computed(result: Result, at: Any = "centroid", **options: Any) -> CellFields:
    return compute_fields(build_model(result, **options), ["all"], at=at, diagnose=True)


def check(fields: CellFields, spoiled: list[int], reason: str, gradient: np.ndarray = H) -> None:
    """The spoiled cells are NaN in every array and counted under the reason, the others are right."""
    n = fields.model.result.n_cells
    sound = np.setdiff1d(np.arange(n), spoiled)
    found = fields.arrays["displacement_gradient"]
    np.testing.assert_allclose(
        found[sound], np.broadcast_to(gradient.reshape(9), (len(sound), 9)), atol=1e-13
    )
    assert fields.left_out[reason].tolist() == spoiled
    for name, values in fields.arrays.items():
        if name not in {"element_volume", "jacobian_min_over_max"}:
            assert np.isnan(values[spoiled]).all(), name
            assert np.isfinite(values[sound]).all(), name
    d = fields.diagnostics
    assert d is not None
    counted = statistics(fields.arrays["equivalent_strain"], d.volume, np.arange(n))
    assert counted.left_out == len(spoiled)
    region = find_regions(fields.model, d.dimension > 0)[0]
    assert judge(d, region, "unknown").level == "holds"


def linear(mesh: meshes.Mesh, gradient: np.ndarray = H) -> np.ndarray:
    return mesh.points @ gradient.T


@PLACES
@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize(
    "name", ["tetra", "tetra10", "hexahedron", "hexahedron20", "hexahedron27", "wedge15", "pyramid13"]
)
def test_displacement_that_is_no_number(name: str, bad: float, at: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    u = linear(mesh)
    u[mesh.cells[0, -1], 1] = bad
    with_node = np.flatnonzero((mesh.cells == mesh.cells[0, -1]).any(axis=1)).tolist()
    assert len(with_node) < len(mesh.cells)
    check(computed(mesh.result(u=u), at), with_node, "displacement not finite")


@PLACES
@pytest.mark.parametrize("name", ["triangle6", "quad8", "line3"])
def test_the_same_on_shells_and_lines(name: str, at: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    u = np.cross([0.01, 0.02, -0.01], mesh.points)
    u[mesh.cells[0, -1]] = np.nan
    fields = computed(mesh.result(u=u), at)
    spoiled = np.flatnonzero((mesh.cells == mesh.cells[0, -1]).any(axis=1))
    assert fields.left_out["displacement not finite"].tolist() == spoiled.tolist()
    strain = fields.arrays["strain"]
    assert np.isnan(strain[spoiled]).all()
    np.testing.assert_allclose(np.delete(strain, spoiled, axis=0), 0, atol=1e-14)


@PLACES
@pytest.mark.parametrize("wild", [np.nan, np.inf, 1e300, -1e30])
def test_nodes_of_no_cell(wild: float, at: str) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    points = np.concatenate([np.full((3, 3), wild), mesh.points, [[wild, 0, -wild]]])
    u = np.concatenate([np.full((3, 3), wild), linear(mesh), [[0, wild, 0]]])
    fields = computed(mesh._replace(points=points, cells=mesh.cells + 3).result(u=u), at)
    expected = np.broadcast_to(H.reshape(9), (len(mesh.cells), 9))
    np.testing.assert_allclose(fields.arrays["displacement_gradient"], expected, atol=1e-13)
    assert not fields.left_out


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_coordinates_that_are_no_number(bad: float) -> None:
    mesh = meshes.patch(ELEMENTS["tetra10"])
    points, u = mesh.points.copy(), linear(mesh)
    points[mesh.cells[5, 9]] = bad
    spoiled = np.flatnonzero((mesh.cells == mesh.cells[5, 9]).any(axis=1)).tolist()
    fields = computed(mesh._replace(points=points).result(u=u))
    counted = np.sort(np.concatenate(list(fields.left_out.values()))).tolist()
    assert counted == spoiled
    assert np.isnan(fields.arrays["strain"][spoiled]).all()
    assert np.isfinite(np.delete(fields.arrays["strain"], spoiled, axis=0)).all()


@PLACES
@pytest.mark.parametrize("name", ["tetra", "tetra10", "hexahedron", "hexahedron20", "wedge", "pyramid"])
def test_cells_without_volume(name: str, at: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    flat = mesh.points[mesh.cells[0]] * [1, 1, 0] + [0, 0, 9.0]
    point = np.broadcast_to([5.0, 5, 5], flat.shape)
    n, k = len(mesh.points), mesh.element.n_nodes
    points = np.concatenate([mesh.points, flat, point])
    cells = np.concatenate([mesh.cells, [range(n, n + k), range(n + k, n + 2 * k)]])
    fields = computed(mesh._replace(points=points, cells=cells).result(u=points @ H.T), at)
    check(fields, [len(cells) - 2, len(cells) - 1], "no volume")
    np.testing.assert_allclose(fields.arrays["element_volume"][-2:], 0, atol=1e-15)


COLLAPSED = {
    # Source: degenerate elements, Hughes, The Finite Element Method, section 3.6: repeated nodes of a brick
    "wedge": [0, 1, 2, 2, 4, 5, 6, 6],
    "wedge on its side": [0, 1, 2, 3, 4, 4, 7, 7],
    "pyramid": [0, 1, 2, 3, 4, 4, 4, 4],
    "tetrahedron": [0, 1, 2, 2, 4, 4, 4, 4],
}


@PLACES
@pytest.mark.parametrize("kind", COLLAPSED)
def test_collapsed_bricks_are_legal(kind: str, at: str) -> None:
    points = meshes.affine_cell(ELEMENTS["hexahedron"]).points
    points = points + 0.05 * np.sin(7 * points[:, ::-1])
    mesh = meshes.Mesh(points, np.array([COLLAPSED[kind], range(8)]), ELEMENTS["hexahedron"])
    fields = computed(mesh.result(u=linear(mesh)), at)
    np.testing.assert_allclose(fields.arrays["displacement_gradient"], [H.reshape(9)] * 2, atol=1e-13)
    assert not fields.left_out
    assert not fields.model.notes
    volume = fields.arrays["element_volume"][0]
    assert 0 < volume < fields.arrays["element_volume"][1]
    assert fields.arrays["jacobian_min_over_max"][0] > 0
    # det J is zero at the collapsed nodes and nowhere else
    row = ELEMENTS["hexahedron"]
    found = displacement_gradient(points, mesh.cells[:1], linear(mesh), "hexahedron", at=row.nodes)[0]
    repeated = [k for k, n in enumerate(COLLAPSED[kind]) if COLLAPSED[kind].count(n) > 1]
    nan = np.isnan(found).any(axis=(1, 2))
    assert set(np.flatnonzero(nan)) <= set(repeated)
    others = np.setdiff1d(np.arange(8), repeated)
    np.testing.assert_allclose(found[others], np.broadcast_to(H, (len(others), 3, 3)), atol=1e-12)


@pytest.mark.derived(
    "a pyramid made by collapsing a brick has the same field as the pyramid itself at its centroid"
)
def test_a_collapsed_quadrilateral_is_the_triangle() -> None:
    points = np.array([[0, 0, 0], [2, 0, 0], [1, 2.0, 0]])
    u = np.array([[0, 0, 0], [1e-3, 0, 0], [2e-3, -1e-3, 0]])
    quad = meshes.Mesh(points, np.array([[0, 1, 2, 2]]), ELEMENTS["quad"])
    triangle = meshes.Mesh(points, np.array([[0, 1, 2]]), ELEMENTS["triangle"])
    a, b = (computed(m.result(u=u), plane=PlaneOptions("strain")) for m in (quad, triangle))
    np.testing.assert_allclose(a.arrays["strain"], b.arrays["strain"], atol=1e-17)
    np.testing.assert_allclose(a.arrays["element_volume"], b.arrays["element_volume"], rtol=1e-14)


@PLACES
def test_a_tangled_brick_is_counted(at: str) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    cells = mesh.cells.copy()
    cells[4] = cells[4][[0, 1, 2, 3, 5, 4, 6, 7]]  # two corners of one side swapped
    check(computed(mesh._replace(cells=cells).result(u=linear(mesh)), at), [4], "tangled")


@PLACES
@pytest.mark.parametrize("measures", [["strain"], ["strain", "element_volume"]])
def test_tangled_is_found_whatever_is_asked_for(at: Any, measures: list[str]) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    cells = mesh.cells.copy()
    cells[4] = cells[4][[0, 1, 2, 3, 5, 4, 6, 7]]
    fields = compute_fields(build_model(mesh._replace(cells=cells).result(u=linear(mesh))), measures, at=at)
    assert fields.left_out["tangled"].tolist() == [4]
    assert np.isnan(fields.arrays["strain"][4]).all()


@PLACES
def test_mid_side_nodes_beyond_their_edges_tangle_a_cell(at: str) -> None:
    row = ELEMENTS["quad8"]
    points = np.pad(row.nodes, ((0, 0), (0, 1))).copy()
    far = points + np.array([5.0, 0, 0])
    points[4, 1], points[6, 1] = -0.6, 0.6  # both bowed inward: sound
    far[[4, 6], 0] += 1.3  # dx/dxi = 1 - 2.6 xi: negative at the right Gauss points
    mesh = meshes.Mesh(np.concatenate([points, far]), np.arange(16).reshape(2, 8), row)
    plane = H * [[1, 1, 0], [1, 1, 0], [0, 0, 0]]
    fields = computed(mesh.result(u=linear(mesh, plane)), at, plane=PlaneOptions("strain"))
    check(fields, [1], "tangled", plane)


@PLACES
def test_a_bow_tie_is_tangled(at: str) -> None:
    mesh = meshes.patch(ELEMENTS["quad"])
    cells = mesh.cells.copy()
    cells[2] = cells[2][[0, 1, 3, 2]]
    plane = H * [[1, 1, 0], [1, 1, 0], [0, 0, 0]]
    fields = computed(
        mesh._replace(cells=cells).result(u=linear(mesh, plane)), at, plane=PlaneOptions("strain")
    )
    check(fields, [2], "tangled", plane)


@PLACES
def test_a_quadrature_point_without_volume_is_counted(at: str) -> None:
    # det J vanishes in one whole plane of quadrature points: not sound, though the centroid is
    row = ELEMENTS["hexahedron"]
    g = 1 / np.sqrt(3)
    points = row.nodes.copy()
    points[:, 0] += row.nodes[:, 0] * row.nodes[:, 2] / g  # dx/dxi = 1 + zeta / g, zero at zeta = -g
    mesh = meshes.Mesh(points, np.arange(8)[None], row)
    fields = computed(mesh.result(u=linear(mesh)), at)
    left = [k for k, v in fields.left_out.items() if len(v)]
    values = fields.arrays["strain"][0]
    assert (left == [] and np.isfinite(values).all()) or (left == ["tangled"] and np.isnan(values).all())


@PLACES
@pytest.mark.parametrize("name", [n for n, row in ELEMENTS.items() if row.dim == 3])
def test_blocks_of_mirrored_cells(name: str, at: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    mesh = mesh._replace(points=mesh.points * [1, -1, 1])
    fields = computed(mesh.result(u=linear(mesh)), at)
    expected = np.broadcast_to(H.reshape(9), (len(mesh.cells), 9))
    np.testing.assert_allclose(fields.arrays["displacement_gradient"], expected, atol=1e-13)
    assert fields.mirrored == len(mesh.cells)
    assert not fields.left_out
    assert (fields.arrays["element_volume"] > 0).all()
    ratio = fields.arrays["jacobian_min_over_max"]
    assert ((ratio > 0) & (ratio <= 1 + 1e-12)).all()


@pytest.mark.parametrize("name", ["quad", "triangle6"])
def test_surfaces_have_no_wrong_side(name: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    mesh = mesh._replace(points=mesh.points * [1, -1, 1])
    plane = H * [[1, 1, 0], [1, 1, 0], [0, 0, 0]]
    fields = computed(mesh.result(u=linear(mesh, plane)), plane=PlaneOptions("strain"))
    assert not fields.left_out
    np.testing.assert_allclose(
        fields.arrays["displacement_gradient"], [plane.reshape(9)] * len(mesh.cells), atol=1e-15
    )


@PLACES
def test_cells_of_several_kinds_in_one_file(at: str) -> None:
    points = np.concatenate([meshes.CUBE[:8], [[0.5, 0.5, 2], [3, 0, 0], [3, 1, 0], [3, 0, 1], [3, 1, 1]]])
    blocks = (
        CellBlock("line", np.array([[9, 12]]), np.array([0])),
        CellBlock("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 7]]), np.array([3])),
        CellBlock("pyramid", np.array([[4, 5, 6, 7, 8]]), np.array([1])),
        CellBlock("wedge", np.array([[1, 9, 5, 2, 10, 6]]), np.array([4])),
        CellBlock("vertex", np.array([[0]]), np.array([2])),
    )
    fields = computed(Result(points, blocks, point_data={"u": points @ H.T}), at)
    found = fields.arrays["displacement_gradient"]
    np.testing.assert_allclose(found[[1, 3, 4]], [H.reshape(9)] * 3, atol=1e-14)
    assert np.isnan(found[2]).all()
    t = np.array([0, 1, 1]) / np.sqrt(2)
    np.testing.assert_allclose(found[0].reshape(3, 3) @ t, H @ t, atol=1e-15)
    assert fields.diagnostics is not None
    assert fields.diagnostics.dimension.tolist() == [1, 3, 0, 3, 3]


@PLACES
@pytest.mark.parametrize("name", ["tetra", "hexahedron20", "wedge"])
def test_nodes_duplicated_per_element(name: str, at: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    apart = mesh.points[mesh.cells].reshape(-1, 3)
    cells = np.arange(len(apart)).reshape(mesh.cells.shape)
    fields = computed(mesh._replace(points=apart, cells=cells).result(u=apart @ H.T), at)
    expected = np.broadcast_to(H.reshape(9), (len(cells), 9))
    np.testing.assert_allclose(fields.arrays["displacement_gradient"], expected, atol=1e-13)


@PLACES
def test_far_from_the_origin(at: str) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    points = np.round(mesh.points * 2**29) / 2**29  # more than a single holds
    u = np.round(points @ H.T * 2**40) / 2**40
    near = computed(mesh._replace(points=points).result(u=u), at)
    origin, shift = np.array([5e5, 4e6, -5e5]), np.array([64.0, 0, -32])
    far = computed(mesh._replace(points=points + origin).result(u=u + shift), at)
    for name in ("strain", "rotation", "element_volume"):
        np.testing.assert_allclose(far.arrays[name], near.arrays[name], rtol=1e-11, atol=1e-15, err_msg=name)
    assert near.diagnostics is not None
    assert far.diagnostics is not None
    assert (far.diagnostics.noise > 1e3 * near.diagnostics.noise).all()  # and the summary can say so


def test_six_components_and_three_scalars_give_the_same() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    u = linear(mesh)
    plain = computed(mesh.result(u=u)).arrays["strain"]
    with_rotations = np.concatenate([u, np.full(u.shape, 7.0)], axis=1)
    np.testing.assert_array_equal(computed(mesh.result(u=with_rotations)).arrays["strain"], plain)
    scalars = mesh.result(ux=u[:, 0], uy=u[:, 1], uz=u[:, 2])
    np.testing.assert_array_equal(computed(scalars).arrays["strain"], plain)


def test_scale_turns_units() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    scaled = computed(mesh.result(u=linear(mesh) * 1e3), displacement_scale=1e-3)
    np.testing.assert_allclose(scaled.arrays["displacement_gradient"][0], H.reshape(9), rtol=1e-12)


def test_the_input_is_left_as_it_was() -> None:
    mesh = meshes.patch(ELEMENTS["tetra10"])
    result = mesh.result(u=linear(mesh))
    before = [result.points.copy(), result.point_data["u"].copy(), mesh.cells.copy()]
    for array in (result.points, result.point_data["u"], mesh.cells):
        array.setflags(write=False)
    computed(result, "mean")
    for array, copy in zip((result.points, result.point_data["u"], mesh.cells), before):
        np.testing.assert_array_equal(array, copy)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_the_noise_floor_follows_the_stored_values(dtype: type) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS["hexahedron"]))
    u = (mesh.points @ H.T + 1e-3 * np.sin(mesh.points)).astype(dtype)
    d = computed(replace(mesh.result(u=u.astype(float)), points=mesh.points)).diagnostics
    assert d is not None
    scale = 2.0**-24 if dtype is np.float32 else 2.0**-53
    largest = np.abs(u[mesh.cells]).max()
    assert (d.noise < 40 * scale * largest).all()
    assert (d.noise > 0.1 * scale * largest).all()
