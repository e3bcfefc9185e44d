"""What is written as XDMF comes back bit for bit, and other programs read it right."""

from __future__ import annotations

import json
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import h5py
import meshio
import numpy as np
import pytest

import unturn.io
from roundtrip import assert_same, round_trip
from unturn.errors import UsageError
from unturn.io import xdmf
from unturn.io.xdmf_mesh import CELLS
from unturn.result import CellBlock, Result, Steps
from xdmf_samples import assert_bits, cell_points, everything, one_cell

TYPES = [cell_type for _, _, cell_type, _ in CELLS if cell_type != "polygon"]

VTK_READS = """
import json, sys
import vtk
from vtk.util.numpy_support import vtk_to_numpy
vtk.vtkObject.GlobalWarningDisplayOff()

def arrays(held):
    found = [held.GetArray(i) for i in range(held.GetNumberOfArrays())]
    return {a.GetName(): vtk_to_numpy(a).tolist() for a in found if a}

def read(path, time):
    reader = vtk.vtkXdmfReader()
    reader.SetFileName(path)
    reader.UpdateInformation()
    if time is not None:
        reader.UpdateTimeStep(time)
    reader.Update()
    data = reader.GetOutputDataObject(0)
    types, cells = [], []
    for i in range(data.GetNumberOfCells()):
        cell = data.GetCell(i)
        types.append(cell.GetCellType())
        cells.append([cell.GetPointId(j) for j in range(cell.GetNumberOfPoints())])
    return {
        "types": types, "cells": cells,
        "points": [data.GetPoint(i) for i in range(data.GetNumberOfPoints())],
        "point": arrays(data.GetPointData()), "cell": arrays(data.GetCellData()),
        "field": arrays(data.GetFieldData()),
    }

print(json.dumps([read(*job) for job in json.loads(sys.argv[1])]))
"""


def read_by_vtk(*jobs: tuple[Path, float | None]) -> list[dict]:
    """Read files with VTK's XDMF reader, in a process of its own: it dies on damaged files."""
    work = json.dumps([(str(path), time) for path, time in jobs])
    command = [sys.executable, "-c", VTK_READS, work]
    return json.loads(subprocess.run(command, capture_output=True, check=True, timeout=60).stdout)


# Common practice, no source.
def test_everything_comes_back_bit_for_bit(tmp_path: Path) -> None:
    meant = everything()
    assert xdmf.write(meant, tmp_path / "a.xdmf") == ()
    found = xdmf.open_file(tmp_path / "a.xdmf").read()
    assert_same(meant, found)
    assert found.steps is None
    assert found.notes == ()


def test_a_second_round_changes_nothing(tmp_path: Path) -> None:
    xdmf.write(everything(), tmp_path / "a.xdmf")
    once = xdmf.open_file(tmp_path / "a.xdmf").read()
    (tmp_path / "again").mkdir()
    xdmf.write(once, tmp_path / "again" / "a.xdmf")
    assert (tmp_path / "a.xdmf").read_bytes() == (tmp_path / "again" / "a.xdmf").read_bytes()
    assert_same(once, xdmf.open_file(tmp_path / "again" / "a.xdmf").read())


@pytest.mark.parametrize("cell_type", TYPES)
def test_every_cell_type_comes_back_with_mid_side_nodes_in_place(cell_type: str, tmp_path: Path) -> None:
    meant = one_cell(cell_type)
    xdmf.write(meant, tmp_path / "a.xdmf")
    found = xdmf.open_file(tmp_path / "a.xdmf").read()
    assert_same(meant, found)
    block = found.blocks[0]
    # Source: VTK 9.7, class references of the cells (node positions).
    np.testing.assert_array_equal(found.points[block.connectivity[0]], cell_points(cell_type))


@pytest.mark.source("VTK 9.7.2, vtkXdmfReader: an independent reader of the same file")
def test_vtk_reads_every_cell_type_in_the_same_order(tmp_path: Path) -> None:
    for cell_type in TYPES:
        xdmf.write(one_cell(cell_type), tmp_path / f"{cell_type}.xdmf")
    for cell_type, found in zip(TYPES, read_by_vtk(*((tmp_path / f"{t}.xdmf", None) for t in TYPES))):
        meant = one_cell(cell_type)
        assert found["cells"] == meant.blocks[0].connectivity.tolist(), cell_type
        np.testing.assert_array_equal(found["points"], meant.points)
        np.testing.assert_array_equal(found["point"]["u"], meant.point_data["u"])


