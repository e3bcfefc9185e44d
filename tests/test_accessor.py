"""The PyVista plug-in: where it hangs, that it only delegates, that nothing is lost or changed."""

from __future__ import annotations

import os
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest
import pyvista

import unturn
import unturn._accessor
from unturn.errors import DisplacementError, UsageError

ROOT = Path(__file__).parent.parent
H = np.array([[1.0, 2.0, -3.0], [4.0, -5.0, 6.0], [0.5, 8.0, 9.0]]) * 1e-4
SIX = [(0, 0), (1, 1), (2, 2), (0, 1), (1, 2), (0, 2)]


def structured() -> pyvista.StructuredGrid:
    grid = pyvista.ImageData(dimensions=(3, 4, 2)).cast_to_structured_grid()
    points = np.array(grid.points)
    grid.points = points + 0.1 * np.sin(points[:, [1, 2, 0]])
    return grid


MESHES = {
    "UnstructuredGrid": lambda: structured().cast_to_unstructured_grid(),
    "StructuredGrid": structured,
    "RectilinearGrid": lambda: pyvista.RectilinearGrid([0.0, 1.0, 3.0], [0.0, 2.0, 5.0], [0.0, 1.0, 4.0]),
    "ImageData": lambda: pyvista.ImageData(dimensions=(4, 3, 5), spacing=(1, 2, 3), origin=(5, 6, 7)),
}


def moved(mesh: pyvista.DataSet, gradient: np.ndarray = H) -> pyvista.DataSet:
    mesh.point_data["u"] = np.array(mesh.points) @ gradient.T
    return mesh


@pytest.mark.derived("a linear displacement has the same gradient everywhere; e = (H + Ht)/2")
@pytest.mark.parametrize("kind", MESHES)
def test_every_grid_keeps_its_class_and_gets_right_numbers(kind):
    mesh = moved(MESHES[kind]())
    found = mesh.unturn.strain(measures=["strain", "rotation"])
    assert type(found) is type(mesh) is getattr(pyvista, kind)
    symmetric = (H + H.T) / 2
    expected = np.tile([symmetric[i, j] for i, j in SIX], (mesh.n_cells, 1))
    np.testing.assert_allclose(found.cell_data["strain"], expected, rtol=0, atol=1e-15)
    turn = np.array([H[2, 1] - H[1, 2], H[0, 2] - H[2, 0], H[1, 0] - H[0, 1]]) / 2
    np.testing.assert_allclose(
        found.cell_data["rotation"], np.tile(turn, (mesh.n_cells, 1)), rtol=0, atol=1e-15
    )


@pytest.mark.derived("u_x = x^2/2 on cells with straight sides along x: e_xx at the centroid is its x")
@pytest.mark.parametrize("kind", ["RectilinearGrid", "ImageData"])
def test_values_stay_with_their_cells(kind):
    mesh = MESHES[kind]()
    x = np.array(mesh.points)[:, 0]
    mesh.point_data["u"] = np.stack([x**2 / 2e3, 0 * x, 0 * x], axis=1)
    found = mesh.unturn.strain(measures=["strain"])
    np.testing.assert_allclose(
        found.cell_data["strain"][:, 0], mesh.cell_centers().points[:, 0] / 1e3, rtol=1e-12
    )


@pytest.mark.derived("cells of PolyData are numbered vertices, lines, polygons, strips, in VTK's order")
def test_poly_data_of_several_kinds_keeps_the_order_of_its_cells():
    points = np.array([[0, 0, 0], [2, 0, 0], [2, 1, 0.5], [0, 1, 0.5], [4, 0, 0], [4, 1, 0.5]], dtype=float)
    mesh = pyvista.PolyData(points, faces=[3, 0, 1, 2, 3, 0, 2, 3, 4, 1, 4, 5, 2], lines=[2, 0, 4])
    pull = np.where(points[:, 0] > 2, 3e-3 * (points[:, 0] - 2), 0) + 1e-3 * points[:, 0]
    mesh.point_data["u"] = np.stack([pull, 0 * pull, 0 * pull], axis=1)
    found = mesh.unturn.strain(measures=["strain"], skin=True)
    assert type(found) is pyvista.PolyData
    # the line of length 4 is stretched by 4e-3 + 6e-3; the triangles by 1e-3; the quad by 4e-3
    np.testing.assert_allclose(
        found.cell_data["strain"][:, 0], [2.5e-3, 1e-3, 1e-3, 4e-3], rtol=0, atol=1e-15
    )


