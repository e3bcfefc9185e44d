"""What changes between the steps of a series, as arrays of `unturn strain` and `unturn.strain`; steps that fail."""

from __future__ import annotations

import json
from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest
import pyvista
from scipy.linalg import expm, logm, polar

import unturn
import unturn._accessor  # found by itself only when the package is installed
from documents import run
from recovery_meshes import block
from strategies import axis_angle
from unturn import InputError, Result, UsageError, kinematics, strain
from unturn.elements import ELEMENTS
from unturn.io import series_writer

Floats = np.ndarray
MESH = block(ELEMENTS["hexahedron"], 2, 0.1)
TIMES = (0.0, 0.5, 0.75, 2.0)
STRETCH = np.array([[0.02, 0.01, 0.0], [0.01, -0.03, 0.004], [0.0, 0.004, 0.01]])
AXIS = np.array([1.0, 2.0, -2.0]) / 3.0


def gradient(t: float) -> Floats:
    """F - I of a part that is stretched more and more while it turns."""
    return np.asarray((np.eye(3) + axis_angle(AXIS, 0.8 * t)) @ expm(STRETCH * t) - np.eye(3))


def step(t: float, **cell_data: Any) -> Result:
    number = np.arange(len(MESH.cells), dtype=np.int32) + 50
    result = MESH.result(u=MESH.points @ gradient(t).T)
    return result.with_arrays(cell_data={"element_number": number, **cell_data})


def write_series(path: Path, steps: list[Result], times: tuple[float, ...] = TIMES) -> Path:
    with series_writer(path) as writer:
        for result, t in zip(steps, times, strict=True):
            writer.add(result, t)
    return path


@pytest.fixture
def series(tmp_path: Path) -> Path:
    return write_series(tmp_path / "run.xdmf", [step(t) for t in TIMES])


def six(tensor: Floats) -> Floats:
    return np.asarray(kinematics.tensor_to_components(tensor))


def equivalent(tensor: Floats) -> float:
    return float(kinematics.equivalent_strain(tensor))


def logarithm(before: float, after: float) -> Floats:
    """ln V of the deformation from one time to another."""
    F = (np.eye(3) + gradient(after)) @ np.linalg.inv(np.eye(3) + gradient(before))
    return np.asarray(logm(polar(F, side="left")[1]).real)


def small(t: float) -> Floats:
    return np.asarray(kinematics.strain(gradient(t)))


NAMES = (
    "strain_increment,equivalent_strain_increment,rotation_increment,accumulated_equivalent_strain,"
    "strain_increment_hencky,accumulated_equivalent_strain_hencky,deformation_rate,equivalent_deformation_rate,spin"
)


def truth(k: int) -> dict[str, Floats]:
    """The measures at a step, from matrix functions of the exact deformation; at the first from the undeformed state."""
    steps = [0.0, *TIMES]  # the first step is undeformed, too
    before, after = steps[k], steps[k + 1]
    dt = after - before if k else np.nan
    D = small(after) - small(before)
    L = logarithm(before, after)
    pairs = list(pairwise(steps))[: k + 1]
    return {
        "strain_increment": six(D),
        "equivalent_strain_increment": np.array(equivalent(D)),
        "rotation_increment": np.asarray(
            kinematics.rotation_vector(gradient(after)) - kinematics.rotation_vector(gradient(before))
        ),
        "accumulated_equivalent_strain": np.array(sum(equivalent(small(b) - small(a)) for a, b in pairs)),
        "strain_increment_hencky": six(L),
        "accumulated_equivalent_strain_hencky": np.array(sum(equivalent(logarithm(a, b)) for a, b in pairs)),
        "deformation_rate": six(L) / dt,
        "equivalent_deformation_rate": np.array(equivalent(L)) / dt,
    }


