"""What is read from the VTK family and written again comes back bit for bit, and other readers agree."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest
import pyvista

import unturn.io
import vtk_samples as samples
from meshes import affine_cell, curved, patch
from roundtrip import assert_same, round_trip, same_bits
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.io.vtk_result import result_from_vtk, vtk_from_result
from unturn.io.vtk_types import cell_number
from unturn.result import Result

GRIDS = {
    "mixed": samples.mixed,
    "tetrahedra": samples.tetrahedra,
    "image": samples.image,
    "rectilinear": samples.rectilinear,
    "structured": samples.structured,
    "poly": samples.poly,
}
OWN_SUFFIX = {"image": ".vti", "rectilinear": ".vtr", "structured": ".vts", "poly": ".vtp"}


def with_results(result: Result) -> Result:
    """Add what the main job adds: new cell arrays, six components with names, float64."""
    rng = np.random.default_rng(1)
    return result.with_arrays(
        cell_data={
            "strain": rng.random((result.n_cells, 6)),
            "equivalent_strain": rng.random(result.n_cells),
        },
        point_data={"rotation": rng.random((result.n_points, 3))},
        field_data={"note": np.array(["small strain"])},
        component_names={("cell", "strain"): samples.VOIGT},
    )


@pytest.mark.parametrize("grid", GRIDS)
@pytest.mark.parametrize("suffix", [".vtu", ".vtk"])
def test_every_kind_of_grid_and_array_comes_back(grid: str, suffix: str, tmp_path: Path) -> None:
    # Common practice, no source.
    source = with_results(result_from_vtk(GRIDS[grid]()))
    found = round_trip(source, tmp_path / f"out{suffix}", ordered=suffix != ".vtk")
    assert set(found.point_data) >= {*samples.NUMBERS, "label", "half nan", "a <b> & \"c\" 'd'"}


@pytest.mark.parametrize("grid", OWN_SUFFIX)
def test_a_grid_is_written_as_the_kind_it_was(grid: str, tmp_path: Path) -> None:
    # Common practice, no source.
    source = with_results(result_from_vtk(GRIDS[grid]()))
    found = round_trip(source, tmp_path / f"out{OWN_SUFFIX[grid]}")
    assert type(found.carrier) is type(source.carrier)


@pytest.mark.parametrize("grid", GRIDS)
def test_vtkhdf_brings_back_all_but_strings(grid: str, tmp_path: Path) -> None:
    # Common practice, no source.
    source = with_results(result_from_vtk(GRIDS[grid]()))
    lost = unturn.io.write(source, tmp_path / "out.vtkhdf")
    assert [s for s in lost if "'label'" in s], lost
    assert len(lost) == 2 + (grid in OWN_SUFFIX)
    found = unturn.io.read(tmp_path / "out.vtkhdf")
    kept = replace(
        source,
        point_data={k: v for k, v in source.point_data.items() if k != "label"},
        cell_data={k: v for k, v in source.cell_data.items() if k != "label"},
    )
    assert_same(kept, found)


@pytest.mark.parametrize("name", [n for n in ELEMENTS if cell_number(n) is not None])
@pytest.mark.parametrize("suffix", [".vtu", ".vtk", ".vtkhdf"])
def test_every_element_comes_back_from_a_result_made_in_memory(
    name: str, suffix: str, tmp_path: Path
) -> None:
    # Common practice, no source.
    mesh = curved(patch(ELEMENTS[name]))
    result = mesh.result(u=np.random.default_rng(0).random((len(mesh.points), 3)))
    round_trip(result, tmp_path / f"out{suffix}")


@pytest.mark.source("VTK 9.7 (through pyvista): sizes of what was written")
@pytest.mark.parametrize("name", ["tetra10", "hexahedron20", "wedge15", "pyramid13", "hexahedron27", "quad8"])
def test_vtk_sees_the_same_elements(name: str, tmp_path: Path) -> None:
    # On a straight cell with parallel sides VTK's size is exact; nodes out of order change it.
    mesh = affine_cell(ELEMENTS[name])
    linear = affine_cell(ELEMENTS[mesh.element.shape.name])
    sizes = []
    for each, file in ((mesh, "out.vtu"), (linear, "linear.vtu")):
        unturn.io.write(each.result(), tmp_path / file)
        grid = pyvista.read(tmp_path / file)
        assert int(grid.celltypes[0]) == cell_number(each.cell_type)
        cells = grid.compute_cell_sizes()
        sizes.append(abs(cells["Volume"].sum() if each.element.dim == 3 else cells["Area"].sum()))
    assert sizes[0] == pytest.approx(sizes[1], rel=1e-6)
    assert sizes[0] > 0.01


@pytest.mark.source("pyvista 0.49 and meshio 5.3 as readers of what was written")
def test_other_readers_agree(tmp_path: Path) -> None:
    source = with_results(result_from_vtk(samples.dressed(samples.tetrahedra(3), strings=False)))
    source = replace(
        source, field_data={}, point_data={k: v for k, v in source.point_data.items() if k != "label"}
    )
    source = replace(source, cell_data={k: v for k, v in source.cell_data.items() if k != "label"})
    unturn.io.write(source, tmp_path / "out.vtu")
    grid, mesh = pyvista.read(tmp_path / "out.vtu"), meshio.read(tmp_path / "out.vtu")
    assert same_bits(np.asarray(grid.points), source.points)
    assert np.array_equal(mesh.cells[0].data, source.blocks[0].connectivity)
    for name, values in source.point_data.items():
        assert same_bits(np.asarray(grid.point_data[name]), values), name
    for name, values in source.cell_data.items():
        assert same_bits(np.asarray(grid.cell_data[name]), values), name
    assert [grid.GetCellData().GetArray("strain").GetComponentName(k) for k in range(6)] == list(
        samples.VOIGT
    )


@pytest.mark.source("VTK 9.7's own VTKHDF reader (through pyvista)")
def test_vtk_reads_our_vtkhdf(tmp_path: Path) -> None:
    source = with_results(result_from_vtk(samples.mixed()))
    unturn.io.write(source, tmp_path / "out.vtkhdf")
    grid = pyvista.read(tmp_path / "out.vtkhdf")
    assert grid.n_cells == source.n_cells
    assert same_bits(np.asarray(grid.cell_data["strain"]), source.cell_data["strain"])
    assert grid.GetPointData().GetVectors().GetName() == "u"
    assert list(grid.field_data["note"]) == ["small strain"]


def test_roles_and_types_of_the_file_stay(tmp_path: Path) -> None:
    # Common practice, no source.
    path = samples.write_xml(
        samples.without_odd_names(samples.mixed()), tmp_path / "in.vtu", "binary", "ZLib"
    )
    result = with_results(unturn.io.read(path))
    unturn.io.write(result, tmp_path / "out.vtu")
    before, after = pyvista.read(path), pyvista.read(tmp_path / "out.vtu")
    assert np.array_equal(before.celltypes, after.celltypes)  # voxels stay voxels
    assert np.array_equal(before.cells, after.cells)
    for kind in ("GetPointData", "GetCellData"):
        data = getattr(after, kind)()
        assert data.GetVectors().GetName() == "u"
        assert data.GetGlobalIds().GetName() == "ids"


def test_the_carrier_stays_as_it_was() -> None:
    # Common practice, no source.
    grid = samples.mixed()
    result = with_results(result_from_vtk(grid))
    made = vtk_from_result(result)
    assert made.GetCellData().HasArray("strain")
    assert not grid.GetCellData().HasArray("strain")
    strain = made.GetCellData().GetArray("strain")
    assert np.shares_memory(np.asarray(pyvista.convert_array(strain)), result.cell_data["strain"])


def test_an_array_is_replaced_and_one_taken_away(tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.tetrahedra())
    changed = result.with_arrays(point_data={"u": -result.point_data["u"]})
    changed = replace(changed, cell_data={k: v for k, v in changed.cell_data.items() if k != "f4"})
    found = round_trip(changed, tmp_path / "out.vtu")
    assert found.carrier.GetPointData().GetVectors().GetName() == "u"  # type: ignore[union-attr]


def test_moved_points_are_written(tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.structured())
    round_trip(replace(result, points=result.points + 1.0), tmp_path / "out.vtu")


@pytest.mark.parametrize(
    "name", ['a<b>&"c"', "it's", "line\nbreak\ttab", " lead and trail ", "naïve ε", "a;b,c"]
)
@pytest.mark.parametrize("suffix", [".vtu", ".vtk", ".vtkhdf", ".vts"])
def test_odd_names_come_back(name: str, suffix: str, tmp_path: Path) -> None:
    # Common practice, no source.
    result = (
        result_from_vtk(samples.structured()) if suffix == ".vts" else result_from_vtk(samples.tetrahedra())
    )
    bare = replace(result, point_data={}, cell_data={}, field_data={}, component_names={})
    result = bare.with_arrays(
        point_data={name: np.arange(result.n_points)},
        cell_data={name: np.ones((result.n_cells, 2), np.float32)},
        field_data={name: np.array([1, 2], dtype=np.int16)},
        component_names={("cell", name): (name, "second")},
    )
    round_trip(result, tmp_path / f"out{suffix}")


def test_a_slash_in_a_name_comes_back_from_vtkhdf(tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.dressed(samples.tetrahedra(), strings=False))
    bare = replace(result, point_data={"a/b": np.arange(result.n_points)}, cell_data={}, component_names={})
    found = round_trip(replace(bare, field_data={}), tmp_path / "out.vtkhdf")
    assert list(found.point_data) == ["a/b"]


def test_a_control_character_in_a_name_is_refused(tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.tetrahedra())
    result = result.with_arrays(point_data={"bell\x07": np.zeros(result.n_points)})
    with pytest.raises(UsageError, match="control character"):
        unturn.io.write(result, tmp_path / "out.vtu")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("dtype", ["c16", "f2", "g"])
def test_numbers_no_vtk_format_holds_are_refused(dtype: str, tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.tetrahedra())
    result = result.with_arrays(point_data={"odd": np.zeros(result.n_points, dtype)})
    with pytest.raises(UsageError, match="'odd'"):
        unturn.io.write(result, tmp_path / "out.vtu")


@pytest.mark.parametrize("suffix", [".vtu", ".vtk", ".vtkhdf"])
def test_true_and_false_are_stored_as_bytes_and_told(suffix: str, tmp_path: Path) -> None:
    # Common practice, no source.
    result = patch(ELEMENTS["tetra"]).result()
    flags = np.arange(result.n_cells) % 2 == 0
    result = result.with_arrays(cell_data={"alive": flags}, field_data={"t": np.array(1.5)})
    (sentence,) = unturn.io.write(result, tmp_path / f"out{suffix}")
    assert "'alive'" in sentence
    found = unturn.io.read(tmp_path / f"out{suffix}")
    assert found.cell_data["alive"].dtype == np.uint8
    assert np.array_equal(found.cell_data["alive"], flags)
    assert found.field_data["t"].tolist() == [1.5]


def test_arrays_of_matrices_are_stored_row_by_row(tmp_path: Path) -> None:
    # Common practice, no source.
    result = patch(ELEMENTS["tetra"]).result()
    gradient = np.random.default_rng(2).random((result.n_cells, 3, 3))
    unturn.io.write(result.with_arrays(cell_data={"h": gradient}), tmp_path / "out.vtu")
    assert np.array_equal(unturn.io.read(tmp_path / "out.vtu").cell_data["h"], gradient.reshape(-1, 9))


def test_groups_are_named_as_lost(tmp_path: Path) -> None:
    # Common practice, no source.
    result = replace(result_from_vtk(samples.tetrahedra()), groups={"steel": np.array([0])})
    lost = unturn.io.write(result, tmp_path / "out.vtu")
    assert len(lost) == 1
    assert "'steel'" in lost[0]


def test_polyhedra_come_back(tmp_path: Path) -> None:
    # Common practice, no source.
    result = result_from_vtk(samples.polyhedra())
    assert [b.cell_type for b in result.blocks] == ["hexahedron", "polyhedron"]
    found = round_trip(result, tmp_path / "out.vtu")
    held: Any = found.carrier
    assert held.GetCell(1).GetNumberOfFaces() == 6
    round_trip(result, tmp_path / "out.vtk")
    with pytest.raises(UsageError, match="polyhedra"):
        unturn.io.write(result, tmp_path / "out.vtkhdf")


def test_a_structured_kind_is_refused_for_another_mesh(tmp_path: Path) -> None:
    # Common practice, no source.
    with pytest.raises(UsageError, match=r"\.vtu or \.xdmf"):
        unturn.io.write(result_from_vtk(samples.mixed()), tmp_path / "out.vts")
