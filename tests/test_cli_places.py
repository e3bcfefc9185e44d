"""`unturn strain --at nodes|surface|quadrature`: what is written, read back with other libraries, and what is refused."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest
import pyvista

import unturn
from documents import run
from recovery_meshes import block
from test_elsewhere import angle_mesh, bent, corner_field
from unturn import CellBlock, Result
from unturn.elements import ELEMENTS

SAMPLES = Path(__file__).parents[1] / "sample_meshes"
BRACKET, LEVER, RING, SKIN = (SAMPLES / n for n in ("bracket.vtu", "lever.xdmf", "ring.vtu", "skin.vtu"))
SIX = ["XX", "YY", "ZZ", "XY", "YZ", "XZ"]


def done(*arguments: object) -> str:
    status, said = run(["strain", *(str(a) for a in arguments)])
    assert status == 0, said
    return said


def data_of(tmp_path: Path, *arguments: object) -> Any:
    target = tmp_path / "summary.json"
    done(*arguments, "--json", target)
    return json.loads(target.read_text(encoding="utf-8"), parse_constant=pytest.fail)  # NaN is not JSON


@pytest.mark.source("VTK 9 and meshio 5 as readers")
def test_nodes_are_written_as_point_arrays(tmp_path: Path) -> None:
    target = tmp_path / "out.vtu"
    said = done(BRACKET, "--at", "nodes", "-o", target)
    assert f"wrote {target}: 4 arrays added, 6 unchanged" in said
    found, before = pyvista.read(target), pyvista.read(BRACKET)
    expected = unturn.strain(unturn.read(BRACKET), at="nodes").point_data
    added = {"strain": 6, "rotation": 3, "equivalent_strain": 1, "principal_strain": 3}
    assert set(found.point_data.keys()) == set(before.point_data.keys()) | set(added)
    assert set(found.cell_data.keys()) == set(before.cell_data.keys())
    for name, n in added.items():
        array = found.GetPointData().GetArray(name)
        assert (array.GetNumberOfComponents(), found.point_data[name].dtype) == (n, np.float64)
        np.testing.assert_array_equal(found.point_data[name], expected[name])
    for name, labels in (
        ("strain", SIX),
        ("rotation", ["X", "Y", "Z"]),
        ("principal_strain", ["1", "2", "3"]),
    ):
        array = found.GetPointData().GetArray(name)
        assert [array.GetComponentName(k) for k in range(len(labels))] == labels
    for kind in ("point_data", "cell_data", "field_data"):
        for name in getattr(before, kind).keys():  # noqa: SIM118
            a, b = getattr(before, kind)[name], getattr(found, kind)[name]
            assert a.dtype == b.dtype
            np.testing.assert_array_equal(a, b)
    other = meshio.read(target).point_data
    np.testing.assert_array_equal(other["strain"], expected["strain"])


@pytest.mark.derived("u = H X through the file, every method of recovery")
@pytest.mark.parametrize("method", ["patch", "extrapolate", "average"])
def test_recovery_by_name(tmp_path: Path, method: str) -> None:
    mesh = block(ELEMENTS["tetra"], 3, 0.2)
    H = 1e-3 * np.random.default_rng(2).normal(size=(3, 3))
    unturn.write(mesh.result(u=mesh.points @ H.T), tmp_path / "in.vtu")
    data = data_of(
        tmp_path, tmp_path / "in.vtu", "--at", "nodes", "--recovery", method, "-o", tmp_path / "out.vtu"
    )
    found = unturn.read(tmp_path / "out.vtu").point_data["strain"]
    e = (H + H.T) / 2
    np.testing.assert_allclose(
        found, np.tile(e[[0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]], (len(found), 1)), atol=1e-14
    )
    assert data["request"]["at"] == "nodes"
    assert data["request"].get("recovery", "patch") == method
    assert data["location"] == "centroid"  # of the table and the verdict
    extremes = {e["array"]: e for e in data["elsewhere"]["extremes"]}
    values = np.linalg.eigvalsh(e)
    assert extremes["principal_strain_1"]["value"] == pytest.approx(values[2], rel=1e-9)
    assert extremes["principal_strain_3"]["value"] == pytest.approx(values[0], rel=1e-9)
    assert all(0 <= e["plus_minus"] < 1e-12 for e in extremes.values())


def test_point_arrays_that_are_there_already(tmp_path: Path) -> None:
    """A point array of that name stops the run before anything is written; --prefix and --overwrite go on."""
    # Source: the conventions of the project: nothing is overwritten unasked.
    source, target = tmp_path / "in.vtu", tmp_path / "out.vtu"
    mesh = block(ELEMENTS["tetra"], 2)
    old = np.arange(len(mesh.points), dtype=np.float32)
    unturn.write(mesh.result(u=1e-3 * mesh.points, equivalent_strain=old), source)
    status, said = run(["strain", str(source), "--at", "nodes", "-o", str(target)])
    assert (status, "already has a point array called 'equivalent_strain'" in said) == (2, True), said
    assert not target.exists()
    done(source, "--at", "nodes", "-o", target, "--prefix", "my_")
    found = unturn.read(target).point_data
    assert {"my_strain", "my_rotation", "my_equivalent_strain", "my_principal_strain"} <= set(found)
    np.testing.assert_array_equal(found["equivalent_strain"], old)
    assert found["equivalent_strain"].dtype == np.float32
    done(source, "--at", "nodes", "-o", target, "--overwrite")
    found = unturn.read(target).point_data
    np.testing.assert_allclose(found["equivalent_strain"], 0, atol=1e-15)
    assert found["equivalent_strain"].dtype == np.float64
    done(source, "-o", target)  # on cells there is none of that name
    np.testing.assert_array_equal(unturn.read(target).point_data["equivalent_strain"], old)


@pytest.mark.source("meshio 5 as a reader of XDMF")
def test_a_series_at_nodes(tmp_path: Path) -> None:
    target, data = tmp_path / "out.xdmf", tmp_path / "out.json"
    asked = ["--at", "nodes", "--step", "all", "--solve", "nonlinear", "--base", "hencky"]
    said = done(LEVER, *asked, "-o", target, "--json", data)
    assert "step 6" in said
    summaries = json.loads(data.read_text())["results"]
    assert [s["step"]["index"] for s in summaries] == list(range(7))
    with meshio.xdmf.TimeSeriesReader(target) as reader:
        points, _ = reader.read_points_cells()
        assert reader.num_steps == 7
        for step in range(7):
            _, arrays, _ = reader.read_data(step)
            expected = unturn.strain(
                unturn.read(LEVER, step), at="nodes", solve="nonlinear", base="hencky"
            ).point_data
            for name in ("finite_rotation", "equivalent_strain_hencky", "principal_strain_hencky"):
                assert len(arrays[name]) == len(points)
                np.testing.assert_array_equal(arrays[name], expected[name])
            found = unturn.read(target, step)
            np.testing.assert_array_equal(found.point_data["strain_hencky"], expected["strain_hencky"])
            extremes = {
                (e["region"], e["array"]): e["value"] for e in summaries[step]["elsewhere"]["extremes"]
            }
            largest = max(v for (_, array), v in extremes.items() if array == "equivalent_strain_hencky")
            # on the border the stiffer, calmer part may be written: the extreme of each side is told all the same
            assert largest >= expected["equivalent_strain_hencky"].max() * (1 - 1e-12)
    assert summaries[0]["elsewhere"]["estimated_error_percent"] == {"part=1": None, "part=2": None}


@pytest.mark.source(
    "VTK 9 as a reader; Timoshenko and Goodier article 102: the strain of a bent plate is largest at its faces"
)
def test_surface_of_a_bent_plate(tmp_path: Path) -> None:
    result = bent()
    number = 100 + np.arange(result.n_cells)[::-1]
    source, out = tmp_path / "plate.vtu", tmp_path / "out.vtu"
    unturn.write(result.with_arrays(cell_data={"element_number": number}), source)
    data = data_of(tmp_path, source, "--at", "surface", "--poisson", "0.3", "-o", out)
    found = pyvista.read(out)
    assert found.n_cells == 6 * 9
    assert np.array_equal(found["parent_element"], number[found["parent_cell"]])
    np.testing.assert_allclose(found["surface_principal_strain"].max(), 0.005, rtol=1e-9)
    np.testing.assert_allclose(found["area"].sum(), 2 * (4 * 1 + 4 * 0.2 + 1 * 0.2), rtol=1e-12)
    at_centroids = data["regions"][0]["statistics"]["principal_strain_1"]["maximum"]["value"]
    at_faces = {e["statistic"]: e for e in data["elsewhere"]["extremes"]}["largest principal, in plane"]
    assert at_faces["value"] == pytest.approx(1.5 * at_centroids, rel=1e-9)
    assert at_faces["plus_minus"] == pytest.approx(0, abs=1e-12)  # the faces hold this field, and all agree
    cell = at_faces["place"]["cell"]
    assert at_faces["place"]["element"] == number[cell]
    faces = (found["parent_cell"] == cell) & (found["parent_face"] == at_faces["place"]["face"])
    assert found["surface_principal_strain"][faces, 0] == pytest.approx([0.005], rel=1e-9)


@pytest.mark.derived(
    "rigid motion taken out of the solid is told beside its faces and its points, and in them"
)
@pytest.mark.parametrize("at", ["surface", "quadrature"])
def test_rigid_motion_goes_with_a_mesh_of_its_own(tmp_path: Path, at: str) -> None:
    result = bent()
    theta = np.array([0.01, 0.02, -0.01])
    turned = result.with_arrays(point_data={"u": result.point_data["u"] + np.cross(theta, result.points)})
    source, out = tmp_path / "in.vtu", tmp_path / "out.vtu"
    turns = []
    for case in (result, turned):
        unturn.write(case, source)
        done(source, "--at", at, "--solve", "linear", "--remove-rigid", "whole", "-o", out)
        found = unturn.read(out)
        assert set(found.field_data) >= {"rigid_translation", "rigid_rotation", "rigid_center"}
        turns.append(found.field_data["rigid_rotation"].reshape(-1))
    np.testing.assert_allclose(turns[1] - turns[0], theta, atol=1e-12)


@pytest.mark.source("VTK 9 as a reader")
def test_quadrature_points(tmp_path: Path) -> None:
    target = tmp_path / "out.vtu"
    said = done(BRACKET, "--at", "quadrature", "-o", target)
    source = unturn.read(BRACKET)
    count = len(ELEMENTS["hexahedron20"].quadrature)
    assert f"wrote {target}: {count * 704} quadrature points with" in said
    found = pyvista.read(target)
    assert found.n_points == found.n_cells == count * 704
    volume = unturn.strain(source, measures=["element_volume"]).cell_data["element_volume"]
    np.testing.assert_allclose(np.bincount(found["cell"], found["weight"]), volume, rtol=1e-9)
    whole = pyvista.read(BRACKET).compute_cell_sizes()["Volume"].sum()
    assert found["weight"].sum() == pytest.approx(whole, rel=0.01)
    np.testing.assert_array_equal(found["element"], source.cell_data["element_number"][found["cell"]])
    mean = unturn.strain(source, at="mean", measures=["strain"]).cell_data["strain"]
    for k in range(6):
        sums = np.bincount(found["cell"], found["weight"] * found["strain"][:, k])
        np.testing.assert_allclose(sums / volume, mean[:, k], atol=1e-14)
    assert [found.GetPointData().GetArray("strain").GetComponentName(k) for k in range(6)] == SIX


@pytest.mark.parametrize("at", ["nodes", "surface", "quadrature"])
def test_the_name_of_the_output(tmp_path: Path, at: str) -> None:
    # Source: the documented names; a mesh of its own is not called like the mesh of the file.
    source = tmp_path / "part.vtu"
    source.write_bytes(BRACKET.read_bytes())
    done(source, "--at", at)
    added = "part.strain.vtu" if at == "nodes" else f"part.{at}.vtu"
    assert {p.name for p in tmp_path.iterdir()} == {"part.vtu", added}


def with_skin(path: Path) -> Path:
    """A block of bricks with quadrilaterals on its top, and directions on its cells."""
    mesh = block(ELEMENTS["hexahedron"], 2)
    top = mesh.points[:, 2] > 1 - 1e-9
    faces = np.array([c[4:] for c in mesh.cells if top[c[4:]].all()])
    n, m = len(mesh.cells), len(mesh.cells) + len(faces)
    blocks = (CellBlock("hexahedron", mesh.cells, np.arange(n)), CellBlock("quad", faces, np.arange(n, m)))
    axes = {"fibre": np.tile([1.0, 0, 0], (m, 1)), "side": np.tile([0, 1.0, 0], (m, 1))}
    unturn.write(Result(mesh.points, blocks, {"u": 1e-3 * mesh.points}, axes), path)
    return path


def with_lines(path: Path) -> Path:
    mesh = block(ELEMENTS["line"], 3)
    unturn.write(mesh.result(u=1e-3 * mesh.points), path)
    return path


REFUSED = [
    ("bracket", ["--at", "nodes", "--measures", "element_volume"], "belongs to cells; it has no value at nodes"),
    ("bracket", ["--at", "nodes", "--measures", "strain,jacobian_min_over_max"], "belongs to cells"),
    ("bracket", ["--at", "quadrature", "--measures", "element_volume"], "belongs to a cell, not to a point"),
    ("bracket", ["--at", "nodes", "--recovery", "mean"], "--recovery"),
    ("bracket", ["--at", "surface", "--prefix", "my_"], "leave --prefix out"),
    ("bracket", ["--at", "quadrature", "--prefix", "my_"], "leave --prefix out"),
    ("bracket", ["--at", "quadrature", "--picture", "{}/p.png"], "--at quadrature gives points"),
    ("bracket", ["--at", "surface", "--measures", "equivalent_strain"], "Poisson's ratio"),
    ("bracket", ["--at", "surface", "--base", "almansi"], "almansi"),
    ("bracket", ["--at", "nodes", "--solve", "linear", "--base", "hencky"], "are fiction"),
    ("lever", ["--at", "surface", "--step", "all"], "makes a mesh of its own; give one --step"),
    ("lever", ["--at", "quadrature", "--step", "all"], "makes a mesh of its own; give one --step"),
    ("ring", ["--at", "surface", "--plane", "strain"], "--at surface needs solids"),
    ("ring", ["--at", "nodes"], "depend on the strain across the plane"),
    ("skin", ["--at", "surface"], "--at surface needs solids"),
    ("skin", ["--at", "nodes", "--base", "hencky"], "of surfaces and lines in space is not recovered at nodes"),
    ("lines", ["--at", "surface"], "--at surface needs solids"),
    ("lines", ["--at", "nodes", "--measures", "det_f"], "of surfaces and lines in space is not recovered at nodes"),
    ("covered", ["--at", "nodes", "--skin", "--base", "hencky"], "of surfaces and lines in space is not recovered"),
    ("covered", ["--at", "nodes", "--frame", "arrays fibre side"], "is given on cells"),
    ("covered", ["--at", "nodes", "--skin", "--frame", "surface"], "is given on cells"),
    ("covered", ["--at", "surface", "--frame", "arrays fibre side"], "has its own frame"),
]  # fmt: skip


@pytest.mark.parametrize(("which", "arguments", "said"), REFUSED)
def test_what_is_refused(tmp_path: Path, which: str, arguments: list[str], said: str) -> None:
    # Source: the exit codes of the project: 2 is wrong usage; nothing is written then.
    made = {"lines": with_lines, "covered": with_skin}
    known = {"bracket": BRACKET, "lever": LEVER, "ring": RING, "skin": SKIN}
    (tmp_path / "in").mkdir()
    file = made[which](tmp_path / "in" / "in.vtu") if which in made else known[which]
    own = {"surface", "quadrature"} & set(arguments)
    target = tmp_path / f"out{'.vtu' if own else file.suffix}"
    arguments = [a.format(tmp_path) for a in arguments]
    status, text = run(["strain", str(file), "-o", str(target), *arguments])
    assert (status, said in " ".join(text.split())) == (2, True), text
    assert [p.name for p in tmp_path.iterdir()] == ["in"]


def test_finite_measures_of_the_solid_under_a_skin(tmp_path: Path) -> None:
    """Without --skin the skin is not computed, and the solid's own finite measures are given at nodes."""
    # Source: the conventions of the project on cells of lower dimension.
    source = with_skin(tmp_path / "in.vtu")
    done(source, "--at", "nodes", "--base", "hencky", "-o", tmp_path / "out.vtu")
    e = unturn.read(tmp_path / "out.vtu").point_data["strain_hencky"]
    np.testing.assert_allclose(e, np.tile([np.log(1.001)] * 3 + [0] * 3, (len(e), 1)), atol=1e-15)