@pytest.mark.source("SciPy matrix functions of the exact deformation; meshio 5 as a reader")
@pytest.mark.parametrize("at", ["centroid", "mean", "nodes"])
def test_every_step_has_what_changed_since_the_one_before(series: Path, at: str) -> None:
    target, data = series.with_name("out.xdmf"), series.with_name("out.json")
    asked = [
        str(series),
        "--at",
        at,
        "--step",
        "all",
        "--solve",
        "nonlinear",
        "--measures",
        f"strain,{NAMES}",
    ]
    status, said = run(["strain", *asked, "-o", str(target), "--json", str(data)])
    assert status == 0, said
    where = "point" if at == "nodes" else "cell"
    with meshio.xdmf.TimeSeriesReader(target) as reader:
        points, cells = reader.read_points_cells()
        n = len(points) if at == "nodes" else len(cells[0].data)
        for k in range(len(TIMES)):
            _, point_data, cell_data = reader.read_data(k)
            arrays = point_data if at == "nodes" else {name: values[0] for name, values in cell_data.items()}
            found = unturn.read(target, k)
            for name, expected in truth(k).items():
                values = found.point_data[name] if at == "nodes" else found.cell_data[name]
                np.testing.assert_allclose(
                    values, np.broadcast_to(expected, values.shape), atol=1e-12, err_msg=name
                )
                assert len(arrays[name]) == n
                labels = {6: ("XX", "YY", "ZZ", "XY", "YZ", "XZ"), 3: ("X", "Y", "Z")}
                if values.ndim == 2:
                    assert found.component_names[where, name] == labels[values.shape[1]]  # type: ignore[index]
    summaries = json.loads(data.read_text())["results"]
    assert [s["step"]["index"] for s in summaries] == [0, 1, 2, 3]
    peak = summaries[2]["regions"][0]["statistics"]["equivalent_strain_increment"]["maximum"]["value"]
    assert peak == pytest.approx(float(truth(2)["equivalent_strain_increment"]), rel=1e-9)
    assert "accumulated equivalent, largest" in said
    assert "equivalent of increment, largest" in said


@pytest.mark.derived("F_k F_k-1^-1 = V R, R by the polar decomposition; its rotation vector over dt")
def test_the_spin(series: Path) -> None:
    for k in (1, 2, 3):
        previous = (unturn.read(series, j) for j in range(k))
        found = strain(unturn.read(series, k), previous=previous, measures=["spin"], solve="nonlinear")
        F = (np.eye(3) + gradient(TIMES[k])) @ np.linalg.inv(np.eye(3) + gradient(TIMES[k - 1]))
        R = polar(F, side="left")[0]
        expected = kinematics.rotation_vector(logm(R).real) / (TIMES[k] - TIMES[k - 1])
        np.testing.assert_allclose(found.cell_data["spin"], np.tile(expected, (8, 1)), atol=1e-12)


@pytest.mark.derived("one step is as it is among all of them")
@pytest.mark.parametrize("number", [0, 1, 3])
def test_one_step_is_computed_from_those_before(series: Path, number: int) -> None:
    asked = ["strain", str(series), "--solve", "nonlinear", "--measures", NAMES]
    assert run([*asked, "--step", "all", "-o", str(series.with_name("all.xdmf"))])[0] == 0
    one = series.with_name("one.vtu")
    status, said = run([*asked, "--step", str(number), "-o", str(one)])
    assert status == 0, said
    every, alone = unturn.read(series.with_name("all.xdmf"), number).cell_data, pyvista.read(one).cell_data
    steps = [unturn.read(series, k) for k in range(number + 1)]
    library = strain(steps[-1], previous=steps[:-1], measures=NAMES.split(","), solve="nonlinear").cell_data
    for name in NAMES.split(","):
        np.testing.assert_array_equal(alone[name], every[name])
        np.testing.assert_array_equal(library[name], every[name])


@pytest.mark.derived("Q e Q^T with the axes of the frame as rows of Q")
def test_changes_are_in_the_frame_that_was_asked_for(series: Path) -> None:
    frame = "cartesian 1,2,2 0,1,-1"
    steps = [unturn.read(series, k) for k in range(3)]
    names = ["strain_increment", "rotation_increment", "strain_increment_hencky", "deformation_rate"]
    for at in ("centroid", "nodes"):
        found = strain(steps[2], previous=steps[:2], measures=names, frame=frame, at=at, solve="nonlinear")  # type: ignore[arg-type]
        data = found.point_data if at == "nodes" else found.cell_data
        where: Any = "point" if at == "nodes" else "cell"
        first = np.array([1, 2, 2]) / 3
        third = np.cross(first, [0, 1, -1]) / np.linalg.norm(np.cross(first, [0, 1, -1]))
        Q = np.array([first, np.cross(third, first), third])
        dt = TIMES[2] - TIMES[1]
        tensors = {
            "strain_increment": small(TIMES[2]) - small(TIMES[1]),
            "strain_increment_hencky": logarithm(TIMES[1], TIMES[2]),
            "deformation_rate": logarithm(TIMES[1], TIMES[2]) / dt,
        }
        for name, tensor in tensors.items():
            np.testing.assert_allclose(
                data[name], np.tile(six(Q @ tensor @ Q.T), (len(data[name]), 1)), atol=1e-12
            )
            assert found.component_names[where, name] == ("11", "22", "33", "12", "23", "13")
        turn = kinematics.rotation_vector(gradient(TIMES[2])) - kinematics.rotation_vector(gradient(TIMES[1]))
        np.testing.assert_allclose(data["rotation_increment"][0], Q @ turn, atol=1e-12)
        assert found.component_names[where, "rotation_increment"] == ("1", "2", "3")


