"""Series and composites: PVD, PVTU, VTM and VTKHDF."""

from __future__ import annotations

import gc
import weakref
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista
from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid
from vtkmodules.vtkIOHDF import vtkHDFReader

import unturn.io
import vtk_samples as samples
from child_reader import read_in_child
from roundtrip import assert_same, digests
from unturn.errors import InputError, UsageError
from unturn.io.vtk_result import result_from_vtk
from unturn.result import Result

TIMES = (0.0, 0.1, 2.5)


def plain(n: int = 3) -> Result:
    """A result without strings, which VTKHDF does not hold."""
    result = result_from_vtk(samples.tetrahedra(n))
    return replace(
        result,
        point_data={k: v for k, v in result.point_data.items() if k != "label"},
        cell_data={k: v for k, v in result.cell_data.items() if k != "label"},
    )


def step(k: int, n: int = 3) -> Result:
    base = plain(n)
    return base.with_arrays(
        point_data={"u": np.full((base.n_points, 3), k, dtype=np.float64)},
        cell_data={"strain": np.full((base.n_cells, 6), -float(k))},
        field_data={"TimeValue": np.array([TIMES[k]])},
        component_names={("cell", "strain"): samples.VOIGT},
    )


def add_all(target: Path, steps: Iterable[tuple[Result, float]]) -> None:
    with unturn.io.series_writer(target) as writer:
        for result, value in steps:
            writer.add(result, value)


@pytest.mark.parametrize("changing", [False, True])
@pytest.mark.parametrize("suffix", [".pvd", ".vtkhdf"])
def test_a_series_comes_back_step_by_step(suffix: str, changing: bool, tmp_path: Path) -> None:
    # Common practice, no source.
    meant = [step(k, 3 + k * changing) for k in range(3)]
    with unturn.io.series_writer(tmp_path / f"out{suffix}") as writer:
        for result, value in zip(meant, TIMES, strict=True):
            writer.add(result, value)
        assert writer.lost == ()
    opened = unturn.io.open_result(tmp_path / f"out{suffix}")
    assert opened.steps == TIMES
    for k, result in enumerate(meant):
        found = opened.read(k)
        assert_same(result, found)
        assert found.steps is not None
        assert found.steps.current == k
    assert_same(meant[2], unturn.io.read(tmp_path / f"out{suffix}"))
    assert not list(tmp_path.glob(".unturn*"))
    with pytest.raises(UsageError, match="no step 3: it has 3 steps, 0 to 2"):
        unturn.io.read(tmp_path / f"out{suffix}", 3)


@pytest.mark.source("VTK 9.7's own VTKHDF reader, pyvista 0.49's PVD reader")
def test_other_readers_see_the_same_steps(tmp_path: Path) -> None:
    for name in ("out.pvd", "out.vtkhdf"):
        with unturn.io.series_writer(tmp_path / name) as writer:
            for k, value in enumerate(TIMES):
                writer.add(step(k, 3 + k), value)
    hdf = vtkHDFReader()
    hdf.SetFileName(str(tmp_path / "out.vtkhdf"))
    hdf.UpdateInformation()
    pvd = pyvista.get_reader(str(tmp_path / "out.pvd"))
    assert hdf.GetNumberOfSteps() == 3
    assert pvd.time_values == list(TIMES)
    for k in range(3):
        hdf.SetStep(k)
        hdf.Update()
        pvd.set_active_time_value(TIMES[k])
        for grid in (pyvista.wrap(hdf.GetOutput()), pvd.read()[0]):
            assert grid.n_cells == 3 + k
            assert (np.asarray(grid.point_data["u"]) == k).all()
            assert (np.asarray(grid.cell_data["strain"]) == -k).all()


def test_a_mesh_that_does_not_change_is_stored_once(tmp_path: Path) -> None:
    # Common practice, no source.
    h5py = pytest.importorskip("h5py")
    with unturn.io.series_writer(tmp_path / "out.vtkhdf") as writer:
        for k, value in enumerate(TIMES):
            writer.add(step(k), value)
    with h5py.File(tmp_path / "out.vtkhdf") as file:
        assert len(file["VTKHDF/Points"]) == step(0).n_points
        assert len(file["VTKHDF/PointData/u"]) == 3 * step(0).n_points