def test_the_json_has_no_nan(tmp_path: Path) -> None:
    """Nothing moves: the estimated error is null; at cells and quadrature points the section is null."""
    # Source: RFC 8259, section 6: NaN is not a JSON number.
    mesh = block(ELEMENTS["tetra"], 2)
    source, out = tmp_path / "in.vtu", tmp_path / "out.vtu"
    unturn.write(mesh.result(u=0 * mesh.points), source)
    data = data_of(tmp_path, source, "--at", "nodes", "-o", out)
    assert data["elsewhere"]["estimated_error_percent"] == {"whole": None}
    assert data["suspected_singular"] == []
    for at in ("centroid", "mean", "quadrature"):
        assert data_of(tmp_path, source, "--at", at, "-o", out)["elsewhere"] is None
    corners = mesh.points[mesh.cells[0]]
    one = CellBlock("tetra", np.arange(4)[None], np.arange(1))
    unturn.write(Result(corners, (one,), {"u": corners * 1e-3}), source)
    data = data_of(tmp_path, source, "--at", "nodes", "-o", out)
    assert data["elsewhere"]["extremes"]
    assert all(e["plus_minus"] is None for e in data["elsewhere"]["extremes"])  # no neighbour to differ from


def test_a_corner_is_named_in_text_and_json(tmp_path: Path) -> None:
    # Source: the corner is at the origin by construction; its field is that of Williams 1952.
    mesh, _ = angle_mesh("hexahedron")
    source, target = tmp_path / "in.vtu", tmp_path / "out.json"
    number = 5000 + np.arange(len(mesh.points))
    unturn.write(mesh.result(u=corner_field(mesh.points), node_number=number), source)
    said = done(source, "--at", "nodes", "-o", tmp_path / "out.vtu", "--json", target)
    found = {g["array"]: g for g in json.loads(target.read_text())["suspected_singular"]}
    peak = found["principal_strain_1"]
    assert np.linalg.norm(mesh.points[peak["point"], :2]) < 1e-9
    assert peak["node"] == number[peak["point"]]
    assert f"keeps growing towards node {peak['node']} (point {peak['point']})" in said