@pytest.mark.derived(
    "a cell that is dead in a step has no increment there and in the next, and keeps its sum"
)
def test_dead_cells_of_each_step_are_respected(tmp_path: Path) -> None:
    alive = np.ones((4, len(MESH.cells)), dtype=np.int8)
    alive[1, 0] = alive[2:, 1] = 0
    path = write_series(tmp_path / "run.xdmf", [step(t, alive=a) for t, a in zip(TIMES, alive)])
    names = "strain_increment,accumulated_equivalent_strain"
    status, said = run(["strain", str(path), "--step", "all", "--alive", "alive", "--measures", names])
    assert status == 0, said
    found = [unturn.read(tmp_path / "run.strain.xdmf", k).cell_data for k in range(4)]
    no_increment = np.array([np.isnan(f["strain_increment"][:, 0]) for f in found])
    expected = np.zeros((4, len(MESH.cells)), dtype=bool)
    expected[[1, 2], 0] = expected[[2, 3], 1] = True
    np.testing.assert_array_equal(no_increment, expected)
    total = [f["accumulated_equivalent_strain"] for f in found]
    np.testing.assert_allclose(
        [t[5] for t in total], [truth(k)["accumulated_equivalent_strain"] for k in range(4)]
    )
    np.testing.assert_allclose([t[1] for t in total], [total[0][5], *[total[1][5]] * 3])
    last = equivalent(small(TIMES[3]) - small(TIMES[2]))
    np.testing.assert_allclose([t[0] for t in total], [total[0][5]] * 3 + [total[0][5] + last])


@pytest.mark.derived("measured from a zero step the increments are the same, and the sum starts there")
def test_with_a_zero_step_and_rigid_motion_taken_out(series: Path) -> None:
    asked = ["strain", str(series), "--solve", "nonlinear", "--step", "all", "--zero-step", "1"]
    names = "strain_increment,strain_increment_hencky,accumulated_equivalent_strain_hencky"
    status, said = run([*asked, "--measures", names])
    assert status == 0, said
    out = series.with_name("run.strain.xdmf")
    found = unturn.read(out, 3).cell_data
    np.testing.assert_allclose(
        found["strain_increment"], np.tile(truth(3)["strain_increment"], (8, 1)), atol=1e-12
    )
    np.testing.assert_allclose(
        found["strain_increment_hencky"], np.tile(truth(3)["strain_increment_hencky"], (8, 1)), atol=1e-12
    )
    way = [(TIMES[1], TIMES[0]), *pairwise(TIMES)]
    total = sum(equivalent(logarithm(a, b)) for a, b in way)
    np.testing.assert_allclose(found["accumulated_equivalent_strain_hencky"], total, rtol=1e-9)
    asked = ["strain", str(series), "--solve", "nonlinear", "--step", "all", "--remove-rigid", "whole"]
    status, said = run([*asked, "--measures", "equivalent_strain_increment_hencky"])
    assert status == 0, said
    # without turning, F = exp(S t) about its own axes: the increment is S dt
    found = unturn.read(out, 3).cell_data
    expected = equivalent(STRETCH) * (TIMES[3] - TIMES[2])
    np.testing.assert_allclose(found["equivalent_strain_increment_hencky"], expected, rtol=1e-9)


@pytest.mark.source("VTK 9 through pyvista")
def test_the_accessor_takes_meshes_as_steps() -> None:
    meshes = []
    for t in TIMES[:3]:
        mesh = pyvista.UnstructuredGrid({pyvista.CellType.HEXAHEDRON: MESH.cells}, MESH.points)
        mesh.point_data["u"] = MESH.points @ gradient(t).T
        meshes.append(mesh)
    found = meshes[2].unturn.strain(previous=meshes[:2], measures=["strain_increment"])
    np.testing.assert_allclose(
        found["strain_increment"], np.tile(truth(2)["strain_increment"], (8, 1)), atol=1e-12
    )
    one = meshes[2].unturn.strain(previous=meshes[1], measures=["strain_increment"])
    np.testing.assert_array_equal(one["strain_increment"], found["strain_increment"])
    since = meshes[2].unturn.strain(zero=meshes[1], measures=["strain"])
    np.testing.assert_allclose(since["strain"], found["strain_increment"], atol=1e-15)
    with pytest.raises(UsageError, match="time of every step"):
        meshes[2].unturn.strain(previous=meshes[:2], measures=["spin"])