def test_one_step_is_held_at_a_time(tmp_path: Path) -> None:
    # Common practice, no source.
    held: list[Any] = []
    for name in ("out.pvd", "out.vtkhdf"):
        with unturn.io.series_writer(tmp_path / name) as writer:
            for k, value in enumerate(TIMES):
                result = step(k)
                held.append(weakref.ref(result))
                writer.add(result, value)
                del result
                gc.collect()
                assert [r() for r in held] == [None] * len(held)


@pytest.mark.parametrize("suffix", [".pvd", ".vtkhdf"])
def test_a_failing_step_leaves_the_old_series(suffix: str, tmp_path: Path) -> None:
    # Common practice, no source.
    target = tmp_path / f"out{suffix}"
    with unturn.io.series_writer(target) as writer:
        writer.add(step(0), 0.0)
    before = digests(tmp_path, None)
    with pytest.raises(ZeroDivisionError):
        add_all(target, ((step(1), 1.0 / k) for k in (1, 0)))
    assert digests(tmp_path, None) == before
    with pytest.raises(UsageError, match="own finite value"):
        add_all(target, ((step(k), 1.0) for k in (1, 2)))
    with pytest.raises(UsageError, match="at least one step"), unturn.io.series_writer(target):
        pass
    assert digests(tmp_path, None) == before


def test_vtkhdf_refuses_arrays_that_come_and_go(tmp_path: Path) -> None:
    # Common practice, no source.
    more = step(1).with_arrays(point_data={"late": np.zeros(step(1).n_points)})
    other = step(1).with_arrays(point_data={"u": np.zeros((step(1).n_points, 3), np.float32)})
    for odd, word in ((more, "'late' is in some steps"), (other, "'u' has another type")):
        with pytest.raises(UsageError, match=word):
            add_all(tmp_path / "o.vtkhdf", ((step(0), 0.0), (odd, 1.0)))
    assert list(tmp_path.iterdir()) == []


def test_a_format_without_steps_is_refused(tmp_path: Path) -> None:
    # Common practice, no source.
    with pytest.raises(UsageError, match="not written as VTU"), unturn.io.series_writer(tmp_path / "o.vtu"):
        pass
    with pytest.raises(UsageError, match=r"VTU .*XDMF"):
        unturn.io.write(step(0), tmp_path / "o.med")
    with pytest.raises(UsageError, match="suffix"):
        unturn.io.write(step(0), tmp_path / "o.unknown")


def pieces(folder: Path) -> Path:
    """A PVTU of three pieces, the middle one without cells."""
    parts = [samples.tetrahedra(2), vtkUnstructuredGrid(), samples.tetrahedra(3)]
    for k, part in enumerate(parts):
        samples.write_xml(samples.without_odd_names(part) if k != 1 else part, folder / f"part_{k}.vtu")
    listed = "".join(f'<Piece Source="part_{k}.vtu"/>' for k in range(3))
    (folder / "all.pvtu").write_text(
        f'<VTKFile type="PUnstructuredGrid" version="0.1"><PUnstructuredGrid GhostLevel="0">{listed}'
        "</PUnstructuredGrid></VTKFile>"
    )
    return folder / "all.pvtu"


def test_pieces_of_a_pvtu_are_put_together(tmp_path: Path) -> None:
    # Common practice, no source.
    result = unturn.io.read(pieces(tmp_path))
    first, second = (unturn.io.read(tmp_path / f"part_{k}.vtu") for k in (0, 2))
    assert result.n_cells == 5
    assert result.points.dtype == first.points.dtype
    assert list(result.point_data) == list(first.point_data)
    for kind in ("point_data", "cell_data"):
        for name, values in getattr(result, kind).items():
            both = np.concatenate([getattr(first, kind)[name], getattr(second, kind)[name]])
            assert values.dtype == both.dtype
            assert np.array_equal(values, both, equal_nan=values.dtype.kind == "f")
    assert result.component_names == first.component_names
    assert "part_1.vtu holds no cells" in result.notes
    moved = second.blocks[0].connectivity + first.n_points
    assert np.array_equal(result.blocks[0].connectivity[2:], moved)