def test_pictures_show_where_values_live(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Points at nodes, faces on the surface; the line that is printed names the place."""
    # Source: the arrays that are handed to the drawing are those that are written.
    import unturn.pictures

    drawn: list[dict[str, Any]] = []
    real = unturn.pictures.draw

    def draw(**how: Any) -> Any:
        drawn.append(how)
        return real(**how)

    monkeypatch.setattr(unturn.pictures, "draw", draw)
    picture, out = tmp_path / "p.png", tmp_path / "out.vtu"

    def picture_of(*arguments: str) -> tuple[dict[str, Any], str]:
        said = done(BRACKET, "-o", out, "--picture", picture, *arguments)
        assert picture.read_bytes().startswith(b"\x89PNG")
        picture.unlink()
        return drawn[-1], said.splitlines()[-1]

    how, said = picture_of("--at", "nodes")
    assert (how["association"], how["array"]) == ("point", "equivalent_strain")
    written = unturn.read(out).point_data["equivalent_strain"]
    np.testing.assert_array_equal(how["result"].point_data["equivalent_strain"], written)
    np.testing.assert_array_equal(how["numbers"], unturn.read(BRACKET).point_data["node_number"])
    assert "equivalent_strain, recovered at the nodes, on the shape" in said
    how, said = picture_of("--at", "surface")
    assert (how["array"], how["component"], how["unit"]) == ("surface_principal_strain", 0, "strain")
    faces = unturn.read(out)
    assert how["result"].n_cells == faces.n_cells
    np.testing.assert_array_equal(how["displacement"], faces.point_data["u"])
    assert "surface_principal_strain (component 1), on free faces, at their centroids, on the shape" in said
    how, said = picture_of("--at", "surface", "--poisson", "0.3")
    assert how["array"] == "surface_equivalent_strain"
    how, said = picture_of("--measures", "strain")
    assert (how["association"], how["array"], how["component"]) == ("cell", "strain", 0)
    assert "strain (component 1) on the shape" in said
