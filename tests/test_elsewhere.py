"""Extremes at nodes and on free surfaces: whose value, how far to trust it, and which peaks are suspected singular."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import meshes
from recovery_meshes import block
from solved_problems import NU, corner_plate
from strategies import axis_angle
from test_nodal import ALPHA, HEAT, TURN, quadratic, two_parts
from unturn import CellBlock, Result, displacement_gradient, kinematics, strain
from unturn.elements import ELEMENTS
from unturn.elsewhere import Elsewhere, ElsewhereExtreme
from unturn.options import StrainOptions
from unturn.pipeline import compute
from unturn.summary import Summary, SummaryOptions, summarise, summary_data
from unturn.summary_text import summary_text
from unturn.trusted import Growth


def summary(
    result: Result, regions: tuple[str, ...] = (), zero: Result | None = None, **options: Any
) -> Summary:
    asked = StrainOptions(**{"displacement": "u", "at": "nodes", **options})
    computed = compute(result, asked, zero=zero, diagnose=True)
    return summarise(
        computed, SummaryOptions(regions, asked.solve, equivalent_poisson=asked.equivalent_poisson)
    )


def elsewhere(result: Result, regions: tuple[str, ...] = (), **options: Any) -> Elsewhere:
    found = summary(result, regions, **options).elsewhere
    assert found is not None
    return found


def growths(found: Summary) -> dict[str, Growth]:
    return {g.array: g for g in found.growths}


def by_array(found: Elsewhere, region: str | None = None) -> dict[str, ElsewhereExtreme]:
    return {e.array: e for e in found.extremes if region in (None, e.region)}


@pytest.mark.derived(
    "a quadratic field is exact at nodes: the extreme is the largest of the exact values, its bound zero"
)
def test_extremes_of_an_exact_field() -> None:
    mesh = block(ELEMENTS["tetra10"], 3, 0.1)
    u, H = quadratic(mesh.points, 1e-3)
    number = 1000 + np.arange(len(u))[::-1]
    found = elsewhere(mesh.result(u=u, node_number=number))
    assert (found.title, found.growths) == ("nodes", ())
    principal = kinematics.principal_strain(kinematics.strain(H))
    equivalent = kinematics.equivalent_strain(kinematics.strain(H))
    expected = {
        "principal_strain_1": (principal[:, 0], np.argmax, "largest principal"),
        "principal_strain_3": (principal[:, 2], np.argmin, "smallest principal"),
        "equivalent_strain": (equivalent, np.argmax, "equivalent, largest"),
    }
    assert [e.array for e in found.extremes] == list(expected)
    for e in found.extremes:
        values, pick, label = expected[e.array]
        at = int(pick(values))
        assert (e.region, e.label) == ("whole", label)
        assert e.value == pytest.approx(values[at], rel=1e-9)
        assert e.place == {"point": at, "node": number[at]}
        np.testing.assert_allclose(e.at, mesh.points[at])
        assert e.plus_minus < 1e-12
    assert found.error_percent == {"whole": pytest.approx(0, abs=1e-6)}


@pytest.mark.derived(
    "the bound: largest norm(e* - e) over the nodes of the elements that meet there, times 1, sqrt(2/3) or 1.5/(1+nu)"
)
@pytest.mark.parametrize("effective", [None, 0.0, 0.5])
def test_plus_minus_by_brute_force(effective: float | None) -> None:
    mesh = block(ELEMENTS["tetra"], 3, 0.2)
    u, _ = quadratic(mesh.points, 1e-3)
    result = mesh.result(u=u)
    own = kinematics.strain(displacement_gradient(mesh.points, mesh.cells, u, "tetra"))
    at_nodes = strain(result, displacement="u", at="nodes", measures=["strain"]).point_data["strain"]
    departure = np.zeros(len(u))
    for cell, e in zip(mesh.cells, own):
        off = np.linalg.norm(kinematics.tensor_from_components(at_nodes[cell]) - e, axis=(1, 2))
        departure[cell] = np.maximum(departure[cell], off)
    largest = departure[mesh.cells].max(axis=1)
    for name, e in by_array(elsewhere(result, equivalent_poisson=effective)).items():
        meeting = (mesh.cells == e.place["point"]).any(axis=1)
        form = 1.0 if effective is None else 1.5 / (1 + effective)
        change = form * math.sqrt(2 / 3) if name == "equivalent_strain" else 1.0
        assert e.plus_minus == pytest.approx(change * largest[meeting].max(), rel=1e-9)


@pytest.mark.derived("1.5/(1+nu) times sqrt(2/3 e':e') is the other form of the equivalent strain")
def test_the_bound_of_the_other_equivalent_strain_goes_with_its_size() -> None:
    mesh = block(ELEMENTS["tetra"], 3, 0.2)
    result = mesh.result(u=quadratic(mesh.points, 1e-3)[0])
    usual = by_array(elsewhere(result))["equivalent_strain"]
    for effective in (0.0, 0.3, 0.5):
        other = by_array(elsewhere(result, equivalent_poisson=effective))["equivalent_strain"]
        assert other.plus_minus / usual.plus_minus == pytest.approx(other.value / usual.value, rel=1e-9)


@pytest.mark.derived("what one part says of its border is its own, whoever is written there")
@pytest.mark.parametrize("seam", [0.6, 0.4])
def test_each_region_reads_its_own_side(seam: float) -> None:
    result, border = two_parts(1e-3, 5e-3, "hexahedron20", seam=seam)
    x = result.points[:, 0]
    u = np.zeros_like(result.points)
    u[:, 0] = np.where(x <= seam, 1e-3 * x**2, 1e-3 * seam**2 + 5e-3 * (x - seam))  # strain 2e-3 x, then 5e-3
    beyond = x > seam + 1e-9
    u[beyond, 1] += 1e-3 * np.random.default_rng(0).normal(size=int(beyond.sum()))
    found = elsewhere(result.with_arrays(point_data={"u": u}))
    left = by_array(found, "part=1")["principal_strain_1"]
    assert border[left.place["point"]]
    assert left.value == pytest.approx(2e-3 * seam, rel=1e-9)
    assert left.plus_minus < 1e-12  # its own elements agree; those across the border do not
    right = by_array(found, "part=2")["principal_strain_1"]
    assert right.value > 5e-3
    assert right.plus_minus > 1e-4
    assert found.error_percent is not None
    assert found.error_percent["part=1"] < 1e-6
    assert found.error_percent["part=2"] > 5


@pytest.mark.derived("a region that is a share of a group is read at the nodes of its own cells")
def test_a_region_within_a_group() -> None:
    mesh = block(ELEMENTS["hexahedron"], 4)
    x = mesh.points[:, 0]
    u = np.stack([0.5e-3 * x**2, 0 * x, 0 * x], axis=1)
    corner = (mesh.points[mesh.cells][:, :, 0].max(axis=1) < 0.51).astype(np.int32)
    result = mesh.result(u=u).with_arrays(cell_data={"load_step": corner})
    whole = by_array(elsewhere(result))["principal_strain_1"]
    assert whole.at[0] == pytest.approx(1.0)
    near = by_array(elsewhere(result, ("load_step=1",)), "load_step=1")["principal_strain_1"]
    assert near.at[0] == pytest.approx(0.5)
    assert near.value == pytest.approx(0.5e-3, rel=1e-9)


@pytest.mark.derived(
    "a whole turn changes no value, no bound and no estimated error of a referential measure"
)
@pytest.mark.parametrize("base", ["green-lagrange", "hencky", "biot"])
def test_a_turn_changes_nothing_of_finite_extremes(base: str) -> None:
    mesh = block(ELEMENTS["tetra"], 3, 0.2)
    u, _ = quadratic(mesh.points)
    moved, _ = quadratic(mesh.points, turn=TURN)
    before, after = (elsewhere(mesh.result(u=v), base=base, solve="nonlinear") for v in (u, moved))
    key = base.replace("-", "_")
    assert [e.array for e in before.extremes] == [
        f"principal_strain_{key}_1", f"principal_strain_{key}_3", f"equivalent_strain_{key}"
    ]  # fmt: skip
    for a, b in zip(before.extremes, after.extremes):
        assert (a.place, a.label) == (b.place, b.label)
        assert b.value == pytest.approx(
            a.value, rel=0.05
        )  # H is what is recovered, so the turn acts on the error alone
        assert b.plus_minus == pytest.approx(a.plus_minus, rel=0.2)
    assert before.error_percent is not None
    assert after.error_percent is not None
    assert after.error_percent["whole"] == pytest.approx(before.error_percent["whole"], rel=0.2)


@pytest.mark.derived("an extreme inside one region is the extreme of the array that is written")
@pytest.mark.parametrize(
    "measures", [None, ["principal_strain", "principal_strain_hencky", "equivalent_strain_biot"]]
)
@pytest.mark.parametrize("solve", ["unknown", "nonlinear"])
def test_extremes_from_a_zero_step(measures: list[str] | None, solve: str) -> None:
    mesh = block(ELEMENTS["hexahedron"], 3, 0.1)
    first, _ = quadratic(mesh.points, 0.05, turn=axis_angle([0, 0, 1.0], 0.4) + np.eye(3))
    second, _ = quadratic(mesh.points[:, [1, 2, 0]], 0.05)
    zero, now = mesh.result(u=first), mesh.result(u=first + second)
    options: dict[str, Any] = {"measures": measures, "solve": solve}
    if measures is None:
        options["base"] = "hencky"
    arrays = strain(now, zero=zero, at="nodes", displacement="u", **options).point_data
    found = by_array(elsewhere(now, zero=zero, **options))
    names = [n for n in arrays if n.startswith(("principal_strain", "equivalent_strain"))]
    assert len(names) == (2 if measures is None else 3)
    for name in names:
        if name.startswith("principal"):
            assert found[f"{name}_1"].value == pytest.approx(arrays[name][:, 0].max(), rel=1e-12)
            assert found[f"{name}_3"].value == pytest.approx(arrays[name][:, 2].min(), rel=1e-12)
        else:
            assert found[name].value == pytest.approx(arrays[name].max(), rel=1e-12)
    for e in found.values():
        np.testing.assert_allclose(e.at, mesh.points[e.place["point"]])  # where the part was undeformed


@pytest.mark.derived("the mechanical strain is the total less alpha dT: 3e-3 - 1.2e-3")
def test_mechanical_extremes() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    result = mesh.result(u=mesh.points * [3e-3, 0, 0], T=np.full(len(mesh.points), 120.0))
    found = summary(result, thermal_expansion=ALPHA, **HEAT)
    assert found.elsewhere is not None
    values = {e.label: e.value for e in found.elsewhere.extremes}
    assert values["largest principal"] == pytest.approx(3e-3)
    assert values["largest principal, mechanical"] == pytest.approx(3e-3 - ALPHA * 100)
    assert values["smallest principal, mechanical"] == pytest.approx(-ALPHA * 100)
    assert values["equivalent, largest, mechanical"] == pytest.approx(2e-3)
    assert "largest principal, mechanical" in summary_text(found)


LAMBDA, Q = 0.544483737, 0.543075579


def corner_field(x: np.ndarray) -> np.ndarray:
    """Displacement at a re-entrant right angle, the faces at 135 degrees from its bisector, plane strain, nu = 0.3."""
    r, theta = np.hypot(x[:, 0], x[:, 1]), np.arctan2(x[:, 1], x[:, 0]) - np.pi / 4
    theta = np.where(theta < -np.pi, theta + 2 * np.pi, theta)
    kappa, a, b = 3 - 4 * 0.3, LAMBDA, LAMBDA - 2
    along = (kappa - Q * (LAMBDA + 1)) * np.cos(a * theta) - LAMBDA * np.cos(b * theta)
    across = (kappa + Q * (LAMBDA + 1)) * np.sin(a * theta) + LAMBDA * np.sin(b * theta)
    c = math.sqrt(0.5)
    return 1e-3 * (r**LAMBDA)[:, None] * np.stack([c * (along - across), c * (along + across), 0 * r], axis=1)


def angle_mesh(name: str, n: int = 6) -> tuple[meshes.Mesh, int]:
    """Three quarters of the square of side 2 around the origin, and which point is the re-entrant corner."""
    row = ELEMENTS[name]
    flat = block(ELEMENTS["quad" if row.shape.name in ("quad", "hexahedron") else "triangle"], 2 * n)
    points = 2 * flat.points - [1, 1, 0]
    middle = points[flat.cells].mean(axis=1)
    cells = flat.cells[~((middle[:, 0] < 0) & (middle[:, 1] < 0))]
    used, cells = np.unique(cells, return_inverse=True)
    points, cells = points[used], cells.reshape(-1, flat.cells.shape[1])
    if row.dim == 3:
        k = len(points)
        layers = [points + np.array([0, 0, z]) for z in (0.0, 0.2, 0.4)]
        cells = np.concatenate([np.concatenate([cells + k * j, cells + k * (j + 1)], axis=1) for j in (0, 1)])
        points = np.concatenate(layers)
    mesh = meshes.straight(points, cells, row)
    return mesh, int(np.linalg.norm(mesh.points - [0, 0, 0], axis=1).argmin())


@pytest.mark.source(
    "Szabo and Babuska 1991, Finite Element Analysis: L-shaped domain, first symmetric term; Williams 1952"
)
@pytest.mark.parametrize("name", ["quad", "triangle", "triangle6", "hexahedron"])
def test_a_reentrant_corner_is_named(name: str) -> None:
    # the exponent solves Williams' equation for an opening of 270 degrees
    assert math.sin(1.5 * math.pi * LAMBDA) + LAMBDA * math.sin(1.5 * math.pi) == pytest.approx(0, abs=1e-8)
    mesh, corner = angle_mesh(name)
    number = 7 + np.arange(len(mesh.points))
    options: dict[str, Any] = {"plane": "strain"} if mesh.element.dim == 2 else {}
    found = summary(mesh.result(u=corner_field(mesh.points), node_number=number), **options)
    peak = growths(found)["principal_strain_1"]
    trust = peak.trust
    assert np.linalg.norm(mesh.points[trust.point, :2]) < 1e-9
    if mesh.element.dim == 2:
        assert trust.point == corner
    assert peak.node == number[trust.point]
    assert trust.growth > 0.43
    middles = mesh.points[mesh.cells[:, : mesh.element.n_corners]].mean(axis=1)
    assert trust.next_cell >= 0
    assert np.linalg.norm(middles[trust.next_cell, :2]) > 1.5 / 6
    assert trust.next_value < 0.8 * peak.value
    said = (
        f"largest principal keeps growing towards node {peak.node} (point {trust.point}); next away from it "
    )
    assert said in summary_text(found)


@pytest.mark.source(
    "Williams 1952: exponent 0.456 at a re-entrant right angle, solved with the element itself"
)
@pytest.mark.parametrize("n", [6, 12])
@pytest.mark.parametrize("name", ["triangle", "quad", "triangle6", "quad8"])
def test_a_solved_reentrant_corner_is_named(name: str, n: int) -> None:
    mesh, u = corner_plate(name, n)
    found = summary(mesh.result(u=u), plane="stress", poisson=NU)
    point = growths(found)["equivalent_strain"].trust.point
    assert np.linalg.norm(mesh.points[point] - [0.5, 0.5, 0]) < 1.5 * 0.5 / n


@pytest.mark.derived(
    "bending is linear across the thickness: steep from cell to cell, and nothing singular in it"
)
@pytest.mark.parametrize("n", [4, 8])
def test_bending_of_a_thin_bar_is_not_suspected(n: int) -> None:
    mesh = block(ELEMENTS["hexahedron20"], n)
    mesh = mesh._replace(points=mesh.points * [4, 1, 0.2] - [2, 0.5, 0.1])
    x, _, z = mesh.points.T
    u = 0.05 * np.stack([-(2 * x - x**2 / 2) * z, 0 * x, x**2 - x**3 / 6], axis=1)
    assert growths(summary(mesh.result(u=u))) == {}


@pytest.mark.derived("a field without a singular point, on the same mesh")
@pytest.mark.parametrize("name", ["quad", "quad8", "triangle", "hexahedron"])
def test_a_smooth_field_on_the_same_mesh_is_not_suspected(name: str) -> None:
    mesh, _ = angle_mesh(name)
    options: dict[str, Any] = {"plane": "strain"} if mesh.element.dim == 2 else {}
    x, y = mesh.points[:, 0], mesh.points[:, 1]
    u = 1e-3 * np.stack([np.sin(x + 0.5 * y), np.cos(0.7 * x - y), 0 * x], axis=1)
    found = summary(mesh.result(u=u), **options)
    assert found.growths == ()
    assert "suspected" not in summary_text(found)


def test_a_finite_base_suspects_what_it_measures() -> None:
    """A turned part with a corner: the small strain of it says nothing, the finite one names the corner."""
    # Source: as of the corner itself; a turn adds no strain.
    mesh, _ = angle_mesh("hexahedron")
    u = corner_field(mesh.points)
    turned = (mesh.points + u) @ TURN.T - mesh.points
    found = growths(summary(mesh.result(u=turned), base="hencky", solve="nonlinear"))
    peak = found["principal_strain_hencky_1"]
    assert np.linalg.norm(mesh.points[peak.trust.point, :2]) < 1e-9
    assert 0 < peak.value < 0.05
    assert all(name.startswith(("principal_strain_hencky", "equivalent_strain_hencky")) for name in found)


def test_nothing_moves() -> None:
    """No strain: extremes are zero, nothing is suspected, and a share of nothing is not known."""
    # Source: the conventions of the project: NaN is null, and no number is printed for it.
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    found = summary(mesh.result(u=0 * mesh.points))
    assert found.elsewhere is not None
    assert [e.value for e in found.elsewhere.extremes] == [0, 0, 0]
    assert found.elsewhere.error_percent is not None
    assert math.isnan(found.elsewhere.error_percent["whole"])
    assert "nan" not in summary_text(found)


def test_measures_without_extremes_still_tell_the_error() -> None:
    # Source: the conventions of the project; rotation has no row of its own at nodes.
    mesh = block(ELEMENTS["tetra"], 3, 0.2)
    found = summary(mesh.result(u=quadratic(mesh.points, 1e-3)[0]), measures=["rotation"])
    assert found.elsewhere is not None
    assert found.elsewhere.extremes == ()
    row = next(line for line in summary_text(found).splitlines() if line.startswith("estimated error"))
    assert row.endswith("%")


KEYS = {"location", "extremes", "estimated_error_percent", "largest_jump_at_border", "notes"}
EXTREME = {"region", "statistic", "array", "value", "plus_minus", "place", "at"}
GROWTH = {
    "location", "region", "statistic", "array", "extreme", "cell", "element", "value", "plus_minus", "point", "node",
    "growth", "next",
}  # fmt: skip


def test_the_data_is_complete() -> None:
    """Every key is there, at nodes and on free surfaces; at other places there is no such section."""
    # Source: the documented schema.
    mesh, _ = angle_mesh("hexahedron")
    result = mesh.result(u=corner_field(mesh.points))
    whole = summary_data(summary(result))
    data = whole["elsewhere"]
    assert set(data) == KEYS
    assert data["location"] == "nodes"
    assert data["extremes"]
    assert whole["suspected_singular"]
    assert all(set(e) == EXTREME and set(e["place"]) == {"point", "node"} for e in data["extremes"])
    assert all(set(g) == GROWTH and g["node"] is None for g in whole["suspected_singular"])
    assert set(data["estimated_error_percent"]) == {"whole"}
    faces = summary_data(summary(result, at="surface"))["elsewhere"]
    assert set(faces) == KEYS
    assert faces["location"] == "free surfaces"
    assert all(set(e["place"]) == {"cell", "element", "face"} for e in faces["extremes"])
    assert all(e["plus_minus"] > 0 for e in faces["extremes"])
    assert faces["estimated_error_percent"] == {}
    for at in ("centroid", "mean", "quadrature"):
        assert summary_data(summary(result, at=at))["elsewhere"] is None


def bent(name: str = "hexahedron20") -> Result:
    """A plate 4 x 1 x 0.2 bent to curvature 0.05 about y without load across: e_xx = -k z, e_yy = e_zz = nu k z."""
    k, nu = 0.05, 0.3
    mesh = block(ELEMENTS[name], 3)
    mesh = mesh._replace(points=mesh.points * [4, 1, 0.2] - [2, 0.5, 0.1])
    x, y, z = mesh.points.T
    u = k * np.stack([-x * z, nu * y * z, 0.5 * (x**2 - nu * y**2 + nu * z**2)], axis=1)
    return mesh.result(u=u)


@pytest.mark.source(
    "Timoshenko and Goodier, Theory of Elasticity, article 102: pure bending of a plate strip, anticlastic"
)
def test_bending_on_free_surfaces() -> None:
    result = bent()
    found = elsewhere(result, at="surface", poisson=0.3)
    extremes = by_array(found)
    top, bottom = extremes["surface_principal_strain_2"], extremes["surface_principal_strain_1"]
    assert (top.label, bottom.label) == ("smallest principal, in plane", "largest principal, in plane")
    assert bottom.value == pytest.approx(0.05 * 0.1, rel=1e-9)
    assert top.value == pytest.approx(-0.05 * 0.1, rel=1e-9)
    assert bottom.at[2] == pytest.approx(-0.1)
    assert top.at[2] == pytest.approx(0.1)
    equivalent = extremes["surface_equivalent_strain"]
    assert equivalent.value == pytest.approx(0.005 * (1 + 0.3) * 2 / 3, rel=1e-9)
    assert abs(equivalent.at[2]) == pytest.approx(0.1)
    at_centroids = strain(result, displacement="u").cell_data["principal_strain"][:, 0].max()
    assert at_centroids == pytest.approx(0.005 * 2 / 3, rel=1e-9)
    for e in extremes.values():
        cell, face = e.place["cell"], e.place["face"]
        corners = ELEMENTS["hexahedron20"].face_nodes[face].nodes
        middle = result.points[result.blocks[0].connectivity[cell, list(corners[:4])]].mean(axis=0)
        np.testing.assert_allclose(e.at, middle, atol=1e-12)


@pytest.mark.derived("X = x - u: the place of an extreme is where the face was before")
def test_deformed_coordinates_give_reference_places() -> None:
    result = bent()
    moved = replace(result, points=result.points + result.point_data["u"])
    for at in ("surface", "nodes"):
        before = elsewhere(result, at=at)
        after = elsewhere(moved, at=at, coordinates="deformed")
        for a, b in zip(before.extremes, after.extremes):
            assert b.value == pytest.approx(a.value, rel=1e-9)
            assert abs(b.at[2]) == pytest.approx(abs(a.at[2]), abs=1e-12)
            assert abs(b.at[2]) == pytest.approx(0.1)


@pytest.mark.derived("two parts of different strain: the free faces of each read their own")
def test_regions_on_free_surfaces() -> None:
    result, _ = two_parts(1e-3, 5e-3)
    number = 50 + np.arange(result.n_cells)
    found = elsewhere(result.with_arrays(cell_data={"element_number": number}), at="surface")
    for region, value in (("part=1", 1e-3), ("part=2", 5e-3)):
        e = by_array(found, region)["surface_principal_strain_1"]
        assert e.value == pytest.approx(value, rel=1e-9)
        cell = e.place["cell"]
        assert cell is not None
        assert e.place["element"] == number[cell]
        assert f"part={result.cell_data['part'][cell]}" == region


def test_surface_cells_beside_solids_have_no_part_in_it() -> None:
    """A skin over a solid: what is read at nodes is the solid's, with the skin computed or not."""
    # Source: the conventions of the project: the highest dimension is summarised.
    mesh = block(ELEMENTS["hexahedron"], 3)
    top = mesh.points[:, 2] > 1 - 1e-9
    faces = np.array([[c[k] for k in (4, 5, 6, 7)] for c in mesh.cells if top[c[4:]].all()])
    u, _ = quadratic(mesh.points, 1e-3)
    n = len(mesh.cells)
    blocks = (
        CellBlock("hexahedron", mesh.cells, np.arange(n)),
        CellBlock("quad", faces, n + np.arange(len(faces))),
    )
    result = Result(mesh.points, blocks, {"u": u})
    alone = elsewhere(mesh.result(u=u))
    for skin in (False, True):
        found = elsewhere(result, skin=skin)
        assert [e.place for e in found.extremes] == [e.place for e in alone.extremes]
        for a, b in zip(found.extremes, alone.extremes):
            assert a.value == pytest.approx(b.value, rel=1e-9)
            assert a.plus_minus == pytest.approx(b.plus_minus, rel=1e-9)
