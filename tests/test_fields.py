"""Measures on cells against closed forms."""

from __future__ import annotations

from typing import Literal

import numpy as np
import pytest

import meshes
from unturn import kinematics as kin
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.fields import CellFields, compute_fields
from unturn.measures import GEOMETRY, SMALL
from unturn.model import PlaneOptions, build_model

Location = Literal["centroid", "mean"]
SOLIDS = [name for name, row in ELEMENTS.items() if row.dim == 3]
QUADRATIC = [name for name in SOLIDS if ELEMENTS[name].order == 2]


def fields(mesh: meshes.Mesh, u: np.ndarray, *names: str, at: Location = "centroid") -> CellFields:
    return compute_fields(build_model(mesh.result(u=u)), list(names) or ["all"], at=at, diagnose=True)


def centroids(mesh: meshes.Mesh) -> np.ndarray:
    weights = mesh.element.shape_functions(mesh.element.centroid[None])[0]
    return np.einsum("n,cnx->cx", weights, mesh.points[mesh.cells])


@pytest.mark.source(
    "simple shear: Holzapfel 2000, section 2.4: e_xy = g/2, rotation -g/2 about z, equivalent g/sqrt 3"
)
@pytest.mark.parametrize("name", SOLIDS)
@pytest.mark.parametrize("at", ["centroid", "mean"])
def test_simple_shear(name: str, at: Location) -> None:
    mesh, g = meshes.patch(ELEMENTS[name]), 2e-3
    u = np.zeros(mesh.points.shape)
    u[:, 0] = g * mesh.points[:, 1]
    found = fields(mesh, u, at=at).arrays
    n, root = len(mesh.cells), np.sqrt(0.5)
    expected = {
        "strain": [0, 0, 0, g / 2, 0, 0],
        "rotation": [0, 0, -g / 2],
        "rotation_angle": g / 2,
        "equivalent_strain": g / np.sqrt(3),
        "principal_strain": [g / 2, 0, -g / 2],
        "max_shear_strain": g,
        "volumetric_strain": 0,
        "deviatoric_strain": [0, 0, 0, g / 2, 0, 0],
        "displacement_gradient": [0, g, 0, 0, 0, 0, 0, 0, 0],
    }
    for key, value in expected.items():
        np.testing.assert_allclose(
            found[key], np.broadcast_to(value, found[key].shape), atol=1e-15, err_msg=key
        )
    for k, direction in ((1, [root, root, 0]), (2, [0, 0, 1]), (3, [root, -root, 0])):
        np.testing.assert_allclose(found[f"principal_direction_{k}"], [direction] * n, atol=1e-10)
    U = np.array([[1, g / 2], [g / 2, 1 + g * g / 2]]) / np.sqrt(1 + g * g / 4)
    np.testing.assert_allclose(
        found["small_strain_error"], np.linalg.norm([[0, g / 2], [g / 2, 0]] - (U - np.eye(2))), rtol=2e-3
    )


@pytest.mark.source(
    "twist of a round shaft, Saint-Venant: Timoshenko and Goodier, article 101: shear tw r, rotation tw z"
)
@pytest.mark.parametrize("name", QUADRATIC)
def test_twist_of_a_round_shaft(name: str) -> None:
    # u = tw z (-y, x, 0) is quadratic: held exactly by an affine cell with a complete quadratic space
    mesh = meshes.affine_cell(ELEMENTS[name])
    tw = 1e-3
    x, y, z = mesh.points.T
    found = fields(mesh, tw * np.stack([-y * z, x * z, 0 * z], 1)).arrays
    cx, cy, cz = centroids(mesh).T
    zero = 0 * cx
    np.testing.assert_allclose(
        found["strain"], np.stack([zero, zero, zero, zero, tw * cx / 2, -tw * cy / 2], 1), atol=1e-15
    )
    np.testing.assert_allclose(
        found["rotation"], np.stack([-tw * cx / 2, -tw * cy / 2, tw * cz], 1), atol=1e-15
    )
    np.testing.assert_allclose(found["max_shear_strain"], tw * np.hypot(cx, cy), rtol=1e-11)
    np.testing.assert_allclose(found["equivalent_strain"], tw * np.hypot(cx, cy) / np.sqrt(3), rtol=1e-11)


@pytest.mark.source(
    "pure bending of a bar: Timoshenko and Goodier, article 102: e_xx = -y/R, anticlastic surface"
)
@pytest.mark.parametrize("name", QUADRATIC)
def test_pure_bending_with_its_anticlastic_curvature(name: str) -> None:
    mesh = meshes.affine_cell(ELEMENTS[name])
    R, nu = 50.0, 0.3
    x, y, z = mesh.points.T
    u = np.stack([-x * y, (x * x + nu * (y * y - z * z)) / 2, nu * y * z], 1) / R
    found = fields(mesh, u).arrays
    cx, cy, cz = centroids(mesh).T
    zero = 0 * cx
    expected = np.stack([-cy, nu * cy, nu * cy, zero, zero, zero], 1) / R
    np.testing.assert_allclose(found["strain"], expected, atol=1e-14)
    np.testing.assert_allclose(found["rotation"], np.stack([nu * cz, zero, cx], 1) / R, atol=1e-14)
    np.testing.assert_allclose(found["volumetric_strain"], -(1 - 2 * nu) * cy / R, atol=1e-14)


