"""Values at nodes on the borders of regions: duplicated points, every region with its own value, and the jump there."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest
import pyvista
from vtkmodules.util.numpy_support import numpy_to_vtk
from vtkmodules.vtkCommonCore import vtkBitArray
from vtkmodules.vtkCommonDataModel import vtkDataSetAttributes
from vtkmodules.vtkIOXML import vtkXMLUnstructuredGridReader, vtkXMLUnstructuredGridWriter

import unturn
import unturn._accessor  # found by itself only when the package is installed
from documents import run
from recovery_meshes import block
from test_nodal import HEAT, quadratic
from unturn import CellBlock, Result, UsageError, kinematics, strain
from unturn.elements import ELEMENTS
from unturn.io import series_writer

Floats = np.ndarray


def three_parts(name: str = "hexahedron", n: int = 4) -> Result:
    """A cube whose three parts meet along a line, each with a field of its own on top of a common one."""
    mesh = block(ELEMENTS[name], n, 0.1)
    x, y, _ = mesh.points[mesh.cells].mean(axis=1).T
    part = np.where(x < 0.5, 1, np.where(y < 0.5, 2, 3)).astype(np.int32)
    u = 1e-3 * np.sin(2 * mesh.points[:, [1, 2, 0]]) + 1e-3 * np.abs(mesh.points - 0.5)
    number = 1000 + np.arange(len(u), dtype=np.int32)[::-1]
    short = np.float32(mesh.points[:, :2] ** 2)
    temperature = np.full(len(u), HEAT["reference_temperature"] + 50.0)
    result = mesh.result(u=u, node_number=number, short=short, T=temperature)
    return result.with_arrays(
        cell_data={"part": part}, component_names={("point", "short"): ("left", "right")}
    )


def part_alone(result: Result, k: int) -> Result:
    """The same mesh without the cells of the other parts."""
    (cells,) = result.blocks
    mine = result.cell_data["part"] == k
    kept = CellBlock(cells.cell_type, cells.connectivity[mine], np.arange(int(mine.sum())))
    arrays = {n: a[mine] for n, a in result.cell_data.items()}
    return replace(result, blocks=(kept,), cell_data=arrays)


def assert_only_points_are_new(before: Result, after: Result) -> None:
    """Assert that a mesh differs from another by duplicated points alone, with all arrays carried over."""
    original = after.point_data["original_point"]
    n = before.n_points
    np.testing.assert_array_equal(original[:n], np.arange(n))
    np.testing.assert_array_equal(after.points, before.points[original])
    assert after.points.dtype == before.points.dtype
    for ours, theirs in zip(before.blocks, after.blocks, strict=True):
        assert ours.cell_type == theirs.cell_type
        np.testing.assert_array_equal(original[theirs.connectivity], ours.connectivity)
        np.testing.assert_array_equal(ours.index, theirs.index)
    for name, values in before.point_data.items():
        assert after.point_data[name].dtype == values.dtype
        np.testing.assert_array_equal(after.point_data[name], values[original])
    for kind in ("cell_data", "field_data"):
        for name, values in getattr(before, kind).items():
            found = getattr(after, kind)[name]
            assert found.dtype == values.dtype
            np.testing.assert_array_equal(found, values)
    assert {k: v for k, v in after.component_names.items() if k in before.component_names} == dict(
        before.component_names
    )


@pytest.mark.derived(
    "nothing is averaged across regions: a region's values are those of the region on its own"
)
@pytest.mark.parametrize("name", ["tetra", "hexahedron", "tetra10", "quad8", "wedge"])
def test_every_region_shows_its_own_value(name: str) -> None:
    result = three_parts(name, 3 if name == "tetra10" else 4)
    asked = ["strain", "principal_strain_hencky", "rotation"]
    options: dict[str, Any] = {"at": "nodes", "displacement": "u", "measures": asked, "solve": "nonlinear"}
    if name == "quad8":
        options["plane"] = "strain"
    found = strain(result, borders="split", **options)
    assert_only_points_are_new(result, found)
    original = found.point_data["original_point"]
    conn, part = found.blocks[0].connectivity, result.cell_data["part"]
    owners = np.zeros((found.n_points, 4), dtype=bool)
    for k in (1, 2, 3):
        owners[conn[part == k], k] = True
    assert (owners.sum(axis=1) == 1).all()
    assert np.bincount(original).max() == 3  # where all of them meet
    for k in (1, 2, 3):
        alone = strain(part_alone(result, k), **options)
        mine = np.flatnonzero(owners[:, k])
        for array in ("strain", "principal_strain_hencky", "rotation"):
            ours, expected = found.point_data[array][mine], alone.point_data[array][original[mine]]
            np.testing.assert_allclose(ours, expected, atol=1e-13)
            assert np.isfinite(ours).all()


@pytest.mark.derived(
    "the points of the file keep their positions and the value that they have without duplicates"
)
def test_the_points_of_the_file_come_first() -> None:
    result = three_parts()
    split = strain(result, at="nodes", displacement="u", borders="split")
    dominant = strain(result, at="nodes", displacement="u")
    for name, values in dominant.point_data.items():
        np.testing.assert_array_equal(split.point_data[name][: result.n_points], values)
    assert "original_point" not in dominant.point_data
    again = strain(split, at="nodes", displacement="u", borders="split", prefix="again_", measures=["strain"])
    np.testing.assert_allclose(again.point_data["again_strain"], split.point_data["strain"], atol=1e-13)
    assert again.n_points == split.n_points


@pytest.mark.derived(
    "with a zero step small and finite measures come from two motions; each is as if asked for alone"
)
def test_small_and_finite_measures_from_a_zero_step() -> None:
    result = three_parts()
    zero = result.with_arrays(point_data={"u": 0.3 * result.point_data["u"][:, [1, 2, 0]]})
    options: dict[str, Any] = {
        "at": "nodes",
        "displacement": "u",
        "borders": "split",
        "zero": zero,
        "solve": "nonlinear",
    }
    both = strain(result, measures=["strain", "strain_biot", "strain_jump_biot"], **options)
    for name in ("strain", "strain_biot"):
        alone = strain(result, measures=[name], **options)
        np.testing.assert_array_equal(both.point_data["original_point"], alone.point_data["original_point"])
        np.testing.assert_allclose(both.point_data[name], alone.point_data[name], atol=1e-15)
    alone = strain(result, measures=["strain_jump_biot"], **options)
    np.testing.assert_array_equal(both.point_data["strain_jump_biot"], alone.point_data["strain_jump_biot"])


@pytest.mark.derived("each part alone on the same nodes: a side of a border has the jump of its own cells")
@pytest.mark.parametrize("name", ["strain_jump", "strain_jump_hencky"])
def test_every_side_has_its_own_jump(name: str) -> None:
    result = three_parts()
    options: dict[str, Any] = {"at": "nodes", "measures": [name], "solve": "nonlinear"}
    split = strain(result, borders="split", **options)
    original, found = split.point_data["original_point"], split.point_data[name]
    (cells,) = split.blocks
    for k in (1, 2, 3):
        own = np.unique(cells.connectivity[result.cell_data["part"] == k])
        alone = strain(part_alone(result, k), **options).point_data[name]
        np.testing.assert_allclose(found[own], alone[original[own]], rtol=1e-10)
    largest = np.full(result.n_points, np.nan)
    np.fmax.at(largest, original, found)
    np.testing.assert_array_equal(strain(result, **options).point_data[name], largest)
    border = np.flatnonzero(np.bincount(original) > 1)
    assert not np.allclose(found[border], largest[border], rtol=0.01)  # some points of the file show less now


@pytest.mark.practice("a picture of what was written, whatever it is")
@pytest.mark.parametrize("measures", ["equivalent_strain", "strain_jump", "strain_error"])
def test_a_picture_of_values_at_duplicated_points(tmp_path: Path, measures: str) -> None:
    unturn.write(three_parts(), tmp_path / "in.vtu")
    picture = tmp_path / "p.png"
    asked = ["strain", str(tmp_path / "in.vtu"), "--at", "nodes", "--borders", "split", "--displacement", "u"]
    status, said = run([*asked, "--measures", measures, "--picture", str(picture)])
    assert (status, picture.exists()) == (0, True), said
    assert f"drew {picture}: {measures}" in said
    assert ("recovered at the nodes" in said.splitlines()[-1]) is (measures != "strain_error")


def test_a_mesh_without_borders_stays_as_it_is() -> None:
    # Source: the documented conventions: points on borders are duplicated, and no others.
    mesh = block(ELEMENTS["tetra"], 3)
    found = strain(mesh.result(u=quadratic(mesh.points)[0]), at="nodes", borders="split")
    assert found.n_points == len(mesh.points)
    np.testing.assert_array_equal(found.blocks[0].connectivity, mesh.cells)


@pytest.mark.derived("the free strain and the frame of a duplicate are those of its own region and place")
def test_free_strain_and_frames_of_duplicates() -> None:
    result = three_parts()
    options: dict[str, Any] = {
        "at": "nodes", "displacement": "u", "frame": "cylindrical 0,0,1 through -1,0,0", "measures": ["mechanical_strain"],
        "thermal_expansion": "part=1:1e-5;part=2:2e-5;part=3:3e-5", **HEAT,
    }  # fmt: skip
    found = strain(result, borders="split", **options)
    assert found.component_names["point", "mechanical_strain"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    conn = found.blocks[0].connectivity
    for k in (1, 2, 3):
        only = part_alone(result, k)
        alone = strain(only, **{**options, "thermal_expansion": k * 1e-5})
        mine = conn[result.cell_data["part"] == k].reshape(-1)
        np.testing.assert_allclose(
            found.point_data["mechanical_strain"][mine],
            alone.point_data["mechanical_strain"][only.blocks[0].connectivity.reshape(-1)],
            atol=1e-14,
        )


@pytest.mark.derived(
    "cells that are not computed keep their nodes, and points that no computed cell has stay"
)
def test_what_is_not_computed_stays() -> None:
    result = three_parts()
    (cells,) = result.blocks
    n = result.n_cells
    lone = np.vstack([result.points, [[9.0, 9, 9], [8, 8, 8]]])
    corner = result.n_points
    blocks = (
        cells,
        CellBlock("vertex", np.array([[corner], [5]]), np.array([n, n + 1])),
        CellBlock("quad", cells.connectivity[:2, :4], np.array([n + 2, n + 3])),
    )
    alive = np.ones(n + 4)
    alive[10:14] = 0
    after = Result(
        lone,
        blocks,
        {k: np.concatenate([v, v[:2]]) for k, v in result.point_data.items()},
        {"part": np.concatenate([result.cell_data["part"], [1, 1, 2, 2]]).astype(np.int32), "alive": alive},
        groups={"corner": np.array([n])},
    )
    found = strain(after, at="nodes", displacement="u", borders="split", alive="alive")
    assert_only_points_are_new(after, found)
    for k in (1, 2):
        np.testing.assert_array_equal(found.blocks[k].connectivity, blocks[k].connectivity)
    np.testing.assert_array_equal(found.blocks[0].connectivity[10:14], cells.connectivity[10:14])
    assert np.isnan(found.point_data["strain"][corner : corner + 2]).all()
    assert found.groups.keys() == after.groups.keys()


@pytest.mark.source("VTK 9 and meshio 5 as readers")
@pytest.mark.parametrize("suffix", [".vtu", ".vtk", ".vtkhdf", ".xdmf"])
@pytest.mark.parametrize("cells", ["tetra", "hexahedron"])
def test_every_format_holds_the_duplicates(tmp_path: Path, suffix: str, cells: str) -> None:
    source, target = tmp_path / f"in{suffix}", tmp_path / f"out{suffix}"
    unturn.write(three_parts(cells), source)
    before = unturn.read(source)
    asked = [str(source), "--at", "nodes", "--borders", "split", "--displacement", "u"]
    status, said = run(["strain", *asked, "-o", str(target)])
    assert status == 0, said
    found = unturn.read(target)
    assert_only_points_are_new(before, found)
    n = found.n_points - before.n_points
    assert f"5 arrays added, 5 unchanged; {n} points on borders duplicated" in said
    expected = strain(before, at="nodes", displacement="u", borders="split")
    for name in ("strain", "principal_strain", "original_point"):
        np.testing.assert_array_equal(found.point_data[name], expected.point_data[name])
    if suffix == ".xdmf":
        mesh = meshio.read(target)
        points, connectivity = mesh.points, mesh.cells[0].data
        values = mesh.point_data["principal_strain"]
    else:
        grid = pyvista.read(target)
        points, connectivity = grid.points, next(iter(grid.cells_dict.values()))
        values = grid.point_data["principal_strain"]
    np.testing.assert_array_equal(points, found.points)
    np.testing.assert_array_equal(connectivity, found.blocks[0].connectivity)
    np.testing.assert_array_equal(values, expected.point_data["principal_strain"])


@pytest.mark.source("VTK 9 as writer and reader: roles of arrays, and arrays that numpy does not hold")
def test_roles_and_strange_arrays_go_with_the_points(tmp_path: Path) -> None:
    unturn.write(three_parts(), tmp_path / "plain.vtu")
    grid = pyvista.read(tmp_path / "plain.vtu")
    bits = vtkBitArray()
    bits.SetName("flags")
    for k in range(grid.n_points):
        bits.InsertNextValue(k % 3 == 0)
    grid.GetPointData().AddArray(bits)
    ids = numpy_to_vtk(np.arange(grid.n_points) + 7, deep=True, array_type=12)
    ids.SetName("ids")
    grid.GetPointData().SetGlobalIds(ids)
    grid.GetCellData().SetActiveScalars("part")
    writer = vtkXMLUnstructuredGridWriter()
    writer.SetFileName(str(tmp_path / "in.vtu"))
    writer.SetInputData(grid)
    assert writer.Write()
    status, said = run(
        ["strain", str(tmp_path / "in.vtu"), "--at", "nodes", "--borders", "split", "--displacement", "u"]
    )
    assert status == 0, said
    reader = vtkXMLUnstructuredGridReader()
    reader.SetFileName(str(tmp_path / "in.strain.vtu"))
    reader.Update()
    found = reader.GetOutput()
    original = unturn.read(tmp_path / "in.strain.vtu").point_data["original_point"]
    flags = found.GetPointData().GetAbstractArray("flags")
    assert flags.GetNumberOfTuples() == len(original)
    assert [int(flags.GetTuple1(k)) for k in range(len(original))] == [int(o % 3 == 0) for o in original]
    ids = found.GetPointData().GetAttribute(vtkDataSetAttributes.GLOBALIDS)
    assert ids.GetName() == "ids"
    assert [int(ids.GetTuple1(k)) for k in range(len(original))] == [int(o) + 7 for o in original]
    assert found.GetCellData().GetScalars().GetName() == "part"


@pytest.mark.source("VTK 9 as a reader: a polyhedron keeps its faces")
def test_a_polyhedron_beside_the_parts(tmp_path: Path) -> None:
    result = three_parts()
    grid = pyvista.wrap(
        pyvista.UnstructuredGrid({pyvista.CellType.HEXAHEDRON: result.blocks[0].connectivity}, result.points)
    )
    far = pyvista.Box((3, 4, 3, 4, 3, 4)).faces.reshape(-1, 5)[:, 1:]
    box = pyvista.Box((3, 4, 3, 4, 3, 4)).points
    faces = [6]
    for face in far + grid.n_points:
        faces += [4, *face]
    cells = np.concatenate([grid.cells, [len(faces), *faces]])
    types = np.concatenate([grid.celltypes, [pyvista.CellType.POLYHEDRON]])
    mixed = pyvista.UnstructuredGrid(cells, types, np.vstack([grid.points, box]))
    mixed.point_data["u"] = np.vstack([result.point_data["u"], np.zeros((len(box), 3))])
    mixed.cell_data["part"] = np.append(result.cell_data["part"], np.int32(1))
    mixed.save(tmp_path / "in.vtu")
    status, said = run(["strain", str(tmp_path / "in.vtu"), "--at", "nodes", "--borders", "split"])
    assert status == 0, said
    found = pyvista.read(tmp_path / "in.strain.vtu")
    assert found.n_points > mixed.n_points
    last = found.get_cell(found.n_cells - 1)
    assert last.type == pyvista.CellType.POLYHEDRON
    assert last.n_faces == 6
    np.testing.assert_array_equal(np.sort(last.points, axis=0), np.sort(box, axis=0))


@pytest.mark.source("VTK 9 as a reader")
def test_a_structured_grid_becomes_unstructured(tmp_path: Path) -> None:
    grid = pyvista.ImageData(dimensions=(4, 4, 4)).cast_to_structured_grid()
    grid.point_data["u"] = 1e-3 * np.sin(grid.points)
    grid.cell_data["part"] = (grid.cell_centers().points[:, 0] > 1).astype(np.int32)
    grid.save(tmp_path / "in.vts")
    asked = ["strain", str(tmp_path / "in.vts"), "--at", "nodes", "--borders", "split"]
    status, said = run(asked)
    assert status == 0, said
    found = pyvista.read(tmp_path / "in.strain.vtu")
    assert found.n_points == grid.n_points + 16
    np.testing.assert_array_equal(found.cell_data["part"], grid.cell_data["part"])
    status, said = run([*asked, "-o", str(tmp_path / "out.vts")])
    assert (status, "give the output the suffix .vtu" in said) == (2, True), said
    mesh = grid.unturn.strain(at="nodes", borders="split")
    assert isinstance(mesh, pyvista.UnstructuredGrid)
    np.testing.assert_array_equal(mesh.point_data["strain"], found.point_data["strain"])


@pytest.mark.source("VTK 9 and meshio 5 as readers")
@pytest.mark.parametrize("suffix", ["xdmf", "pvd", "vtkhdf"])
def test_a_series_in_which_cells_die(tmp_path: Path, suffix: str) -> None:
    result = three_parts()
    source, target = tmp_path / f"in.{suffix}", tmp_path / f"out.{suffix}"
    with series_writer(source) as writer:
        for k in range(3):
            alive = np.ones(result.n_cells, dtype=np.int8)
            alive[: 20 * k] = 0
            step = result.with_arrays(
                point_data={"u": k * result.point_data["u"]}, cell_data={"alive": alive}
            )
            writer.add(step, 0.5 * k)
    asked = [str(source), "--at", "nodes", "--borders", "split", "--displacement", "u", "--alive", "alive"]
    status, said = run(["strain", *asked, "--step", "all", "-o", str(target)])
    assert status == 0, said
    sizes = set()
    for k in range(3):
        found = unturn.read(target, k)
        before = unturn.read(source, k)
        assert_only_points_are_new(before, found)
        expected = strain(before, at="nodes", displacement="u", borders="split", alive="alive")
        np.testing.assert_array_equal(found.point_data["strain"], expected.point_data["strain"])
        sizes.add(found.n_points)
    assert len(sizes) > 1  # where a part is gone there is no border


@pytest.mark.derived(
    "the largest difference between the strains of two parts at one point, over the split mesh"
)
@pytest.mark.parametrize("base", ["small", "hencky"])
def test_the_largest_jump_at_a_border(tmp_path: Path, base: str) -> None:
    source, data = tmp_path / "in.vtu", tmp_path / "out.json"
    unturn.write(three_parts(), source)
    result = unturn.read(source)
    ending = "" if base == "small" else f"_{base}"
    options: dict[str, Any] = {"at": "nodes", "displacement": "u", "base": base, "solve": "nonlinear"}
    found = strain(result, borders="split", measures=["strain"], **options)
    e = np.asarray(kinematics.tensor_from_components(found.point_data[f"strain{ending}"]))
    original = found.point_data["original_point"]
    part = np.zeros(found.n_points, dtype=int)
    part[found.blocks[0].connectivity] = result.cell_data["part"][:, None]
    best = (0.0, 0, 0, 0)
    for point in np.flatnonzero(np.bincount(original) > 1):
        here = np.flatnonzero(original == point)
        best = max(best, *((float(np.linalg.norm(e[a] - e[b])), int(point), int(part[a]), int(part[b]))
                           for a in here for b in here if part[a] < part[b]))  # fmt: skip
    asked = ["--at", "nodes", "--displacement", "u", "--base", base, "--solve", "nonlinear"]
    status, said = run(["strain", str(source), *asked, "--json", str(data)])
    assert status == 0, said
    jump = json.loads(data.read_text())["elsewhere"]["largest_jump_at_border"]
    assert jump["value"] == pytest.approx(best[0], rel=1e-9)
    assert (jump["point"], jump["node"]) == (best[1], result.point_data["node_number"][best[1]])
    assert set(jump["regions"]) == {f"part={best[2]}", f"part={best[3]}"}
    np.testing.assert_array_equal(jump["at"], result.points[best[1]])
    assert f"largest jump at a border: {best[0] * 1e6:.0f} microstrain" in said
    mesh = block(ELEMENTS["tetra"], 3)
    unturn.write(mesh.result(u=quadratic(mesh.points)[0]), source)
    status, said = run(
        ["strain", str(source), "--at", "nodes", "--json", str(data), "-o", str(tmp_path / "x.vtu")]
    )
    assert json.loads(data.read_text())["elsewhere"]["largest_jump_at_border"] is None
    assert "jump at a border" not in said


def test_what_is_refused(tmp_path: Path) -> None:
    # Source: the exit codes of the project: 2 is wrong usage.
    result = three_parts()
    with pytest.raises(UsageError, match="--borders split belongs to --at nodes"):
        strain(result, displacement="u", borders="split")
    with pytest.raises(UsageError, match="borders='both' is not known"):
        strain(result, displacement="u", at="nodes", borders="both")  # type: ignore[arg-type]
    taken = result.with_arrays(point_data={"original_point": np.arange(result.n_points)})
    with pytest.raises(UsageError, match="already has a point array called 'original_point'"):
        strain(taken, displacement="u", at="nodes", borders="split")
    found = strain(taken, displacement="u", at="nodes", borders="split", prefix="my_")
    np.testing.assert_array_equal(found.point_data["my_original_point"], found.point_data["original_point"])
