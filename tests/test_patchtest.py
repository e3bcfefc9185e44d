"""Known fields on meshes: each against a closed form of its own, every element, and errors that must be seen."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import logm, polar
from scipy.spatial.transform import Rotation

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import InputError, UsageError
from unturn.fields import CellFields
from unturn.result import CellBlock, Result
from unturn.verdicts import patchtest
from unturn.verdicts.finding import Finding, Report
from unturn.verdicts.imposed import ImposedField, imposed_fields
from unturn.verdicts.patchtest import PatchTestOptions, patch_test
from unturn.verdicts.patchtest_report import patch_report

Floats = NDArray[np.float64]
LAGRANGE = [
    element(f.name, f.n_nodes(k))
    for f in FAMILIES.values()
    for k in (2, 3, 4)
    if f.n_nodes(k) not in f.refused
]
ROWS = [*ELEMENTS.values(), *LAGRANGE]
IDS = [f"{row.name}-{row.order}" for row in ROWS]
SIX = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2))
TABLE = {
    (f.name, normal): f for normal in (None, 0, 2) for f in imposed_fields(normal, 2.5)
}  # 2.5: any size of a mesh


def report(result: Result, **options: Any) -> Report:
    return patch_report(patch_test(result, PatchTestOptions(**options)), "mesh")


def by_id(found: Report) -> dict[str, Finding]:
    return {f.id: f for f in found.findings}


def odd(found: Report) -> dict[str, str]:
    """The state of what is not met."""
    return {f.id: f.state for f in found.findings if f.state != "met"}


# --- the fields ---------------------------------------------------------------------------------------------------


def six(tensor: Floats) -> Floats:
    return np.array([tensor[i, j] for i, j in SIX])


@pytest.mark.derived("central differences of a polynomial of degree two are exact")
@pytest.mark.parametrize(("name", "normal"), TABLE)
def test_the_gradient_of_a_field_is_that_of_its_displacement(name: str, normal: int | None) -> None:
    field = replace(TABLE[name, normal], single=False)
    x = np.random.default_rng(3).uniform(-1, 1, (5, 3))
    exact = np.broadcast_to(field.gradient_at(x), (5, 3, 3))
    for k, step in enumerate(0.5 * np.eye(3)):
        difference = field.displacement(x + step) - field.displacement(x - step)
        np.testing.assert_allclose(exact[:, :, k], difference, atol=2e-14)
    if normal is not None:
        flat = np.arange(3) != normal
        assert not field.displacement(x * flat)[:, normal].any()


@pytest.mark.source("scipy 1.17: linalg.polar, linalg.logm, spatial.transform.Rotation")
@pytest.mark.parametrize(("name", "normal"), TABLE)
def test_what_must_be_exact_follows_from_the_gradient(name: str, normal: int | None) -> None:
    field = TABLE[name, normal]
    x = np.array([[0.3, -0.8, 0.5]])
    H = field.gradient_at(x)[0]
    R, U = polar(np.eye(3) + H)
    turned = Rotation.from_matrix(R)
    strain = (H + H.T) / 2
    values = np.linalg.eigvalsh(strain)[::-1]
    F = np.eye(3) + H
    truth = {
        "strain": six(strain),
        "rotation": np.array([H[2, 1] - H[1, 2], H[0, 2] - H[2, 0], H[1, 0] - H[0, 1]]) / 2,
        "principal_strain": values,
        "equivalent_strain": np.sqrt(2 / 3) * np.linalg.norm(strain - np.trace(strain) / 3 * np.eye(3)),
        "strain_green_lagrange": six((F.T @ F - np.eye(3)) / 2),
        "strain_hencky": six(logm(U).real),
        "strain_biot": six(U - np.eye(3)),
        "strain_almansi": six((np.eye(3) - np.linalg.inv(F @ F.T)) / 2),
        "small_strain_error": np.linalg.norm(strain - (U - np.eye(3))),
        "finite_rotation": turned.as_rotvec(),
        "finite_rotation_angle": turned.magnitude(),
        "det_f": np.linalg.det(F),
    }  # fmt: skip
    expected = field.expected(x, None)
    assert set(expected) == set(field.measures)
    for measure, value in expected.items():
        np.testing.assert_allclose(value[0], np.atleast_1d(truth[measure]), atol=1e-13, err_msg=measure)


# From memory, not looked up: MacNeal and Harder 1985: all strains of the patch tests are 1e-3, shears engineering; the
# field u = 1e-3 (x + y/2 + z/2) and cyclic is differentiated by hand here.
@pytest.mark.memory("MacNeal and Harder 1985, Finite Elem. Anal. Des. 1, 3-20")
def test_the_uniform_strain_is_that_of_the_published_patch_tests() -> None:
    x = np.random.default_rng(0).uniform(size=(4, 3))
    solid = 1e-3 * (x + (x.sum(axis=1, keepdims=True) - x)) / 1.0 - 0.5e-3 * (
        x.sum(axis=1, keepdims=True) - x
    )
    np.testing.assert_allclose(TABLE["uniform_strain", None].displacement(x), solid, atol=1e-17)
    plate = 1e-3 * np.column_stack([x[:, 0] + x[:, 1] / 2, x[:, 1] + x[:, 0] / 2, 0 * x[:, 0]])
    np.testing.assert_allclose(TABLE["uniform_strain", 2].displacement(x), plate, atol=1e-17)


@pytest.mark.derived("the strain along a unit tangent t is t.e.t; in a surface P e P; a rigid field has none")
def test_what_surfaces_and_lines_see_of_a_field() -> None:
    e = np.asarray(TABLE["uniform_strain", None].gradient)
    t = np.array([2.0, -1.0, 2.0]) / 3.0
    line = TABLE["uniform_strain", None].expected(np.zeros((1, 3)), np.outer(t, t)[None])["strain"][0]
    np.testing.assert_allclose(line, six((t @ e @ t) * np.outer(t, t)), atol=1e-18)
    P = np.eye(3) - np.outer(t, t)
    seen = TABLE["uniform_strain", None].expected(np.zeros((1, 3)), P[None])["strain"][0]
    np.testing.assert_allclose(seen, six(P @ e @ P), atol=1e-18)
    for along in (P, np.outer(t, t)):
        still = TABLE["small_turn", None].expected(np.zeros((1, 3)), along[None])["strain"]
        np.testing.assert_allclose(still, 0, atol=1e-18)


def test_the_titles_state_axis_and_constants() -> None:
    # Common practice, no source.
    titles = {name: f.title for (name, normal), f in TABLE.items() if normal is None}
    assert "50 degrees about (1, 2, 2)" in titles["turn"]
    assert "0.001 radian about (1, 2, 2)" in titles["small_turn"]
    assert "10 times the size" in titles["translation"]
    assert "(0, 0, 1)" in TABLE["turn", 2].title


# --- sound meshes -------------------------------------------------------------------------------------------------


def in_space(mesh: meshes.Mesh) -> meshes.Mesh:
    R = Rotation.from_rotvec([0.4, -0.9, 0.7]).as_matrix()
    return mesh._replace(points=mesh.points @ R.T)


def far(mesh: meshes.Mesh) -> meshes.Mesh:
    return mesh._replace(points=mesh.points * 0.37 + 5e5)


PLACED: dict[str, Callable[[meshes.Mesh], meshes.Mesh]] = {
    "patch": lambda m: m, "curved": meshes.curved, "far": far, "in space": in_space,
}  # fmt: skip


@pytest.mark.source("MacNeal and Harder 1985, Finite Elem. Anal. Des. 1, 3-20: patch tests")
@pytest.mark.parametrize("how", PLACED)
@pytest.mark.parametrize("row", ROWS, ids=IDS)
def test_every_element_passes_far_away_bent_and_in_space(row: Element, how: str) -> None:
    test = patch_test(PLACED[how](meshes.patch(row)).result())
    found = patch_report(test, "mesh")
    assert found.exit_status == 0, odd(found)
    assert not any(f.state not in ("met", "warning") for f in found.findings)
    for errors in test.errors:
        if errors.field.single:
            continue
        # a bound that would hide an error of a millionth of the field would be none
        bound = errors.bound[test.computed & errors.exact]
        assert bound.size == 0 or bound.max() < 1e-6 * max(1e-3, float(np.linalg.norm(errors.field.gradient)))


@pytest.mark.source("Zienkiewicz and Taylor, The Finite Element Method: completeness")
@pytest.mark.parametrize("row", ROWS, ids=IDS)
def test_the_quadratic_field_is_exact_where_the_element_holds_it(row: Element) -> None:
    test = patch_test(meshes.affine_cell(row).result())
    errors = test.errors[-1]
    assert errors.field.name == "quadratic"
    assert errors.exact.all() == (
        row.order >= 2 or row.shape.name in ("line", "quad", "pixel", "hexahedron", "voxel")
    )
    assert not errors.exact.any() or (errors.error <= errors.bound).all()


@pytest.mark.derived("the gradient of u = x^2/2 on a cell of length h differs by h/2 between its ends")
def test_linear_tetrahedra_say_how_far_they_resolve_a_gradient() -> None:
    found = by_id(report(meshes.patch(ELEMENTS["tetra"]).result()))["resolution.tetra.whole"]
    assert found.state == "met"
    assert found.value is not None
    assert 10 < found.value < 100
    assert found.details["median"] < found.details["percentile_99"] <= found.value


def grid(
    n: int, row: Element, stretch: tuple[float, float, float] = (1, 1, 1), shear: float = 0.2
) -> meshes.Mesh:
    """A sheared box of n x n x n cells."""
    axes = [np.linspace(0, size, n + 1) for size in stretch]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange((n + 1) ** 3).reshape((n + 1,) * 3)
    square = ((0, 0), (1, 0), (1, 1), (0, 1))
    cells = np.stack(
        [number[a : n + a, b : n + b, c : n + c].ravel() for c in (0, 1) for a, b in square], axis=1
    )
    points = points @ np.array([[1, shear, 0], [0, 1, shear], [0, 0, 1.0]])
    return meshes.straight(points, cells, row)


@pytest.mark.derived("rounding to single precision moves a node by at most 2^-24 of its displacement")
@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e6])
def test_float32_stays_within_what_the_tool_reports_whatever_the_unit(scale: float) -> None:
    mesh = grid(4, ELEMENTS["hexahedron20"])
    test = patch_test(mesh._replace(points=mesh.points * scale).result())
    single = next(e for e in test.errors if e.field.single)
    assert single.noise is not None
    assert (single.error <= single.bound).all()
    assert (single.error / single.bound).max() > 0.05  # the bound is one
    assert 0.1 < (single.error / single.noise).max() < 4
    double = next(e for e in test.errors if e.field.name == "strain_and_turn")
    assert single.error.max() > 1e5 * double.error.max()


def test_a_float32_mesh_is_taken_as_it_is_stored() -> None:
    # Source: IEEE 754: points in single precision are the mesh; the imposed field is evaluated on them
    mesh = grid(3, ELEMENTS["hexahedron20"])
    found = report(mesh._replace(points=(mesh.points * 0.1 + 7).astype(np.float32)).result())
    assert found.exit_status == 0, odd(found)
    assert "quadratic.hexahedron20.whole" in by_id(found)


# --- errors that must be seen -------------------------------------------------------------------------------------


def spoiled(monkeypatch: pytest.MonkeyPatch, change: Callable[[CellFields], None]) -> None:
    """Let the tool make an error."""
    real = patchtest.compute_fields

    def wrong(*arguments: Any, **options: Any) -> CellFields:
        fields = real(*arguments, **options)
        change(fields)
        return fields

    monkeypatch.setattr(patchtest, "compute_fields", wrong)


@pytest.mark.derived("an error of one part in a hundred million of a strain is not rounding")
@pytest.mark.parametrize("measure", ["strain", "rotation", "strain_hencky", "principal_strain", "det_f"])
def test_a_small_error_of_the_tool_is_seen(monkeypatch: pytest.MonkeyPatch, measure: str) -> None:
    def change(fields: CellFields) -> None:
        if measure in fields.arrays:
            fields.arrays[measure][5] *= 1 + 1e-8

    spoiled(monkeypatch, change)
    mesh = meshes.patch(ELEMENTS["hexahedron20"]).result()
    mesh = replace(mesh, cell_data={"element_number": np.arange(101, 108)})
    found = report(mesh)
    assert found.exit_status == 1
    bad = [f for f in found.findings if f.state == "exceeded"]
    assert bad
    for f in bad:
        assert f.place["cell"] == 5
        assert f.place["element"] == 106
        assert f.details["measure"] == measure
        assert f.details["beyond"] == 1
        assert "beyond what rounding explains" in f.message


def test_a_missing_value_is_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    # Common practice, no source.
    def change(fields: CellFields) -> None:
        fields.arrays["strain"][2, 1] = np.nan

    spoiled(monkeypatch, change)
    found = by_id(report(meshes.patch(ELEMENTS["tetra"]).result()))["uniform_strain.tetra.whole"]
    assert found.state == "exceeded"
    assert "without a value" in found.message
    assert found.place["cell"] == 2


def test_a_floor_that_is_too_low_is_seen(monkeypatch: pytest.MonkeyPatch) -> None:
    # Common practice, no source.
    def change(fields: CellFields) -> None:
        if fields.diagnostics is not None:
            fields.diagnostics.noise *= 0.1

    spoiled(monkeypatch, change)
    assert odd(report(meshes.patch(ELEMENTS["tetra10"]).result())) == {
        "strain_and_turn_float32.tetra10.whole": "exceeded"
    }


# --- what is left out ---------------------------------------------------------------------------------------------


def test_tangled_flat_and_unplaced_cells_are_counted_and_named() -> None:
    # Common practice, no source.
    mesh = grid(3, ELEMENTS["hexahedron"])
    cells = mesh.cells.copy()
    cells[0] = cells[0][[0, 1, 3, 2, 4, 5, 7, 6]]
    points = mesh.points.copy()
    points[cells[26, 6]] = np.nan
    found = report(mesh._replace(points=points, cells=cells).result())
    share = by_id(found)["tested"]
    assert share.state == "warning"
    assert share.details["left_out"] == {"coordinates not finite": 1, "tangled": 1}
    assert share.value == pytest.approx(200 / 27)
    assert "2 of 27 cells were not computed" in share.message


@pytest.mark.parametrize("n", [13, 14])
def test_a_mesh_of_which_most_is_left_out_does_not_pass(n: int) -> None:
    # Common practice, no source.
    mesh = grid(3, ELEMENTS["hexahedron"])
    points, cells = [mesh.points], mesh.cells.copy()
    flat = mesh.points[cells[:n]] * [1, 1, 0]
    cells[:n] = len(mesh.points) + np.arange(8 * n).reshape(n, 8)
    points.append(flat.reshape(-1, 3))
    found = report(mesh._replace(points=np.concatenate(points), cells=cells).result())
    assert by_id(found)["tested"].state == ("undecided" if n == 14 else "warning")
    assert found.exit_status == (1 if n == 14 else 0)


def test_nothing_computed_is_refused() -> None:
    # Common practice, no source.
    mesh = meshes.patch(ELEMENTS["quad"])
    with pytest.raises(InputError, match=r"no cell could be computed: 5 tangled\. Look at the mesh"):
        patch_test(mesh._replace(cells=mesh.cells[:, [0, 1, 3, 2]]).result())
    only = Result(np.zeros((1, 3)), (CellBlock("vertex", np.array([[0]]), np.array([0])),))
    with pytest.raises(InputError, match="no element of this mesh can be computed"):
        patch_test(only)


def test_cells_too_thin_to_be_judged_are_undecided() -> None:
    # Common practice, no source.
    mesh = grid(2, ELEMENTS["hexahedron"], shear=0.0)
    found = report(in_space(mesh._replace(points=mesh.points * [1, 1, 1e-11])).result())
    assert found.exit_status == 1
    assert set(odd(found).values()) == {"undecided"}
    assert "so thin, or so small" in by_id(found)["strain_and_turn.hexahedron.whole"].message


@pytest.mark.source("IEEE 754: single precision reaches from 1.2e-38 to 3.4e38")
@pytest.mark.parametrize(("scale", "stored"), [(1e-33, False), (1e-20, True), (1e20, True), (1e33, False)])
def test_meshes_beyond_single_precision_are_tested_without_it(scale: float, stored: bool) -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron20"])
    found = report(mesh._replace(points=mesh.points * scale).result())
    assert found.exit_status == 0, odd(found)
    assert ("strain_and_turn_float32.hexahedron20.whole" in by_id(found)) == stored
    assert any("does not fit single precision" in n for n in found.notes) != stored


@pytest.mark.derived("what rounding may turn inside out says nothing of finite measures")
def test_parts_that_are_tiny_beside_their_distance_are_undecided() -> None:
    near = meshes.patch(ELEMENTS["wedge12"]).points
    cells = meshes.patch(ELEMENTS["wedge12"]).cells
    points = np.concatenate([near, near + np.array([3e12, 0, 0])])
    found = report(
        meshes.Mesh(points, np.concatenate([cells, cells + len(near)]), ELEMENTS["wedge12"]).result()
    )
    assert set(odd(found).values()) <= {"undecided", "warning"}
    assert found.exit_status == 1
    assert by_id(found)["translation.wedge12.body 1"].state == "met"


@pytest.mark.parametrize("digits", [3, 4, 5, 6])
def test_coordinates_with_few_digits_are_no_wrong_order(digits: int) -> None:
    # Common practice, no source.
    mesh = grid(3, ELEMENTS["hexahedron20"], (1.0, 0.93, 1.07))
    found = report(mesh._replace(points=(mesh.points * 0.987654321).round(digits)).result())
    assert found.exit_status == 0, odd(found)


# --- mixed meshes -------------------------------------------------------------------------------------------------


def mixed() -> Result:
    """A tetrahedron with a skin, a triangle and a line apart from it, and a vertex, in two groups."""
    points = np.array([*np.eye(4, 3), [2, 0, 0], [3, 0, 0.5], [2, 1, 0.0], [5, 0, 0], [6, 1, 2.0]])
    cells = [
        ("tetra", [[3, 0, 1, 2]], [0]),
        ("triangle", [[4, 5, 6], [0, 1, 2]], [1, 2]),
        ("line", [[7, 8]], [3]),
        ("vertex", [[0]], [4]),
    ]
    blocks = tuple(CellBlock(t, np.array(c), np.array(i)) for t, c, i in cells)
    return Result(points, blocks, groups={"a": np.array([0, 2]), "b": np.array([1, 3])})


def test_dimensions_and_regions_are_told_apart() -> None:
    # Common practice, no source.
    found = by_id(report(mixed()))
    groups = {i.split(".", 1)[1] for i in found if i.startswith("turn.")}
    assert groups == {"tetra.a", "triangle.b", "line.b"}
    assert all(f.state == "met" for f in found.values())
    assert found["tested"].details["cells"] == 3  # neither the vertex nor the skin is meant to be computed
    with_skin = by_id(report(mixed(), skin=True))
    assert "turn.triangle.a" in with_skin
    assert with_skin["tested"].details["cells"] == 4
    assert {i.split(".", 1)[1] for i in by_id(report(mixed(), regions=("b",))) if i.startswith("turn.")} == {
        "triangle.b", "line.b"
    }  # fmt: skip
    with pytest.raises(UsageError, match="no region is called 'c'"):
        report(mixed(), regions=("c",))


def test_the_displacement_of_the_file_does_not_matter() -> None:
    # Common practice, no source.
    mesh = meshes.patch(ELEMENTS["tetra"])
    plain, other = (
        report(mesh.result()),
        report(mesh.result(u=np.full_like(mesh.points, np.nan), disp=mesh.points)),
    )
    assert plain.findings == other.findings


def test_the_same_mesh_gives_the_same_findings_whatever_the_threads() -> None:
    # Common practice, no source.
    mesh = meshes.curved(grid(5, ELEMENTS["hexahedron20"])).result()
    assert report(mesh, threads=1) == report(mesh, threads=3)


def test_cells_that_were_deleted_do_not_count() -> None:
    # Common practice, no source.
    mesh = grid(2, ELEMENTS["hexahedron"])
    cells = mesh.cells.copy()
    cells[0] = cells[0][[0, 1, 3, 2, 4, 5, 7, 6]]
    alive = np.ones(8)
    alive[0] = 0
    result = replace(mesh._replace(cells=cells).result(), cell_data={"alive": alive})
    assert report(result).exit_status == 1
    found = report(result, alive="alive")
    assert found.exit_status == 0
    assert by_id(found)["tested"].details["cells"] == 7


# --- elsewhere than at centroids ----------------------------------------------------------------------------------


@pytest.mark.source("Zienkiewicz and Zhu 1992: patches reproduce a linear gradient")
def test_nodes_and_free_faces_are_told_on_request() -> None:
    mesh = grid(3, ELEMENTS["hexahedron20"]).result()
    assert not any(f.id.startswith(("nodes", "surface")) for f in report(mesh).findings)
    found = by_id(report(mesh, at=("nodes", "surface")))
    for name in ("nodes.uniform_strain.whole", "surface.uniform_strain"):
        assert found[name].value is not None
        assert found[name].value < 1e-9  # microstrain
        assert found[name].unit == "microstrain"
    assert found["nodes.quadratic.whole"].value == pytest.approx(0, abs=1e-6)
    assert found["surface.quadratic"].value == pytest.approx(0, abs=1e-6)
    assert found["nodes.quadratic.whole"].unit == "percent"
    linear = by_id(report(meshes.patch(ELEMENTS["tetra"]).result(), at=("nodes", "surface")))
    assert linear["nodes.uniform_strain.whole"].value == pytest.approx(0, abs=1e-8)
    assert 1 < linear["surface.quadratic"].value < 200  # type: ignore[operator]
    assert set(linear["surface.quadratic"].place) == {"cell", "at"}


def test_places_that_a_mesh_does_not_have_are_said() -> None:
    # Common practice, no source.
    surface = in_space(meshes.patch(ELEMENTS["quad"])).result()
    notes = " ".join(report(surface, at=("nodes", "surface")).notes)
    assert "at nodes: not looked at" in notes
    assert "on free faces: not looked at" in notes


def test_a_field_by_name() -> None:
    # Common practice, no source.
    names = [f.name for f in imposed_fields(None, 1.0)]
    assert names == [
        "translation", "small_turn", "uniform_strain", "turn", "strain_and_turn", "strain_and_turn_float32", "quadratic",
    ]  # fmt: skip
    assert all(isinstance(f, ImposedField) for f in imposed_fields(1, 1.0))