def test_the_mesh_is_left_as_it_was_and_nothing_is_lost():
    mesh = moved(MESHES["UnstructuredGrid"]())
    mesh.cell_data["number"] = np.arange(mesh.n_cells, dtype=np.int32)
    mesh.field_data["who"] = ["nobody"]
    mesh.set_active_scalars("number")
    before = mesh.copy()
    found = mesh.unturn.strain()
    assert mesh == before
    assert found.active_scalars_name == "number"
    np.testing.assert_array_equal(found.cell_data["number"], mesh.cell_data["number"])
    assert found.cell_data["number"].dtype == np.int32
    assert found.field_data["who"][0] == "nobody"
    np.testing.assert_array_equal(found.points, mesh.points)
    added = set(found.array_names) - set(mesh.array_names)
    assert added == {"strain", "rotation", "equivalent_strain", "principal_strain"}
    found.cell_data["strain"][:] = 0
    assert mesh == before


def test_a_class_of_ones_own_is_kept():
    class Mine(pyvista.UnstructuredGrid):
        pass

    assert type(moved(Mine(MESHES["UnstructuredGrid"]())).unturn.strain()) is Mine


def test_components_have_names():
    found = moved(MESHES["UnstructuredGrid"]()).unturn.strain()
    array = found.GetCellData().GetArray("strain")
    assert [array.GetComponentName(k) for k in range(6)] == ["XX", "YY", "ZZ", "XY", "YZ", "XZ"]


def test_calls_can_follow_each_other():
    mesh = moved(MESHES["UnstructuredGrid"]())
    found = mesh.unturn.strain(measures=["strain"]).unturn.strain(measures=["rotation_angle"], prefix="my_")
    assert {"strain", "my_rotation_angle"} <= set(found.cell_data.keys())


def test_it_only_delegates(monkeypatch):
    seen = {}

    def fake(result, **options):
        seen.update(options, n=result.n_cells)
        return result.with_arrays(cell_data={"made": np.zeros(result.n_cells)})

    monkeypatch.setattr(unturn._accessor, "strain", fake)
    mesh = moved(MESHES["UnstructuredGrid"]())
    assert "made" in mesh.unturn.strain(at="mean", threads=1).cell_data
    assert seen == {"at": "mean", "threads": 1, "n": mesh.n_cells}


def test_errors_are_those_of_the_package():
    with pytest.raises(DisplacementError, match="displacement"):
        MESHES["UnstructuredGrid"]().unturn.strain()
    again = moved(MESHES["UnstructuredGrid"]()).unturn.strain()
    with pytest.raises(UsageError, match="already has a cell array"):
        again.unturn.strain()


def test_it_hangs_on_meshes_only():
    targets = {r.target for r in pyvista.registered_accessors() if r.name == "unturn"}
    assert targets == {getattr(pyvista, k) for k in (*MESHES, "PolyData")}
    assert not hasattr(pyvista.MultiBlock(), "unturn")
    assert not hasattr(pyvista.Table({"a": np.ones(1)}), "unturn")


def test_the_accessor_equals_the_function():
    mesh = pyvista.read(ROOT / "sample_meshes" / "bracket.vtu")
    found = mesh.unturn.strain()
    direct = unturn.strain(unturn.read(ROOT / "sample_meshes" / "bracket.vtu"))
    for name in ("strain", "rotation", "equivalent_strain", "principal_strain"):
        np.testing.assert_array_equal(found.cell_data[name], direct.cell_data[name])


def test_pyvista_alone_finds_it_once_installed(tmp_path):
    """What an installer writes, without installing: the entry points beside the package."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    points = project["entry-points"]["pyvista.accessors"]
    info = tmp_path / "unturn-0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: unturn\nVersion: 0\n", encoding="utf-8")
    lines = [f"{name} = {value}" for name, value in points.items()]
    (info / "entry_points.txt").write_text("\n".join(["[pyvista.accessors]", *lines]), encoding="utf-8")
    path = os.pathsep.join([str(ROOT / "src"), str(tmp_path)])
    done = subprocess.run(
        [sys.executable, str(ROOT / "tests" / "plugin_check.py")],
        env={**os.environ, "PYTHONPATH": path},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "found by PyVista alone" in done.stdout


@pytest.mark.derived("u = 1e-3 X: XX is 1e-3 at every node, on every face and at every quadrature point")
def test_values_that_live_elsewhere_than_on_cells() -> None:
    mesh = pyvista.ImageData(dimensions=(3, 3, 3)).cast_to_unstructured_grid()
    mesh.point_data["u"] = mesh.points * [1e-3, 0, 0]
    at_nodes = mesh.unturn.strain(at="nodes")
    assert at_nodes.n_cells == mesh.n_cells
    assert "strain" not in at_nodes.cell_data
    np.testing.assert_allclose(at_nodes.point_data["strain"][:, 0], 1e-3, rtol=1e-9)
    faces = mesh.unturn.strain(at="surface")
    assert faces.n_cells == 24
    np.testing.assert_allclose(np.sum(faces.cell_data["area"]), 24, rtol=1e-12)
    cloud = mesh.unturn.strain(at="quadrature")
    assert cloud.n_points == 64
    np.testing.assert_allclose(cloud.point_data["strain"][:, 0], 1e-3, rtol=1e-9)
    assert list(mesh.point_data) == ["u"]