@pytest.mark.source("VTK 9.7.2, vtkXdmfReader")
def test_vtk_reads_mixed_cells_and_all_arrays_it_can_hold(tmp_path: Path) -> None:
    meant = replace(everything(), groups={})
    xdmf.write(meant, tmp_path / "a.xdmf")
    (found,) = read_by_vtk((tmp_path / "a.xdmf", None))
    # Source: VTK 9.7, vtkCellType.h; hexahedron, poly-vertex, quadratic tetrahedron, poly-line, polygon.
    assert found["types"] == [12, 2, 24, 4, 7, 2]
    for block in meant.blocks:
        assert [found["cells"][i] for i in block.index] == block.connectivity.tolist()
    for name in ("u", "single", "six", "nine", "four", "i1", "u1", "i4", "i8"):
        np.testing.assert_array_equal(found["point"][name], meant.point_data[name])
    np.testing.assert_array_equal(found["cell"]["material"], meant.cell_data["material"])
    np.testing.assert_array_equal(found["field"]["load"], meant.field_data["load"])


@pytest.mark.source("VTK 9.7.2, vtkXdmfReader: 6-component tensors become 9, row by row")
def test_vtk_reads_the_symmetric_tensor_in_its_own_nine_places(tmp_path: Path) -> None:
    meant = everything()
    xdmf.write(replace(meant, groups={}), tmp_path / "a.xdmf")
    (read,) = read_by_vtk((tmp_path / "a.xdmf", None))
    found = np.array(read["point"]["strain"]).reshape(-1, 3, 3)
    xx, yy, zz, xy, yz, xz = meant.point_data["strain"].T
    expected = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]).transpose(2, 0, 1)
    np.testing.assert_array_equal(found, expected)


@pytest.mark.source("XDMF model and format, Attribute: Tensor6 is XX XY XZ YY YZ ZZ")
def test_tensor6_is_stored_in_the_order_of_xdmf_and_the_file_says_so(tmp_path: Path) -> None:
    meant = everything()
    xdmf.write(meant, tmp_path / "a.xdmf")
    with h5py.File(tmp_path / "a.xdmf.h5") as file:
        stored = file["/grid_0/strain"]
        np.testing.assert_array_equal(stored[:, 1], meant.point_data["strain"][:, 3])
        assert stored.attrs["component_names"].tolist() == ["XX", "XY", "XZ", "YY", "YZ", "ZZ"]
        np.testing.assert_array_equal(file["/grid_0/six"][()], meant.point_data["six"])
    assert "components: XX XY XZ YY YZ ZZ" in (tmp_path / "a.xdmf").read_text()


@pytest.mark.source("meshio 5.3.5: an independent reader of the same file")
@pytest.mark.parametrize("cell_type", [t for t in TYPES if t not in ("wedge15", "pyramid13", "hexahedron24")])
def test_meshio_reads_every_cell_type_it_knows(cell_type: str, tmp_path: Path) -> None:
    meant = one_cell(cell_type)
    xdmf.write(meant, tmp_path / "a.xdmf")
    found = meshio.read(tmp_path / "a.xdmf")
    assert found.cells[0].type == cell_type
    assert_bits(found.cells[0].data, meant.blocks[0].connectivity)
    assert_bits(found.points, meant.points)
    assert_bits(found.point_data["u"], meant.point_data["u"])


@pytest.mark.source("meshio 5.3.5")
def test_meshio_reads_a_mixed_linear_mesh_and_arrays(tmp_path: Path) -> None:
    whole = everything()
    blocks = (
        CellBlock("hexahedron", np.arange(10, 18)[None], np.array([0])),
        CellBlock("tetra", np.array([[0, 1, 2, 3], [0, 1, 2, 4]]), np.array([1, 2])),
        CellBlock("line", np.array([[3, 4]]), np.array([3])),
    )
    cell_data = {"material": np.arange(4)}
    meant = replace(whole, blocks=blocks, cell_data=cell_data, field_data={}, groups={})
    xdmf.write(meant, tmp_path / "a.xdmf")
    found = meshio.read(tmp_path / "a.xdmf")
    assert [b.type for b in found.cells] == ["hexahedron", "tetra", "line"]
    np.testing.assert_array_equal(found.cells[1].data, blocks[1].connectivity)
    for name, values in meant.point_data.items():
        if name != "strain":
            assert_bits(found.point_data[name], values)
    assert np.concatenate(found.cell_data["material"]).tolist() == [0, 1, 2, 3]


def test_two_dimensional_points_are_written_as_two_coordinates(tmp_path: Path) -> None:
    meant = replace(one_cell("triangle"), point_dimension=2)
    xdmf.write(meant, tmp_path / "a.xdmf")
    with h5py.File(tmp_path / "a.xdmf.h5") as file:
        assert file["/grid_0/points"].shape == (6, 2)
    found = xdmf.open_file(tmp_path / "a.xdmf").read()
    assert_same(meant, found)
    assert found.point_dimension == 2


def test_float32_points_stay_float32(tmp_path: Path) -> None:
    meant = one_cell("tetra")
    meant = replace(meant, points=meant.points.astype(np.float32))
    xdmf.write(meant, tmp_path / "a.xdmf")
    assert_same(meant, xdmf.open_file(tmp_path / "a.xdmf").read())


