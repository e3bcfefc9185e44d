"""Values at nodes, on free surfaces and at quadrature points: fields of closed form, borders, and what is refused."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import meshes
import unturn
from documents import run
from unturn import CellBlock, Result, kinematics
from unturn.elements import ELEMENTS

SAMPLES = Path(__file__).parents[1] / "sample_meshes"


def bricks(n: int = 3) -> tuple[np.ndarray, np.ndarray]:
    """Points and hexahedra of a cube of n^3 unequal bricks."""
    axis = np.linspace(0, 1, n + 1) ** 1.3
    z, y, x = np.meshgrid(axis, axis, axis, indexing="ij")
    corner = np.arange((n + 1) ** 3).reshape(n + 1, n + 1, n + 1)[:-1, :-1, :-1].ravel()
    row, layer = n + 1, (n + 1) ** 2
    offsets = np.array([0, 1, row + 1, row, layer, layer + 1, layer + row + 1, layer + row])
    return np.stack([x.ravel(), y.ravel(), z.ravel()], axis=1), corner[:, None] + offsets


def cube(u: np.ndarray | None = None, **more: object) -> Result:
    points, cells = bricks()
    block = CellBlock("hexahedron", cells, np.arange(len(cells)))
    field = points * [1e-3, -3e-4, -3e-4] if u is None else u
    return Result(points, (block,), {"u": field}, **more)  # type: ignore[arg-type]


H = np.array([[1e-3, 4e-4, 0], [-2e-4, 5e-4, 3e-4], [1e-4, 0, -6e-4]])


@pytest.mark.derived("u = H X: every measure at every node is that of H")
@pytest.mark.parametrize("method", ["patch", "extrapolate", "average"])
@pytest.mark.parametrize("name", ["hexahedron", "tetra10", "wedge15", "hexahedron20"])
def test_a_linear_field_is_exact_at_nodes(name: str, method: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    result = mesh.result(u=mesh.points @ H.T)
    found = unturn.strain(
        result, at="nodes", recovery=method, measures=["strain", "rotation", "principal_strain"]
    )  # type: ignore[arg-type]
    used = np.unique(mesh.cells)
    expected = {
        "strain": kinematics.tensor_to_components(kinematics.strain(H)),
        "rotation": kinematics.rotation_vector(H),
        "principal_strain": kinematics.principal_strain(kinematics.strain(H)),
    }
    for key, value in expected.items():
        np.testing.assert_allclose(found.point_data[key][used], np.tile(value, (len(used), 1)), atol=1e-13)
    assert not set(expected) & set(found.cell_data)
    assert found.component_names["point", "strain"] == ("XX", "YY", "ZZ", "XY", "YZ", "XZ")


@pytest.mark.derived("a rigid turn has no finite strain, at nodes as anywhere")
def test_a_turned_cube_has_no_hencky_strain_at_nodes() -> None:
    points, _ = bricks()
    turn = np.array([[0.0, -1, 0], [1, 0, 0], [0, 0, 1]])
    found = unturn.strain(cube(points @ turn.T - points), at="nodes", base="hencky", solve="nonlinear")
    assert np.abs(found.point_data["strain_hencky"]).max() < 1e-13
    np.testing.assert_allclose(found.point_data["finite_rotation"][:, 2], np.pi / 2, rtol=1e-12)


@pytest.mark.derived(
    "two parts with strains of their own: the border keeps both, and each reads its own extreme"
)
def test_nothing_is_averaged_across_regions(tmp_path: Path) -> None:
    points, cells = bricks()
    seam = points[4 * 0 + 2, 0]
    u = np.zeros_like(points)
    u[:, 0] = np.where(points[:, 0] <= seam, 1e-3 * points[:, 0], 1e-3 * seam + 4e-3 * (points[:, 0] - seam))
    part = (points[cells][:, :, 0].mean(axis=1) > seam).astype(np.int32) + 1
    result = cube(u, cell_data={"part": part})
    unturn.write(result, tmp_path / "two.vtu")
    found = unturn.strain(result, at="nodes")
    left, right = points[:, 0] < seam - 1e-9, points[:, 0] > seam + 1e-9
    np.testing.assert_allclose(found.point_data["strain"][left, 0], 1e-3, rtol=1e-9)
    np.testing.assert_allclose(found.point_data["strain"][right, 0], 4e-3, rtol=1e-9)
    status, said = run(
        ["strain", str(tmp_path / "two.vtu"), "--at", "nodes", "--json", str(tmp_path / "two.json")]
    )
    assert status == 0, said
    summary = json.loads((tmp_path / "two.json").read_text(encoding="utf-8"))
    data = summary["elsewhere"]
    largest = {e["region"]: e["value"] for e in data["extremes"] if e["statistic"] == "largest principal"}
    assert largest == pytest.approx({"part=1": 1e-3, "part=2": 4e-3}, rel=1e-9)
    assert summary["suspected_singular"] == []
    assert all(v == pytest.approx(0, abs=1e-6) for v in data["estimated_error_percent"].values())


@pytest.mark.derived("u = H X on a cube: six sides of area 1, in-plane strain of H on each")
def test_free_faces_of_a_cube() -> None:
    points, _ = bricks()
    found = unturn.strain(cube(points @ H.T), at="surface")
    assert found.n_cells == 6 * 9
    assert found.cell_data["area"].sum() == pytest.approx(6)
    e = kinematics.strain(H)
    top = found.cell_data["surface_normal"][:, 2] > 0.9
    values = np.linalg.eigvalsh(e[:2, :2])[::-1]
    np.testing.assert_allclose(
        found.cell_data["surface_principal_strain"][top], np.tile(values, (9, 1)), rtol=1e-10
    )


@pytest.mark.derived("weights of quadrature points add up to the volume")
def test_quadrature_points_of_a_cube() -> None:
    found = unturn.strain(cube(), at="quadrature")
    assert found.n_cells == found.n_points == 27 * 8
    assert found.point_data["weight"].sum() == pytest.approx(1)
    np.testing.assert_allclose(found.point_data["strain"][:, 0], 1e-3, rtol=1e-10)


@pytest.mark.parametrize(
    ("file", "arguments", "said"),
    [
        ("lever.xdmf", ["--at", "surface", "--step", "all"], "makes a mesh of its own"),
        ("ring.vtu", ["--at", "surface", "--plane", "strain"], "--at surface needs solids"),
        ("bracket.vtu", ["--at", "nodes", "--measures", "element_volume"], "belongs to cells"),
        ("skin.vtu", ["--at", "nodes", "--base", "hencky"], "is not recovered at nodes"),
        ("bracket.vtu", ["--at", "surface", "--frame", "cylindrical z"], "has its own frame"),
        ("bracket.vtu", ["--at", "corners"], "--at"),
    ],
)
def test_what_is_refused(file: str, arguments: list[str], said: str, tmp_path: Path) -> None:
    status, text = run(["strain", str(SAMPLES / file), "-o", str(tmp_path / "out.vtu"), *arguments])
    assert (status, said in text) == (2, True), text
    assert not list(tmp_path.iterdir())


def test_the_surface_reads_what_centroids_understate(tmp_path: Path) -> None:
    """The bracket's arm bends: twice its centroid strain at the faces."""
    source, target = str(SAMPLES / "bracket.vtu"), tmp_path / "faces.vtu"
    status, said = run(["strain", source, "--at", "surface", "-o", str(target)])
    assert status == 0, said
    faces = unturn.read(target)
    at_centroid = unturn.strain(unturn.read(source)).cell_data["principal_strain"][:, 0].max()
    assert faces.cell_data["surface_principal_strain"].max() > 1.8 * at_centroid
    numbers = unturn.read(source).cell_data["element_number"]
    assert (numbers[faces.cell_data["parent_cell"]] == faces.cell_data["parent_element"]).all()
