"""Measures at nodes where the gradient is known: every measure, frames, plane meshes, heat, zero steps, borders."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.linalg import logm, polar

import meshes
from recovery_meshes import block
from strategies import axis_angle
from unturn import CellBlock, Result, UsageError, kinematics, strain
from unturn.elements import ELEMENTS
from unturn.kinematics._finite import BASES
from unturn.measures import MEASURES, SMALL
from unturn.recovery import METHODS

Floats = np.ndarray
ALL = [name for name, m in MEASURES.items() if not m.mechanical]
TENSORS = {
    "": kinematics.strain,
    "_green_lagrange": kinematics.green_lagrange_strain,
    "_hencky": kinematics.hencky_strain,
    "_biot": kinematics.biot_strain,
    "_almansi": kinematics.almansi_strain,
}
TURN = axis_angle([0.6, 0.0, 0.8], 0.9) + np.eye(3)


def quadratic(
    x: Floats, size: float = 0.05, dim: int = 3, turn: Floats | None = None
) -> tuple[Floats, Floats]:
    """A displacement `(n, 3)` that is quadratic in the place, and its gradient `(n, 3, 3)`, turned as a whole."""
    rng = np.random.default_rng(3)
    A, B = rng.normal(size=(3, 3)), rng.normal(size=(3, 3, 3))
    B = B + B.swapaxes(1, 2)
    A[dim:] = A[:, dim:] = B[dim:] = B[:, dim:] = B[:, :, dim:] = 0.0
    u = size * (x @ A.T + 0.5 * np.einsum("ijk,nj,nk->ni", B, x, x))
    H = size * (A + np.einsum("ijk,nk->nij", B, x))
    if turn is None:
        return u, H
    return (x + u) @ turn.T - x, turn @ (np.eye(3) + H) - np.eye(3)


def truth(H: Floats) -> dict[str, Floats]:
    """Every measure but the directions from exact gradients `(n, 3, 3)`."""
    k = kinematics
    found: dict[str, Floats] = {
        "rotation": k.rotation_vector(H),
        "rotation_angle": k.rotation_angle(H),
        "displacement_gradient": H.reshape(-1, 9),
        "small_strain_error": k.small_strain_error(H),
        "finite_rotation": k.finite_rotation(H),
        "finite_rotation_angle": np.linalg.norm(k.finite_rotation(H), axis=1),
        "det_f": k.det_f(H),
    }
    for suffix, tensor in TENSORS.items():
        e = tensor(H)
        found |= {
            f"strain{suffix}": k.tensor_to_components(e),
            f"equivalent_strain{suffix}": k.equivalent_strain(e),
            f"principal_strain{suffix}": k.principal_strain(e),
            f"max_shear_strain{suffix}": k.max_shear_strain(e),
            f"volumetric_strain{suffix}": k.volumetric_strain(e),
            f"deviatoric_strain{suffix}": k.tensor_to_components(k.deviatoric_strain(e)),
        }
    return found


@pytest.mark.source(
    "Zienkiewicz and Zhu 1992: exact where the gradient at the accurate points is linear in the place"
)
@pytest.mark.parametrize("turn", [None, TURN], ids=["straight", "turned"])
@pytest.mark.parametrize("name", ["tetra10", "hexahedron27"])
def test_every_measure_of_a_quadratic_field(name: str, turn: Floats | None) -> None:
    mesh = block(ELEMENTS[name], 3, 0.1)
    u, H = quadratic(mesh.points, turn=turn)
    found = strain(mesh.result(u=u), at="nodes", measures=ALL, solve="nonlinear")
    expected = truth(H)
    for key in ALL:
        values = found.point_data[key]
        assert values.dtype == np.float64
        assert values.shape == (
            len(u),
            *([len(MEASURES[key].components)] if MEASURES[key].components else []),
        )
        assert found.component_names.get(("point", key), ()) == MEASURES[key].components
        if not key.startswith("principal_direction"):
            np.testing.assert_allclose(values, expected[key], atol=2e-10, err_msg=key)
    for suffix, tensor in TENSORS.items():
        e = tensor(H)
        for k in range(3):
            n = found.point_data[f"principal_direction_{k + 1}{suffix}"]
            np.testing.assert_allclose(np.linalg.norm(n, axis=1), 1.0, rtol=1e-12)
            left = np.einsum("nij,nj->ni", e, n) - expected[f"principal_strain{suffix}"][:, [k]] * n
            assert np.abs(left).max() < 1e-9
    assert set(found.point_data) == {"u", *ALL}
    assert not found.cell_data


@pytest.mark.source("SciPy: polar decomposition and matrix logarithm of the exact gradient")
def test_finite_measures_against_matrix_functions() -> None:
    mesh = block(ELEMENTS["tetra10"], 3, 0.1)
    u, H = quadratic(mesh.points, turn=TURN)
    found = strain(mesh.result(u=u), at="nodes", base="hencky", solve="nonlinear").point_data
    for node in range(0, len(u), 41):
        R, U = polar(np.eye(3) + H[node])
        e = logm(U).real
        pairs = [(0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2)]
        np.testing.assert_allclose(found["strain_hencky"][node], [e[p] for p in pairs], atol=1e-9)
        vector = found["finite_rotation"][node]
        np.testing.assert_allclose(
            axis_angle(vector / np.linalg.norm(vector), np.linalg.norm(vector)) + np.eye(3), R, atol=1e-9
        )


@pytest.mark.derived("u = H X: every method gives H at every node of every element")
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("name", ["tetra", "wedge15", "pyramid13", "hexahedron20", "voxel"])
def test_a_linear_field_by_every_method(name: str, method: Any) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    H = 0.05 * np.random.default_rng(1).normal(size=(3, 3))
    found = strain(mesh.result(u=mesh.points @ H.T), at="nodes", recovery=method, measures=ALL).point_data
    for key, value in truth(np.tile(H, (len(mesh.points), 1, 1))).items():
        np.testing.assert_allclose(found[key], value, atol=1e-12, err_msg=key)


def test_all_has_no_measure_of_cells() -> None:
    """`all` is every small measure that has a value at a node; asked by name, a measure of cells is refused."""
    # Source: the meaning of `all` that the quadrature points have too.
    mesh = meshes.patch(ELEMENTS["tetra"])
    result = mesh.result(u=1e-3 * mesh.points)
    assert set(strain(result, at="nodes", measures=["all"]).point_data) == {"u", *SMALL}
    assert set(SMALL) <= set(strain(result, at="quadrature", measures=["all"]).point_data)
    for at in ("nodes", "quadrature"):
        with pytest.raises(UsageError, match="element_volume belongs to"):
            strain(result, at=at, measures=["all", "element_volume"])  # type: ignore[arg-type]


@pytest.mark.derived("components in the frame are Q e Qt with Q = (radial, hoop, axial) at the node itself")
def test_a_cylindrical_frame_at_nodes() -> None:
    mesh = block(ELEMENTS["hexahedron27"], 2)
    center, axis = np.array([0.5, 0.5, 0.0]), np.array([0.0, 0.0, 1.0])
    u, H = quadratic(mesh.points)
    found = strain(mesh.result(u=u), at="nodes", measures=["strain", "rotation", "displacement_gradient",
                   "principal_strain", "principal_direction_1"], frame="cylindrical z through 0.5,0.5,0")  # fmt: skip
    arm = (mesh.points - center) * [1, 1, 0]
    radius = np.linalg.norm(arm, axis=1)
    off = radius > 1e-9
    assert 0 < (~off).sum() < 10
    radial = arm[off] / radius[off, None]
    Q = np.stack([radial, np.cross(axis, radial), np.tile(axis, (len(radial), 1))], axis=1)
    turned = Q @ H[off] @ Q.swapaxes(1, 2)
    np.testing.assert_allclose(
        found.point_data["displacement_gradient"][off], turned.reshape(-1, 9), atol=1e-11
    )
    e = kinematics.tensor_to_components(kinematics.strain(turned))
    np.testing.assert_allclose(found.point_data["strain"][off], e, atol=1e-11)
    vector = np.einsum("nij,nj->ni", Q, kinematics.rotation_vector(H[off]))
    np.testing.assert_allclose(found.point_data["rotation"][off], vector, atol=1e-11)
    assert np.isnan(found.point_data["strain"][~off, 0]).all()  # no radial direction on the axis
    principal = kinematics.principal_strain(kinematics.strain(H))
    np.testing.assert_allclose(found.point_data["principal_strain"], principal, atol=1e-11)
    assert found.component_names["point", "strain"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    assert found.component_names["point", "rotation"] == ("R", "T", "Z")
    assert found.component_names["point", "principal_direction_1"] == ("X", "Y", "Z")


@pytest.mark.derived(
    "plane strain: nothing across; plane stress: e_zz = -nu/(1-nu) (e_xx + e_yy), finite its logarithm"
)
@pytest.mark.parametrize("turn", [None, axis_angle([0, 0, 1.0], 0.7) + np.eye(3)], ids=["straight", "turned"])
@pytest.mark.parametrize("plane", ["strain", "stress"])
def test_plane_meshes(plane: Any, turn: Floats | None) -> None:
    mesh = block(ELEMENTS["triangle6"], 4, 0.1)
    u, H = quadratic(mesh.points, dim=2, turn=turn)
    nu, ratio = 0.3, 0.3 / 0.7
    finite = H.copy()
    if plane == "stress":
        H[:, 2, 2] = -ratio * (H[:, 0, 0] + H[:, 1, 1])
        area = np.linalg.det(np.eye(2) + H[:, :2, :2])
        finite[:, 2, 2] = area**-ratio - 1
    options: dict[str, Any] = {
        "plane": plane,
        "poisson": nu if plane == "stress" else None,
        "solve": "nonlinear",
    }
    found = strain(mesh.result(u=u), displacement="u", at="nodes", measures=ALL, **options).point_data
    small, large = truth(H), truth(finite)
    for key in small:
        expected = large[key] if MEASURES[key].finite or key == "small_strain_error" else small[key]
        np.testing.assert_allclose(found[key], expected, atol=1e-10, err_msg=key)


@pytest.mark.derived("a ring under u_r = a r + b r^2: hoop strain u_r/r = a + b r, du_r/dr = a + 2 b r")
def test_an_axisymmetric_mesh() -> None:
    mesh = block(ELEMENTS["quad9"], 3)
    mesh = mesh._replace(points=mesh.points * [0.5, 1, 0] + [0.2, 0, 0])
    r, a, b = mesh.points[:, 0], 1e-3, 2e-3
    u = np.stack([a * r + b * r**2, 0.5e-3 * mesh.points[:, 1], 0 * r], axis=1)
    found = strain(
        mesh.result(u=u), at="nodes", measures=["strain", "volumetric_strain"], plane="axisymmetric"
    ).point_data
    expected = np.stack([a + 2 * b * r, 0.5e-3 + 0 * r, a + b * r, 0 * r, 0 * r, 0 * r], axis=1)
    np.testing.assert_allclose(found["strain"], expected, atol=1e-12)
    np.testing.assert_allclose(found["volumetric_strain"], expected[:, :3].sum(axis=1), atol=1e-12)


@pytest.mark.derived("an unstated third direction leaves NaN across and the plane as it is")
def test_a_plane_mesh_whose_third_direction_is_not_stated() -> None:
    mesh = block(ELEMENTS["triangle6"], 4, 0.1)
    u, H = quadratic(mesh.points, dim=2)
    found = strain(mesh.result(u=u), displacement="u", at="nodes", measures=["strain", "rotation"]).point_data
    e = kinematics.tensor_to_components(kinematics.strain(H))
    np.testing.assert_allclose(found["strain"][:, [0, 1, 3]], e[:, [0, 1, 3]], atol=1e-11)
    assert np.isnan(found["strain"][:, 2]).all()
    np.testing.assert_allclose(found["rotation"], kinematics.rotation_vector(H), atol=1e-11)


ALPHA, T0 = 12e-6, 20.0
HEAT: dict[str, Any] = {"temperature": "T", "reference_temperature": T0}
HOT = ["mechanical_strain", "equivalent_strain_mechanical", "principal_strain_mechanical", "max_shear_strain_mechanical",
       "volumetric_strain_mechanical", "deviatoric_strain_mechanical"]  # fmt: skip


@pytest.mark.source(
    "Timoshenko and Goodier, Theory of Elasticity, chapter 13: a linear temperature strains a free body without stress"
)
@pytest.mark.parametrize(
    ("name", "options"),
    [("tetra10", {}), ("hexahedron27", {}), ("quad9", {"plane": "stress", "poisson": 0.3})],
)
def test_free_expansion_leaves_no_mechanical_strain_at_nodes(name: str, options: dict[str, Any]) -> None:
    mesh = block(ELEMENTS[name], 3, 0.1)
    x = mesh.points
    b = np.array([30.0, 50.0, 20.0]) * (np.ptp(x, axis=0) > 0)
    u = ALPHA * (x * (x @ b)[:, None] - 0.5 * (x**2).sum(axis=1)[:, None] * b)
    result = mesh.result(u=u, T=T0 + x @ b)
    found = strain(
        result,
        displacement="u",
        at="nodes",
        measures=["strain", *HOT],
        thermal_expansion=ALPHA,
        **HEAT,
        **options,
    ).point_data
    for key in HOT:
        assert np.abs(found[key]).max() < 1e-9 * ALPHA * 50, key
    np.testing.assert_allclose(found["strain"][:, :3], np.tile(ALPHA * (x @ b)[:, None], (1, 3)), atol=1e-14)


def two_parts(
    left: float, right: float, name: str = "hexahedron", n: int = 4, seam: float = 0.5
) -> tuple[Result, Floats]:
    """A bar in x of two parts with uniform strains of their own, border at x = `seam`; and which nodes lie on it."""
    mesh = block(ELEMENTS[name], n)
    points = mesh.points.copy()
    points[:, 0] = np.interp(points[:, 0], [0, 0.5, 1], [0, seam, 1])
    x = points[:, 0]
    u = np.zeros_like(points)
    u[:, 0] = np.where(x <= seam, left * x, left * seam + right * (x - seam))
    part = (points[mesh.cells][:, :, 0].mean(axis=1) > seam).astype(np.int32) + 1
    result = (
        mesh._replace(points=points)
        .result(u=u, T=np.full(len(x), T0 + 100))
        .with_arrays(cell_data={"part": part})
    )
    return result, np.abs(x - seam) < 1e-9


@pytest.mark.derived("the part with more volume at a node of the border is the one with the longer bricks")
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("seam", "written"), [(0.6, 1e-3), (0.4, 5e-3)])
def test_a_border_shows_the_dominant_part(seam: float, written: float, method: Any) -> None:
    result, border = two_parts(1e-3, 5e-3, seam=seam)
    e = strain(result, at="nodes", displacement="u", recovery=method).point_data["strain"][:, 0]
    x = result.points[:, 0]
    np.testing.assert_allclose(e[border], written, rtol=1e-9)
    np.testing.assert_allclose(e[~border & (x < seam)], 1e-3, rtol=1e-9)
    np.testing.assert_allclose(e[~border & (x > seam)], 5e-3, rtol=1e-9)


@pytest.mark.derived(
    "the free strain at a node of the border is that of the part whose strain is written there"
)
@pytest.mark.parametrize("seam", [0.6, 0.4])
def test_each_part_expands_by_its_own_coefficient_on_the_border(seam: float) -> None:
    left, right = 12e-6, 23e-6
    result, border = two_parts(left * 100, right * 100, seam=seam)
    found = strain(result, at="nodes", displacement="u", measures=["mechanical_strain"],
                   thermal_expansion=f"part=1:{left};part=2:{right}", **HEAT).point_data["mechanical_strain"]  # fmt: skip
    assert border.any()
    np.testing.assert_allclose(found[:, 0], 0.0, atol=1e-12)


@pytest.mark.parametrize(
    ("expansion", "kind", "said"),
    [(f"{ALPHA}", "cell", "temperature at nodes"), ("1e-5,2e-5,3e-5", "point", "one expansion coefficient")],
)
def test_heat_that_nodes_cannot_take(expansion: str, kind: str, said: str) -> None:
    # Source: the conventions of the project; a value on cells is not one at nodes.
    mesh = meshes.patch(ELEMENTS["tetra10"])
    result = mesh.result(u=1e-3 * mesh.points)
    n = result.n_cells if kind == "cell" else result.n_points
    data = {"T": np.full(n, 100.0)}
    result = result.with_arrays(cell_data=data) if kind == "cell" else result.with_arrays(point_data=data)
    with pytest.raises(UsageError, match=said):
        strain(result, at="nodes", displacement="u", thermal_expansion=expansion, **HEAT)


def dome() -> meshes.Mesh:
    mesh = block(ELEMENTS["triangle6"], 3)
    x, y = mesh.points[:, 0], mesh.points[:, 1]
    return mesh._replace(points=np.stack([x, y, 0.2 * x * (1 - x)], axis=1))


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"base": "hencky"}, "of surfaces and lines in space is not recovered at nodes"),
        (
            {"thermal_expansion": ALPHA, **HEAT},
            "mechanical_strain of surfaces and lines in space is not recovered",
        ),
        ({"frame": "surface"}, "is given on cells"),
        ({"measures": ["surface_normal"]}, "belongs to cells"),
    ],
)
def test_what_surfaces_in_space_do_not_have_at_nodes(options: dict[str, Any], said: str) -> None:
    # Source: the conventions of the project: the axes of a surface are those of its cells.
    mesh = dome()
    result = mesh.result(u=1e-3 * mesh.points, T=np.full(len(mesh.points), 100.0))
    with pytest.raises(UsageError, match=said):
        strain(result, at="nodes", displacement="u", **options)


@pytest.mark.derived("small: u - u_N; finite: F F_N^-1; both uniform, so the same at every node")
@pytest.mark.parametrize(
    "measures", [["strain", "rotation", "strain_hencky", "det_f"], ["strain"], ["strain_hencky", "det_f"]]
)
def test_a_zero_step(measures: list[str]) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    x = mesh.points
    first, second = (
        np.eye(3) + s * np.random.default_rng(k).normal(size=(3, 3)) for k, s in ((4, 0.1), (5, 0.2))
    )
    second = TURN @ second
    zero, now = (mesh.result(u=x @ (F - np.eye(3)).T) for F in (first, second))
    found = strain(now, zero=zero, at="nodes", measures=measures, solve="nonlinear").point_data
    small = truth((second - first)[None])
    finite = truth((second @ np.linalg.inv(first) - np.eye(3))[None])
    assert set(found) == {"u", *measures}
    for key in measures:
        expected = (finite if MEASURES[key].finite else small)[key]
        np.testing.assert_allclose(
            found[key], np.broadcast_to(expected, found[key].shape), atol=1e-11, err_msg=key
        )


@pytest.mark.derived(
    "rigid motion changes no strain of a linear solve, and leaves the rotation against the mean turn"
)
def test_rigid_motion_taken_out() -> None:
    mesh = block(ELEMENTS["tetra10"], 3, 0.1)
    u, H = quadratic(mesh.points, 1e-3)
    theta = np.array([0.02, -0.01, 0.03])
    moved = u + np.cross(theta, mesh.points) + [0.1, 0.2, 0.3]
    found = strain(mesh.result(u=moved), at="nodes", solve="linear", remove_rigid="whole")
    alone = strain(mesh.result(u=u), at="nodes", solve="linear", remove_rigid="whole")
    e = kinematics.tensor_to_components(kinematics.strain(H))
    np.testing.assert_allclose(found.point_data["strain"], e, atol=1e-11)
    np.testing.assert_allclose(found.point_data["rotation"], alone.point_data["rotation"], atol=1e-11)
    turn = found.field_data["rigid_rotation"] - alone.field_data["rigid_rotation"]
    np.testing.assert_allclose(turn, theta[None], atol=1e-12)


@pytest.mark.derived("a pure turn of a nonlinear solve, taken out, leaves nothing")
def test_a_turn_taken_out_leaves_nothing() -> None:
    mesh = block(ELEMENTS["hexahedron"], 2)
    result = mesh.result(u=mesh.points @ (TURN - np.eye(3)).T)
    found = strain(result, at="nodes", solve="nonlinear", remove_rigid="whole", measures=ALL).point_data
    for key in ("strain", "rotation", "strain_hencky", "finite_rotation", "small_strain_error"):
        assert np.abs(found[key]).max() < 1e-12, key


def test_nodes_of_no_computed_cell_are_nan_and_the_rest_is_kept() -> None:
    """Points without cells, of deleted cells and of cells with an unknown displacement get NaN in every array."""
    # Source: the conventions of the project: NaN where a value cannot be computed, nothing lost.
    mesh = block(ELEMENTS["hexahedron"], 3)
    points = np.concatenate([mesh.points, [[5.0, 5, 5], [np.nan] * 3]])
    u = np.concatenate([1e-3 * mesh.points, np.full((2, 3), np.nan)])
    alive = np.ones(27, dtype=np.int8)
    alive[mesh.points[mesh.cells].mean(axis=1)[:, 0] > 0.7] = 0
    block_ = CellBlock("hexahedron", mesh.cells, np.arange(27))
    data = {"u": u, "id": np.arange(len(u), dtype=np.int16), "old": np.ones(len(u), dtype=np.float32)}
    result = Result(points, (block_,), data, {"alive": alive})
    found = strain(result, at="nodes", displacement="u", alive="alive", measures=ALL)
    lost = np.append(mesh.points[:, 0] > 0.7, [True, True])
    for key in ALL:
        values = found.point_data[key].reshape(len(u), -1)
        assert np.isnan(values[lost]).all(), key
        assert np.isfinite(values[~lost]).all(), key
    np.testing.assert_allclose(found.point_data["strain"][~lost, :3], 1e-3, rtol=1e-10)
    for key, old in data.items():
        assert found.point_data[key].dtype == old.dtype
        np.testing.assert_array_equal(found.point_data[key], old)
    assert found.cell_data["alive"] is result.cell_data["alive"]


def test_arrays_that_are_there_already() -> None:
    """A point array of the same name stops it; a cell array of that name does not; prefix and overwrite go on."""
    # Source: the conventions of the project: nothing is overwritten unasked.
    mesh = meshes.patch(ELEMENTS["tetra"])
    n, m = len(mesh.points), len(mesh.cells)
    result = mesh.result(u=1e-3 * mesh.points).with_arrays(cell_data={"rotation": np.ones(m)})
    kept = strain(result, at="nodes")
    np.testing.assert_array_equal(kept.cell_data["rotation"], 1.0)
    full = result.with_arrays(point_data={"strain": np.full(n, 7.0)})
    with pytest.raises(UsageError, match="already has a point array called 'strain'"):
        strain(full, at="nodes")
    beside = strain(full, at="nodes", prefix="my_")
    np.testing.assert_array_equal(beside.point_data["strain"], 7.0)
    assert beside.component_names["point", "my_strain"] == ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
    np.testing.assert_allclose(beside.point_data["my_strain"][:, 0], 1e-3, rtol=1e-10)
    over = strain(full, at="nodes", overwrite=True)
    assert over.point_data["strain"].shape == (n, 6)


def test_the_bases_are_those_tested_here() -> None:
    # Source: the table of the measures, so that a new base is not left without a check.
    assert {f"_{b}" for b in BASES} | {""} == set(TENSORS)