@pytest.mark.derived("a body that turns on by a third of a turn a step has turned by whole turns in the end")
def test_rotation_vectors_continue_those_of_the_steps_before() -> None:
    angles = np.radians([100.0, 220.0, 340.0, 460.0])
    steps = [MESH.result(u=MESH.points @ axis_angle(AXIS, a).T) for a in angles]
    options: dict[str, Any] = {"remove_rigid": "whole", "solve": "nonlinear", "measures": ["strain"]}
    found = strain(steps[-1], previous=steps[:-1], **options).field_data["rigid_rotation"]
    np.testing.assert_allclose(found, [angles[-1] * AXIS], rtol=1e-9)
    alone = strain(steps[-1], **options).field_data["rigid_rotation"]
    np.testing.assert_allclose(alone, [(angles[-1] - 2 * np.pi) * AXIS], rtol=1e-9)


REFUSED: list[tuple[list[str], int, str]] = [
    (["--at", "surface"], 2, "strain_increment belongs to the cells and nodes of the mesh"),
    (["--at", "quadrature"], 2, "strain_increment belongs to the cells and nodes of the mesh"),
    (["--at", "nodes", "--borders", "split"], 2, "strain_increment is not given on duplicated points"),
    (["--solve", "linear", "--base", "hencky"], 2, "is fiction"),
    (["--step", "7"], 2, "--step 7 does not exist"),
]


@pytest.mark.parametrize(("arguments", "expected", "words"), REFUSED)
def test_what_is_refused(series: Path, arguments: list[str], expected: int, words: str) -> None:
    # Source: the exit codes of the project: 2 is wrong usage; nothing is written then.
    out = series.with_name("out.vtu")
    status, said = run(["strain", str(series), "--measures", "strain_increment", "-o", str(out), *arguments])
    assert (status, words in said) == (expected, True), said
    assert not out.exists()


@pytest.mark.parametrize(
    ("name", "meant"),
    [
        ("strain_incremnt", "strain_increment"),
        ("spinn", "spin"),
        ("acumulated_equivalent_strain", "accumulated_equivalent_strain"),
        ("strain_jmp", "strain_jump"),
    ],
)
@pytest.mark.parametrize("at", ["centroid", "nodes", "quadrature"])
def test_a_misspelt_name_gets_a_close_match(series: Path, name: str, meant: str, at: str) -> None:
    # Common practice, no source.
    status, said = run(["strain", str(series), "--measures", f"strain,{name}", "--at", at])
    assert status == 2
    assert f"no measure is called {name!r}. Did you mean {meant!r}" in said
    with pytest.raises(UsageError, match=f"Did you mean '{meant}'"):
        strain(step(1.0), measures=[name])
    with pytest.raises(UsageError, match="is one text; give a list"):
        strain(step(1.0), measures=name)


def test_changes_need_the_steps_before(tmp_path: Path, series: Path) -> None:
    # Source: the exit codes of the project: 2 is wrong usage, 3 an input that cannot be used.
    single = tmp_path / "one.vtu"
    unturn.write(step(1.0), single)
    status, said = run(["strain", str(single), "--measures", "strain,spin"])
    assert (status, "one.vtu holds one state, and spin is what changes" in said) == (2, True), said
    with pytest.raises(UsageError, match="give the steps before this one with previous="):
        strain(unturn.read(series, 2), measures=["strain_increment"])
    with pytest.raises(UsageError, match="give the steps before this one with previous="):
        strain(step(1.0), measures=["strain_increment"])
    with pytest.raises(UsageError, match="step 2 has 2 before it, and previous= gives 1"):
        strain(
            unturn.read(series, 2),
            previous=unturn.read(series, 1),
            measures=["accumulated_equivalent_strain"],
        )
    other = block(ELEMENTS["hexahedron"], 3)
    with pytest.raises(InputError, match="its mesh is another one"):
        strain(other.result(u=other.points), previous=step(1.0), measures=["strain_increment"])
    with pytest.raises(InputError, match="does not rise"):
        strain(unturn.read(series, 1), previous=unturn.read(series, 2), measures=["spin"])