def test_a_missing_or_odd_piece_is_refused(tmp_path: Path) -> None:
    # Common practice, no source.
    path = pieces(tmp_path)
    odd = samples.without_odd_names(samples.tetrahedra(3))
    odd.GetPointData().RemoveArray("u")
    samples.write_xml(odd, tmp_path / "part_2.vtu")
    with pytest.raises(InputError, match=r"'u' is not the same in part_0.vtu and part_2.vtu"):
        unturn.io.read(path)
    (tmp_path / "part_2.vtu").unlink()
    with pytest.raises(InputError, match=r"all\.pvtu names the file part_2\.vtu.*No such file"):
        unturn.io.read(path)


def test_blocks_become_groups(tmp_path: Path) -> None:
    # Source: pyvista 0.49 as the writer of VTM.
    grid = pyvista.wrap(samples.without_odd_names(samples.tetrahedra(2)))
    inner = pyvista.MultiBlock({"left": grid, "right": grid.translate((5, 0, 0))})
    pyvista.MultiBlock({"casting": inner, "shim": grid, "empty": None}).save(tmp_path / "in.vtm")
    result = unturn.io.read(tmp_path / "in.vtm")
    groups = {name: cells.tolist() for name, cells in result.groups.items()}
    assert groups == {
        "casting": [0, 1, 2, 3],
        "casting/left": [0, 1],
        "casting/right": [2, 3],
        "shim": [4, 5],
    }
    lost = unturn.io.write(result, tmp_path / "out.vtu")
    assert "'shim'" in lost[0]


def test_parts_of_a_step_become_groups(tmp_path: Path) -> None:
    # Common practice, no source.
    grid = samples.without_odd_names(samples.tetrahedra(2))
    samples.write_xml(grid, tmp_path / "a.vtu")
    samples.write_xml(grid, tmp_path / "b.vtu")
    (tmp_path / "in.pvd").write_text(
        '<VTKFile type="Collection"><Collection>'
        '<DataSet timestep="0" part="0" file="a.vtu"/><DataSet timestep="0" part="1" file="b.vtu"/>'
        '<DataSet timestep="1.5" part="0" file="b.vtu"/></Collection></VTKFile>'
    )
    opened = unturn.io.open_result(tmp_path / "in.pvd")
    assert opened.steps == (0.0, 1.5)
    assert {k: v.tolist() for k, v in opened.read(0).groups.items()} == {"part 0": [0, 1], "part 1": [2, 3]}
    assert opened.read(1).groups == {}


def test_indexes_that_go_in_circles_or_nowhere(tmp_path: Path) -> None:
    # Common practice, no source.
    collection = '<VTKFile type="Collection"><Collection>{}</Collection></VTKFile>'
    blocks = '<VTKFile type="vtkMultiBlockDataSet"><vtkMultiBlockDataSet>{}</vtkMultiBlockDataSet></VTKFile>'
    made = {
        "self.pvd": collection.format('<DataSet timestep="0" file="self.pvd"/>'),
        "self.vtm": blocks.format('<DataSet index="0" name="a" file="self.vtm"/>'),
        "loop.pvd": collection.format('<DataSet timestep="0" file="back.vtm"/>'),
        "back.vtm": blocks.format('<DataSet index="0" file="loop.pvd"/>'),
        "empty.pvd": collection.format(""),
        "empty.vtm": blocks.format(""),
        "word.pvd": collection.format('<DataSet timestep="soon" file="a.vtu"/>'),
        "nameless.pvd": collection.format('<DataSet timestep="0"/>'),
        "gone.pvd": collection.format('<DataSet timestep="0" file="gone.vtu"/>'),
        "folder.pvd": collection.format('<DataSet timestep="0" file="."/>'),
        "cut.pvd": collection.format("")[:40],
        "deep.vtm": blocks.format("<Block>" * 5000 + "</Block>" * 5000),
    }
    for name, text in made.items():
        (tmp_path / name).write_text(text)
    outcomes = read_in_child([tmp_path / name for name in made])
    assert {o for o, _ in outcomes.values()} == {"InputError"}, outcomes
