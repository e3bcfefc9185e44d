"""Strain on free faces as arrays of the cells they belong to, and faces between regions on request."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista

import unturn
import unturn._accessor  # found by itself only when the package is installed
from documents import run
from recovery_meshes import block
from test_borders import three_parts
from unturn import CellBlock, Result, UsageError, strain
from unturn.elements import ELEMENTS
from unturn.io import series_writer

NAMES = ["strain", "principal_strain", "equivalent_strain", "normal_strain", "rotation"]


def governing(faces: Result, n_cells: int, principal: str = "surface_principal_strain") -> np.ndarray:
    """For each cell its face with the largest principal strain by magnitude, one by one; -1 for none."""
    found = np.full(n_cells, -1)
    for cell in range(n_cells):
        mine = np.flatnonzero(faces.cell_data["parent_cell"] == cell)
        sizes = [np.abs(faces.cell_data[principal][f]).max() for f in mine]
        if len(mine):
            found[cell] = mine[int(np.argmax(sizes))]  # the first of equal ones
    return found


@pytest.mark.derived("one by one over the faces of each cell of the surface mesh")
@pytest.mark.parametrize("name", ["tetra", "hexahedron", "wedge", "pyramid", "hexahedron20"])
@pytest.mark.parametrize("base", ["small", "hencky"])
def test_each_cell_has_the_arrays_of_its_governing_face(name: str, base: str) -> None:
    mesh = block(ELEMENTS[name], 3, 0.1)
    result = mesh.result(u=1e-2 * np.sin(3 * mesh.points[:, [2, 0, 1]]))
    options: dict[str, Any] = {
        "at": "surface",
        "poisson": 0.3,
        "base": base,
        "solve": "nonlinear",
        "measures": NAMES,
    }
    faces = strain(result, **options)
    found = strain(result, faces="cells", **options)
    ending = "" if base == "small" else f"_{base}"
    best = governing(faces, result.n_cells, f"surface_principal_strain{ending}")
    has = best >= 0
    assert not has.all()
    assert has.any()
    turned = "surface_rotation" if base == "small" else "surface_finite_rotation"
    per_face = [turned, *(f"surface_{n}{ending}" for n in NAMES[:-1])]
    per_face += ["surface_direction_1", "surface_direction_2", "surface_normal"]
    for array in per_face:
        values = found.cell_data[array]
        assert np.isnan(values[~has]).all()
        np.testing.assert_array_equal(values[has], faces.cell_data[array][best[has]])
        key = ("cell", array)
        assert found.component_names.get(key) == faces.component_names.get(key)
    np.testing.assert_array_equal(found.cell_data["surface_face"][~has], -1)
    np.testing.assert_array_equal(
        found.cell_data["surface_face"][has], faces.cell_data["parent_face"][best[has]]
    )
    extremes = {
        f"surface_principal_strain{ending}_max": (0, np.max), f"surface_principal_strain{ending}_min": (1, np.min),
        f"surface_equivalent_strain{ending}_max": (None, np.max),
    }  # fmt: skip
    for array, (column, take) in extremes.items():
        values = faces.cell_data[array.removesuffix("_max").removesuffix("_min")]
        values = values if column is None else values[:, column]
        for cell in np.flatnonzero(has):
            assert found.cell_data[array][cell] == take(values[faces.cell_data["parent_cell"] == cell])
    assert set(found.cell_data) == {*per_face, *extremes, "surface_face"}
    assert found.blocks is result.blocks
    assert set(found.point_data) == {"u"}


@pytest.mark.source("Timoshenko and Goodier article 102: of a bent plate the strain is largest at its faces")
def test_a_bent_plate_shows_its_faces_on_its_cells() -> None:
    mesh = block(ELEMENTS["hexahedron20"], 4)
    points = mesh.points * [4.0, 1.0, 0.2] - [2, 0.5, 0.1]
    x, y, z = points.T
    nu, R = 0.3, 40.0
    u = np.stack([x * z, -nu * y * z, (-x * x + nu * (y * y - z * z)) / 2], 1) / R
    result = mesh._replace(points=points).result(u=u)
    found = strain(result, at="surface", faces="cells", measures=["principal_strain"]).cell_data
    middle = points[mesh.cells].mean(axis=1)
    inner = (np.abs(middle[:, 0]) < 1.5) & (np.abs(middle[:, 1]) < 0.3)
    top = inner & (middle[:, 2] > 0.06)
    np.testing.assert_allclose(found["surface_principal_strain"][top, 0], 0.1 / R, rtol=1e-9)
    np.testing.assert_allclose(found["surface_normal"][top], np.tile([0, 0, 1.0], (top.sum(), 1)), atol=1e-12)
    inside = inner & (np.abs(middle[:, 2]) < 0.06)
    assert inside.any()
    assert np.isnan(found["surface_principal_strain"][inside]).all()


def two_cubes() -> Result:
    points = np.array([[x, y, z] for z in (0, 1) for y in (0, 1) for x in (0, 1, 2)], dtype=float)
    cells = np.array([[0, 1, 4, 3, 6, 7, 10, 9], [1, 2, 5, 4, 7, 8, 11, 10]])
    u = points * [1e-3, 0, 0] + np.maximum(points[:, [0]] - 1, 0) * [3e-3, 0, 0]
    return Result(
        points, (CellBlock("hexahedron", cells, np.arange(2)),), {"u": u}, {"part": np.array([1, 2])}
    )


@pytest.mark.derived(
    "two cubes side by side show ten faces, and twelve with the one between, once for each side"
)
def test_faces_between_regions_on_request(tmp_path: Path) -> None:
    result = two_cubes()
    free = strain(result, at="surface")
    assert (free.n_cells, "between_groups" in free.cell_data) == (10, False)
    every = strain(result, at="surface", between_regions=True)
    assert every.n_cells == 12
    between = every.cell_data["between_groups"] == 1
    assert sorted(every.cell_data["parent_cell"][between]) == [0, 1]
    np.testing.assert_allclose(every.points[every.blocks[0].connectivity[between]][:, :, 0], 1)
    np.testing.assert_allclose(every.cell_data["surface_normal"][between][:, 0], [1, -1])
    unturn.write(result, tmp_path / "in.vtu")
    asked = [
        "strain",
        str(tmp_path / "in.vtu"),
        "--at",
        "surface",
        "--between-regions",
        "-o",
        str(tmp_path / "o.vtu"),
    ]
    status, said = run(asked)
    assert status == 0, said
    assert "free surfaces: 12 faces" in said
    assert "2 of them between regions" in said
    assert pyvista.read(tmp_path / "o.vtu").n_cells == 12


@pytest.mark.source("VTK 9 as a reader")
def test_the_command_writes_them_into_the_mesh_of_the_file(tmp_path: Path) -> None:
    source = tmp_path / "in.vtu"
    unturn.write(three_parts(), source)
    asked = ["strain", str(source), "--at", "surface", "--faces", "cells", "--displacement", "u"]
    status, said = run([*asked, "--prefix", "my_"])
    assert status == 0, said
    before, found = pyvista.read(source), pyvista.read(tmp_path / "in.strain.vtu")
    expected = strain(unturn.read(source), at="surface", faces="cells", displacement="u").cell_data
    new = set(found.cell_data.keys()) - set(before.cell_data.keys())
    assert new == {f"my_{n}" for n in set(expected) - {"part"}}
    assert f"{len(new)} arrays added, 5 unchanged" in said
    assert "microstrain at free surfaces" in said
    np.testing.assert_array_equal(
        found.cell_data["my_surface_principal_strain"], expected["surface_principal_strain"]
    )
    assert found.n_points == before.n_points
    picture = tmp_path / "p.png"
    status, said = run([*asked, "--overwrite", "--picture", str(picture)])
    assert (status, picture.exists()) == (0, True), said
    accessed = before.unturn.strain(at="surface", faces="cells", displacement="u")
    assert accessed.n_cells == before.n_cells
    np.testing.assert_array_equal(accessed.cell_data["surface_strain"], expected["surface_strain"])


@pytest.mark.derived("of every step, as of the step alone")
def test_a_series_of_them(tmp_path: Path) -> None:
    result = two_cubes()
    with series_writer(tmp_path / "in.xdmf") as writer:
        for k in range(3):
            writer.add(result.with_arrays(point_data={"u": k * result.point_data["u"]}), float(k))
    asked = [str(tmp_path / "in.xdmf"), "--at", "surface", "--faces", "cells", "--step", "all"]
    status, said = run(["strain", *asked])
    assert status == 0, said
    for k in range(3):
        found = unturn.read(tmp_path / "in.strain.xdmf", k).cell_data
        np.testing.assert_allclose(found["surface_principal_strain"][:, 0], [k * 1e-3, k * 4e-3], atol=1e-15)


@pytest.mark.derived("names that only surfaces have, alone and with the prefix they have in the file")
def test_measures_that_only_surfaces_have(tmp_path: Path) -> None:
    result = two_cubes()
    found = strain(result, at="surface", measures=["normal_strain", "in_plane_strain"], poisson=0.3).cell_data
    assert {"surface_normal_strain", "surface_in_plane_strain"} <= set(found)
    assert "surface_strain" not in found
    prefixed = strain(result, at="surface", measures=["surface_strain_hencky"], solve="nonlinear").cell_data
    across = prefixed["surface_normal"][:, 0] == 0
    stretch = np.where(prefixed["parent_cell"] == 0, 1e-3, 4e-3)
    np.testing.assert_allclose(
        prefixed["surface_strain_hencky"][across, 0], np.log1p(stretch[across]), rtol=1e-9
    )
    unturn.write(result, tmp_path / "in.vtu")
    asked = ["strain", str(tmp_path / "in.vtu"), "--at", "surface", "--measures", "surface_normal_strain"]
    status, said = run([*asked, "--poisson", "0.3", "-o", str(tmp_path / "out.vtu")])
    assert status == 0, said
    assert "surface_normal_strain" in unturn.read(tmp_path / "out.vtu").cell_data


def test_what_is_refused() -> None:
    # Source: the exit codes of the project: 2 is wrong usage.
    result = two_cubes()
    for option, value in (("faces", "cells"), ("between_regions", True)):
        with pytest.raises(UsageError, match="belongs to --at surface"):
            strain(result, **{option: value})
    with pytest.raises(UsageError, match="faces='both' is not known"):
        strain(result, at="surface", faces="both")  # type: ignore[arg-type]
    with pytest.raises(UsageError, match="already has a cell array called 'surface_face'"):
        strain(result.with_arrays(cell_data={"surface_face": np.zeros(2)}), at="surface", faces="cells")