def broken(kind: str) -> Iterator[Result]:
    """The steps of the series, the third of which cannot be used."""
    for k, t in enumerate(TIMES):
        good = step(t)
        if k == 2 and kind == "nan":
            yield good.with_arrays(point_data={"u": np.full((len(MESH.points), 3), np.nan)})
        elif k == 2:
            yield Result(good.points, good.blocks, {"velocity": good.point_data["u"]}, good.cell_data)
        else:
            yield good


@pytest.mark.practice("a failed step names itself, the others go on when asked to, and the exit status tells")
@pytest.mark.parametrize(
    ("kind", "arguments"),
    [("nan", ["--remove-rigid", "whole"]), ("missing", []), ("nan", ["--remove-rigid", "bodies"])],
)
def test_the_others_go_on_when_a_step_fails(tmp_path: Path, kind: str, arguments: list[str]) -> None:
    path = write_series(tmp_path / "run.pvd", list(broken(kind)))
    out, data = tmp_path / "out.pvd", tmp_path / "out.json"
    asked = [
        "strain",
        str(path),
        "--step",
        "all",
        "-o",
        str(out),
        "--json",
        str(data),
        "--displacement",
        "u",
        *arguments,
    ]
    asked += ["--solve", "nonlinear", "--measures", "equivalent_strain,equivalent_strain_increment_hencky"]
    status, said = run(asked)
    assert status in (2, 3)
    assert "at step 2 (t = 0.75)" in said
    assert not out.exists()
    status, said = run([*asked, "--keep-going"])
    assert status in (2, 3), said
    assert "FAILED, left out: step 2: " in said
    assert "unturn: 1 step failed" in said
    assert "changes are those since the last one before it" in said
    found = json.loads(data.read_text())
    assert [s["step"]["index"] for s in found["results"]] == [0, 1, 3]
    (failure,) = found["failed"]
    assert failure["file"] == str(path)
    assert failure["step"] == {"index": 2, "value": 0.75}
    assert failure["error"]
    opened = unturn.io.open_result(out)
    assert opened.steps == (0.0, 0.5, 2.0)
    if not arguments:
        last = opened.read(2).cell_data["equivalent_strain_increment_hencky"]
        np.testing.assert_allclose(last, equivalent(logarithm(TIMES[1], TIMES[3])), rtol=1e-9)


@pytest.mark.practice("nothing is written when no step can be used")
def test_a_series_of_which_no_step_can_be_used(tmp_path: Path) -> None:
    nothing = step(0.0).with_arrays(point_data={"u": np.full((len(MESH.points), 3), np.nan)})
    path = write_series(tmp_path / "run.xdmf", [nothing] * 4)
    out, data = tmp_path / "out.xdmf", tmp_path / "out.json"
    asked = ["strain", str(path), "--step", "all", "-o", str(out), "--remove-rigid", "whole", "--keep-going"]
    status, said = run([*asked, "--json", str(data)])
    assert status == 3, said
    assert "at step 0 (t = 0)" in said
    assert not out.exists()
    assert not data.exists()
    good = write_series(tmp_path / "good.xdmf", [step(t) for t in TIMES])
    (tmp_path / "outs").mkdir()
    status, said = run(
        ["strain", str(path), str(good), "--step", "all", "-o", str(tmp_path / "outs"), "--remove-rigid", "whole",
         "--keep-going", "--json", str(data)]
    )  # fmt: skip
    assert status == 3, said
    assert "unturn: 1 of 2 files failed" in said
    found = json.loads(data.read_text())
    assert len(found["results"]) == 4
    assert [f["step"] for f in found["failed"]] == [None]
    assert found["failed"][0]["file"] == str(path)


@pytest.mark.practice(
    "the last step, which decides whether a flat mesh is a surface, may be the one that fails"
)
def test_the_last_step_fails(tmp_path: Path) -> None:
    steps = [step(t) for t in TIMES[:3]] + [list(broken("missing"))[2]]
    path = write_series(tmp_path / "run.pvd", steps)
    asked = ["strain", str(path), "--step", "all", "-o", str(tmp_path / "out.pvd")]
    status, said = run(asked)
    assert (status, "at step 3 (t = 2)" in said) == (3, True), said
    status, said = run([*asked, "--keep-going"])
    assert (status, "FAILED, left out: step 3" in said, "1 step failed" in said) == (3, True, True), said
    assert unturn.io.open_result(tmp_path / "out.pvd").steps == TIMES[:3]
    status, said = run(
        ["strain", str(path), "--step", "2", "--measures", "strain_increment", "-o", str(tmp_path / "x.vtu")]
    )
    assert status == 0, said