def test_the_numbers_lie_beside_the_index_wherever_the_program_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    (tmp_path / "out" / "foot.h5").write_bytes(b"the solver's own file")
    xdmf.write(one_cell("tetra"), tmp_path / "out" / "foot.xdmf")
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["foot.h5", "foot.xdmf", "foot.xdmf.h5"]
    assert (tmp_path / "out" / "foot.h5").read_bytes() == b"the solver's own file"
    assert list((tmp_path / "elsewhere").iterdir()) == []
    (tmp_path / "out").rename(tmp_path / "moved")
    assert xdmf.open_file(tmp_path / "moved" / "foot.xdmf").read().n_cells == 2


def test_nothing_is_compressed(tmp_path: Path) -> None:
    xdmf.write(one_cell("tetra"), tmp_path / "a.xdmf")
    with h5py.File(tmp_path / "a.xdmf.h5") as file:
        assert file["/grid_0/u"].compression is None


def test_the_time_of_one_step_is_kept(tmp_path: Path) -> None:
    meant = replace(one_cell("tetra"), steps=Steps((0.0, 0.1 + 0.2), 1))
    xdmf.write(meant, tmp_path / "a.xdmf")
    file = xdmf.open_file(tmp_path / "a.xdmf")
    assert file.steps == (0.1 + 0.2,)
    assert file.read().steps == Steps((0.1 + 0.2,), 0)


# What cannot be held


@pytest.mark.parametrize("cell_type", ["VTK_LAGRANGE_TETRAHEDRON", "polyhedron", "triangle7", "tetra20"])
def test_cells_that_xdmf_has_not_are_refused(cell_type: str, tmp_path: Path) -> None:
    block = CellBlock(cell_type, np.arange(4)[None], np.array([0]))
    with pytest.raises(UsageError, match=rf"no cells of type {cell_type} .* Write VTU instead"):
        xdmf.write(Result(np.zeros((4, 3)), (block,)), tmp_path / "a.xdmf")


def test_arrays_that_xdmf_cannot_hold_are_named(tmp_path: Path) -> None:
    meant = one_cell("tetra").with_arrays(
        point_data={
            "fixed": np.arange(8) % 2 == 0,
            "half": np.arange(8, dtype=np.float16),
            "wave": np.ones(8, complex),
        },
        field_data={"title": np.array(["foot"])},
    )
    lost = xdmf.write(meant, tmp_path / "a.xdmf")
    assert [next(n for n in ("fixed", "half", "wave", "title") if repr(n) in s) for s in lost] == [
        "fixed", "half", "wave", "title"
    ]  # fmt: skip
    found = xdmf.open_file(tmp_path / "a.xdmf").read()
    assert set(found.point_data) == {"u", "fixed", "half"}
    assert_bits(found.point_data["fixed"], (np.arange(8) % 2 == 0).astype(np.uint8))


@pytest.mark.parametrize("name", ["bell\x07", "half\ud800"])
def test_names_that_xml_cannot_hold_are_refused(name: str, tmp_path: Path) -> None:
    meant = one_cell("tetra").with_arrays(point_data={name: np.zeros(8)})
    with pytest.raises(UsageError, match="cannot be written in XDMF"):
        xdmf.write(meant, tmp_path / "a.xdmf")


def test_a_time_that_is_no_number_is_refused(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="step value nan"):
        xdmf.write(replace(one_cell("tetra"), steps=Steps((float("nan"),), 0)), tmp_path / "a.xdmf")


def test_a_replaced_array_is_written_with_its_new_shape(tmp_path: Path) -> None:
    xdmf.write(everything(), tmp_path / "a.xdmf")
    found = xdmf.open_file(tmp_path / "a.xdmf").read()
    new = found.with_arrays(point_data={"u": np.ones((18, 4), np.float32)})
    new = replace(new, component_names={})
    xdmf.write(new, tmp_path / "b.xdmf")
    assert_bits(xdmf.open_file(tmp_path / "b.xdmf").read().point_data["u"], np.ones((18, 4), np.float32))


# Series


def step_of(number: int) -> Result:
    return one_cell("tetra").with_arrays(point_data={"u": np.full((8, 3), float(number))})


def test_a_series_is_valid_after_every_step_and_stores_one_mesh(tmp_path: Path) -> None:
    path = tmp_path / "s.xdmf"
    writer = xdmf.open_series(path)
    for number in range(3):
        writer.add(step_of(number), 0.5 * number)
        file = xdmf.open_file(path)
        assert file.steps == tuple(0.5 * k for k in range(number + 1))
        assert_same(step_of(number), file.read(number))
    writer.close()
    with h5py.File(tmp_path / "s.xdmf.h5") as h5:
        assert [name for name in h5 if "points" in h5[name]] == ["grid_0"]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["s.xdmf", "s.xdmf.h5"]