@pytest.mark.parametrize("name", SOLIDS)
def test_every_measure_is_that_of_the_gradient(name: str) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS[name]))
    u = np.random.default_rng(0).normal(size=mesh.points.shape) * 1e-2
    for at in ("centroid", "mean"):
        found = fields(mesh, u, at=at).arrays
        H = found["displacement_gradient"].reshape(-1, 3, 3)
        e = kin.strain(H)
        values, directions = kin.principal_strain(e, directions=True)
        same = {
            "strain": kin.tensor_to_components(e),
            "rotation": kin.rotation_vector(H),
            "rotation_angle": kin.rotation_angle(H),
            "equivalent_strain": kin.equivalent_strain(e),
            "principal_strain": values,
            "max_shear_strain": kin.max_shear_strain(e),
            "volumetric_strain": kin.volumetric_strain(e),
            "deviatoric_strain": kin.tensor_to_components(kin.deviatoric_strain(e)),
            "small_strain_error": kin.small_strain_error(H),
            **{f"principal_direction_{k + 1}": directions[:, k] for k in range(3)},
        }
        assert {*same, "displacement_gradient", *GEOMETRY} == {*SMALL, *GEOMETRY} == set(found)
        for key, value in same.items():
            np.testing.assert_allclose(found[key], value, rtol=1e-11, atol=1e-14, err_msg=key)


@pytest.mark.derived("equivalent strain with an effective Poisson ratio is 1.5/(1+nu) times the other form")
def test_effective_poisson_ratio() -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    u = mesh.points * [1e-3, -0.3e-3, -0.3e-3]
    model = build_model(mesh.result(u=u))
    given = compute_fields(model, ["equivalent_strain"], equivalent_poisson=0.3).arrays["equivalent_strain"]
    np.testing.assert_allclose(given, 1e-3, rtol=1e-12)
    np.testing.assert_allclose(
        compute_fields(model, ["equivalent_strain"]).arrays["equivalent_strain"], 867e-6, rtol=1e-3
    )


@pytest.mark.parametrize(
    "name", [n for n, row in ELEMENTS.items() if row.shape.name not in {"pixel", "voxel"}]
)
def test_volumes_of_a_patch_sum_to_the_whole(name: str) -> None:
    row = ELEMENTS[name]
    mesh = meshes.patch(row)
    whole = {1: np.sqrt(0.9**2 + 0.4**2 + 0.2**2), 2: 0.24 * 0.12, 3: 1.0}[row.dim]
    if row.shape.name == "wedge":
        whole = 0.24 * 0.12 * 0.12
    options = PlaneOptions("strain") if row.dim == 2 else None
    found = compute_fields(build_model(mesh.result(u=0 * mesh.points), plane=options), ["element_volume"])
    # a hexahedron with bent faces takes part of its neighbour's place in the cut into tetrahedra or pyramids
    assert found.arrays["element_volume"].sum() == pytest.approx(whole, rel=1e-12)


@pytest.mark.derived("det J of a tapered quad: 1 + a x at the Gauss points +- 1/sqrt 3")
def test_jacobian_ratio() -> None:
    points = np.array([[0, 0, 0], [2, 0.0, 0], [2, 1, 0], [0, 3, 0]])
    mesh = meshes.Mesh(points, np.arange(4)[None], ELEMENTS["quad"])
    found = compute_fields(build_model(mesh.result(u=0 * points)), ["jacobian_min_over_max"]).arrays
    low, high = 2 - 1 / np.sqrt(3), 2 + 1 / np.sqrt(3)
    np.testing.assert_allclose(found["jacobian_min_over_max"], low / high, rtol=1e-12)


def test_cell_order_is_that_of_the_file() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    u = np.sin(mesh.points * 3) * 1e-3
    straight = fields(mesh, u, "strain").arrays["strain"]
    # the second starts and ends like a range
    for order in (np.array([3, 0, 6, 2, 1, 4, 5]), np.array([0, 3, 2, 1, 5, 4, 6])):
        check_order(mesh, u, straight, order)


def check_order(mesh: meshes.Mesh, u: np.ndarray, straight: np.ndarray, order: np.ndarray) -> None:
    result = mesh._replace(cells=mesh.cells[order]).result(u=u)
    block = result.blocks[0]
    shuffled = type(result)(
        result.points, (type(block)(block.cell_type, block.connectivity, order),), result.point_data
    )
    found = compute_fields(build_model(shuffled), ["strain"]).arrays["strain"]
    np.testing.assert_array_equal(found, straight)