def test_a_series_whose_mesh_changes_gives_each_step_its_own(tmp_path: Path) -> None:
    path = tmp_path / "s.xdmf"
    writer = xdmf.open_series(path)
    steps = [one_cell("tetra"), one_cell("hexahedron"), one_cell("tetra")]
    for number, meant in enumerate(steps):
        writer.add(meant, float(number))
    for number, meant in enumerate(steps):
        assert_same(meant, xdmf.open_file(path).read(number))


def test_an_array_missing_in_a_step_is_missing_there(tmp_path: Path) -> None:
    path = tmp_path / "s.xdmf"
    writer = xdmf.open_series(path)
    writer.add(step_of(0).with_arrays(cell_data={"alive": np.array([1, 1])}), 0.0)
    writer.add(step_of(1), 1.0)
    file = xdmf.open_file(path)
    assert "alive" in file.read(0).cell_data
    assert "alive" not in file.read(1).cell_data


@pytest.mark.source("VTK 9.7.2, vtkXdmfReader; meshio 5.3.5, TimeSeriesReader")
def test_vtk_and_meshio_read_the_series(tmp_path: Path) -> None:
    path = tmp_path / "s.xdmf"
    writer = xdmf.open_series(path)
    for number in range(3):
        writer.add(step_of(number), 0.5 * number)
    for number, found in enumerate(read_by_vtk(*((path, 0.5 * k) for k in range(3)))):
        np.testing.assert_array_equal(found["point"]["u"], step_of(number).point_data["u"])
        assert found["cells"] == [[0, 1, 2, 3], [4, 5, 6, 7]]
    with meshio.xdmf.TimeSeriesReader(path) as reader:
        points, cells = reader.read_points_cells()
        assert_bits(points, step_of(0).points)
        assert cells[0].data.tolist() == [[0, 1, 2, 3], [4, 5, 6, 7]]
        for number in range(3):
            time, point_data, _ = reader.read_data(number)
            assert time == 0.5 * number
            assert_bits(point_data["u"], step_of(number).point_data["u"])


def test_two_steps_of_one_time_are_refused(tmp_path: Path) -> None:
    writer = xdmf.open_series(tmp_path / "s.xdmf")
    writer.add(step_of(0), 1.0)
    with pytest.raises(UsageError, match="two steps with the value"):
        writer.add(step_of(1), 1.0)
    assert_same(step_of(0), xdmf.open_file(tmp_path / "s.xdmf").read(0))


def test_writing_into_a_folder_that_is_missing_says_so(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="cannot be written"):
        xdmf.write(one_cell("tetra"), tmp_path / "nowhere" / "a.xdmf")


# Through the one door of unturn.io, whole or not at all


@pytest.mark.parametrize("suffix", [".xdmf", ".xmf"])
def test_the_round_trip_that_every_format_must_pass(suffix: str, tmp_path: Path) -> None:
    once = round_trip(everything(), tmp_path / f"a{suffix}")
    round_trip(once, tmp_path / f"b{suffix}")


def test_two_indices_of_one_stem_do_not_share_their_numbers(tmp_path: Path) -> None:
    unturn.io.write(one_cell("tetra"), tmp_path / "a.xdmf")
    unturn.io.write(one_cell("hexahedron"), tmp_path / "a.xmf")
    assert_same(one_cell("tetra"), unturn.io.read(tmp_path / "a.xdmf"))
    assert_same(one_cell("hexahedron"), unturn.io.read(tmp_path / "a.xmf"))


def test_a_series_through_the_one_door(tmp_path: Path) -> None:
    with unturn.io.series_writer(tmp_path / "s.xdmf") as writer:
        for number in range(3):
            writer.add(step_of(number), float(number))
    assert sorted(p.name for p in tmp_path.iterdir()) == ["s.xdmf", "s.xdmf.h5"]
    assert_same(step_of(2), unturn.io.read(tmp_path / "s.xdmf"))
    assert_same(step_of(1), unturn.io.read(tmp_path / "s.xdmf", 1))


def test_a_result_of_another_format_goes_into_xdmf_and_back(tmp_path: Path) -> None:
    whole = everything()
    whole = replace(whole, field_data={"load": np.array([1.5])}, groups={})
    unturn.io.write(whole, tmp_path / "a.vtu")
    read = unturn.io.read(tmp_path / "a.vtu")
    assert unturn.io.write(read, tmp_path / "a.xdmf") == ()
    found = unturn.io.read(tmp_path / "a.xdmf")
    for name, values in read.point_data.items():
        assert_bits(found.point_data[name], values)
    assert unturn.io.write(found, tmp_path / "b.vtu") == ()