def test_threads_change_nothing() -> None:
    rng = np.random.default_rng(0)
    grid = np.stack(np.meshgrid(*[np.arange(25.0)] * 3, indexing="ij"), -1).reshape(-1, 3)
    k = np.arange(25**3).reshape(25, 25, 25)
    corners = [k[:-1, :-1, :-1], k[1:, :-1, :-1], k[1:, 1:, :-1], k[:-1, 1:, :-1],
               k[:-1, :-1, 1:], k[1:, :-1, 1:], k[1:, 1:, 1:], k[:-1, 1:, 1:]]  # fmt: skip
    cells = np.stack([c.reshape(-1) for c in corners], 1)
    mesh = meshes.Mesh(grid + rng.uniform(-0.1, 0.1, grid.shape), cells, ELEMENTS["hexahedron"])
    model = build_model(mesh.result(u=rng.normal(size=grid.shape) * 1e-3))
    one = compute_fields(model, ["all"], threads=1, diagnose=True)
    many = compute_fields(model, ["all"], threads=3, diagnose=True)
    for name, values in one.arrays.items():
        np.testing.assert_array_equal(values, many.arrays[name])
    assert one.diagnostics is not None
    assert many.diagnostics is not None
    np.testing.assert_array_equal(one.diagnostics.noise, many.diagnostics.noise)


@pytest.mark.derived(
    "noise floor: (res(u) + |H| res(X)) / smallest height, half a unit in the last place of float32"
)
def test_noise_floor_bounds_what_rounded_coordinates_do_to_the_gradient() -> None:
    base = meshes.patch(ELEMENTS["tetra"])
    points = base.points + 3.0 + 1e-4 * np.sin(50 * base.points[:, ::-1])
    u = 0.5 * points[:, [1, 2, 0]]  # large, so that what u itself is rounded to is far below
    exact = fields(base._replace(points=points), u, "displacement_gradient").arrays["displacement_gradient"]
    stored = fields(base._replace(points=points.astype(np.float32).astype(float)), u, "displacement_gradient")
    off = np.linalg.norm(stored.arrays["displacement_gradient"] - exact, axis=1)
    assert stored.diagnostics is not None
    assert (off < 4 * stored.diagnostics.noise).all()
    assert np.median(off) > stored.diagnostics.noise.min() / 30


@pytest.mark.derived(
    "noise floor: (res(u) + |H| res(X)) / smallest height, half a unit in the last place of float32"
)
def test_noise_floor_bounds_what_rounding_does_to_the_strain() -> None:
    rng = np.random.default_rng(0)
    base = meshes.patch(ELEMENTS["tetra"])
    points = base.points.astype(np.float32).astype(float)
    u = (5.0 + 1e-3 * rng.normal(size=points.shape)) * 1.0
    exact = fields(base._replace(points=points), u, "strain").arrays["strain"]
    stored = fields(base._replace(points=points), u.astype(np.float32).astype(float), "strain")
    assert stored.diagnostics is not None
    off = np.abs(stored.arrays["strain"] - exact).max(axis=1)
    assert (off < 4 * stored.diagnostics.noise).all()
    assert np.median(off) > stored.diagnostics.noise.min() / 30  # no floor that is out of reach


@pytest.mark.derived(
    "six decimals of a metre: half a micrometre at every node, whatever the displacement's size there"
)
@pytest.mark.parametrize("scale", [1.0, 1e-3])
def test_noise_floor_of_a_fixed_number_of_decimals(scale: float) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    u = np.round(1e-2 * np.sin(3 * mesh.points) ** 3, 6)
    found = compute_fields(build_model(mesh.result(u=u), displacement_scale=scale), ["strain"], diagnose=True)
    exact = fields(mesh, 1e-2 * scale * np.sin(3 * mesh.points) ** 3, "strain").arrays["strain"]
    off = np.abs(found.arrays["strain"] - exact).max(axis=1)
    assert found.diagnostics is not None
    assert (off < 6 * found.diagnostics.noise).all()  # twenty nodes add up
    assert ((found.diagnostics.noise > 0.5e-6 * scale) & (found.diagnostics.noise < 5e-6 * scale)).all()


def test_unknown_names_and_places_are_refused() -> None:
    mesh = meshes.affine_cell(ELEMENTS["tetra"])
    model = build_model(mesh.result(u=mesh.points))
    with pytest.raises(UsageError, match="Did you mean 'strain'"):
        compute_fields(model, ["strian"])
    with pytest.raises(UsageError, match="centroid, mean"):
        compute_fields(model, at="nodes")  # type: ignore[arg-type]
