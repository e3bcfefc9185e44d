"""`unturn envelope` as it is called: what it writes, what it prints, its exit statuses and messages."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista as pv

import unturn
from documents import run
from meshes import patch
from strategies import axis_angle
from unturn.elements import ELEMENTS
from unturn.io import series_writer
from unturn.result import Result

MESH = patch(ELEMENTS["hexahedron"])
PULL = np.diag([1.0, -0.3, -0.3])


def step(size: float, **arrays: Any) -> Result:
    result = MESH.result(u=size * MESH.points @ PULL.T + 1e-6 * np.sin(9 * MESH.points))
    number = np.arange(101, 101 + len(MESH.cells), dtype=np.int32)
    return result.with_arrays(cell_data={"element number": number, **arrays})


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder with a series, and load cases as files of their own."""
    monkeypatch.chdir(tmp_path)
    sizes = (0.0, 1e-3, -2e-3, 1.5e-3)
    for name in ("run.xdmf", "run.pvd", "run.vtkhdf"):
        with series_writer(name) as writer:
            for k, size in enumerate(sizes):
                writer.add(step(size), 0.25 * k)
    for name, size in (("dead", 1e-3), ("wind", -0.5e-3)):
        unturn.write(step(size), f"{name}.vtu")
    for k in (2, 10, 1):
        unturn.write(step(1e-4 * k), f"part_{k}.vtu")
    return tmp_path


def said(command: str, status: int = 0) -> str:
    found, text = run(["envelope", *command.split()])
    assert found == status, text
    return text


@pytest.mark.source("VTK through pyvista reads the written file; extremes from unturn.strain step by step")
@pytest.mark.parametrize("suffix", ["xdmf", "pvd", "vtkhdf"])
def test_a_series_gives_extremes_and_steps(desk: Path, suffix: str) -> None:
    text = said(f"run.{suffix} -o out.vtu --json out.json")
    every = np.array(
        [unturn.strain(unturn.read(f"run.{suffix}", k)).cell_data["principal_strain"] for k in range(4)]
    )
    grid = pv.read("out.vtu")
    assert np.array_equal(grid.cell_data["principal_strain_maximum"], every.max(axis=0))
    assert np.array_equal(grid.cell_data["principal_strain_minimum_step"], every.argmin(axis=0))
    assert grid.cell_data["principal_direction_3_at_minimum"].shape == (len(MESH.cells), 3)
    assert list(grid.cell_data["element number"]) == list(range(101, 101 + len(MESH.cells)))
    assert np.allclose(grid.cell_data["strain_range_equivalent"], 3.5e-3 * 1.3 * 2 / 3, rtol=0.01)
    assert "element 10" in text
    assert "step 2 (t = 0.5) and step 3 (t = 0.75)" in text
    assert re.search(r"wrote out.vtu: 44 arrays added, 2 of run\.\w+ step 3 unchanged", text)
    data = json.loads(Path("out.json").read_text())
    assert data["schema"] == "unturn.envelope/1"
    assert [s["time"] for s in data["states"]] == [0, 0.25, 0.5, 0.75]
    low = data["regions"][0]["extremes"]["principal_strain_3"]["minimum"]
    assert low["value"] == every.min()
    assert (low["states"], low["element"]) == ([2], low["cell"] + 101)
    assert data["regions"][0]["verdict"]["small_strain"] == "holds"
    assert data["output"] == "out.vtu"


@pytest.mark.practice("several files are load cases, in the order given")
def test_files_are_load_cases_or_a_numbered_series(desk: Path) -> None:
    text = said("part_10.vtu part_2.vtu part_1.vtu")
    found = unturn.read("part_10.envelope.vtu").cell_data
    assert set(found["equivalent_strain_maximum_case"].tolist()) == {0}
    assert "3 cases" in text
    assert "part_10.vtu" in text
    said(
        "part_10.vtu part_2.vtu part_1.vtu --as-series --measures equivalent_strain,accumulated_equivalent_strain"
    )
    found = unturn.read("part_1.envelope.vtu").cell_data
    assert set(found["equivalent_strain_maximum_step"].tolist()) == {2}
    assert np.allclose(found["accumulated_equivalent_strain"], found["equivalent_strain_maximum"], rtol=0.05)


@pytest.mark.derived("2 dead - 3 wind = 3.5e-3 of the pull")
def test_combinations_of_load_cases(desk: Path) -> None:
    Path("c.toml").write_text('[combinations.a]\ndead = 2\nwind = "+-3"\n[combinations.b]\n"run:1" = 1.0\n')
    text = said("dead.vtu wind.vtu run.xdmf --combinations c.toml --solve linear -o c.vtu --json c.json")
    found = unturn.read("c.vtu").cell_data
    assert np.allclose(found["strain_maximum"][:, 0], 3.5e-3, rtol=0.02)
    assert set(found["strain_maximum_case"][:, 0].tolist()) == {1}
    assert np.allclose(unturn.read("c.vtu").point_data["u"], step(1e-3).point_data["u"])
    assert "a (-wind)" in text
    data = json.loads(Path("c.json").read_text())
    assert [s["factors"] for s in data["states"]] == [
        {"dead": 2, "wind": 3}, {"dead": 2, "wind": -3}, {"run:1": 1},
    ]  # fmt: skip


@pytest.mark.derived("steady rotation: no deformation rate, exact spin")
def test_rates_of_a_spinning_part(desk: Path) -> None:
    with series_writer("spin.xdmf") as writer:
        for k in range(4):
            writer.add(MESH.result(u=MESH.points @ axis_angle(np.array([0, 0, 1.0]), 0.5 * k).T), 2.0 * k)
    said("spin.xdmf --solve nonlinear --measures deformation_rate,spin -o s.vtu --steps-output rates.xdmf")
    for k in range(4):
        rates = unturn.read("rates.xdmf", k)
        assert rates.steps is not None
        assert rates.steps.values == (0, 2, 4, 6)
        spin = rates.cell_data["spin"]
        assert np.isnan(spin).all() if k == 0 else np.allclose(spin, [0, 0, 0.25], atol=1e-13)
    assert rates.component_names["cell", "deformation_rate"] == ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
    found = unturn.read("s.vtu").cell_data
    assert np.abs(found["deformation_rate_largest_magnitude"]).max() < 1e-13
    for which in ("maximum", "minimum"):
        assert np.allclose(found[f"spin_{which}"], [0, 0, 0.25], atol=1e-13)
    assert found["spin_maximum_step"].min() >= 1
    assert "strain_range_equivalent" not in found


@pytest.mark.practice("a failed step names itself; the rest goes on and the exit status says so")
def test_keep_going_leaves_out_what_fails(desk: Path) -> None:
    Path("part_2.vtu").write_bytes(Path("part_2.vtu").read_bytes()[:900])
    files = "part_1.vtu part_2.vtu part_10.vtu"
    assert "part_2.vtu" in said(files, 3)
    assert not list(desk.glob("*.envelope.*"))
    text = said(f"{files} --keep-going --json k.json", 3)
    assert "FAILED, left out: part_2.vtu" in text
    assert "1 of 3 cases failed" in text
    data = json.loads(Path("k.json").read_text())
    assert [s["failed"] is None for s in data["states"]] == [True, False, True]
    assert set(unturn.read("part_1.envelope.vtu").cell_data["equivalent_strain_maximum_case"].tolist()) == {2}
    Path("run-2.vtu").unlink(missing_ok=True)


@pytest.mark.practice("a step of a series whose file is gone")
def test_a_broken_step_of_a_series(desk: Path) -> None:
    pieces = sorted(p for p in desk.rglob("*.vtu") if p.name.startswith("run"))
    assert len(pieces) == 4
    pieces[2].write_text("<VTKFile")
    assert "step 2" in said("run.pvd -o p.vtu", 3)
    text = said("run.pvd -o p.vtu --keep-going", 3)
    assert "FAILED, left out: step 2 (t = 0.5)" in text
    assert set(unturn.read("p.vtu").cell_data["equivalent_strain_maximum_step"].tolist()) == {3}


@pytest.mark.practice("stdout is for the JSON when asked")
def test_json_on_the_standard_output(desk: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from unittest.mock import patch as replaced

    from unturn.cli import main

    with replaced("sys.argv", ["unturn", "envelope", "run.xdmf", "--json", "-"]), pytest.raises(SystemExit):
        main()
    out, err = capsys.readouterr()
    assert json.loads(out)["kind"] == "step"
    assert "wrote run.envelope.xdmf" in err


@pytest.mark.practice("wrong usage is exit 2, an unusable input 3, each with what to do")
@pytest.mark.parametrize(
    ("command", "status", "words"),
    [
        ("dead.vtu", 2, "needs a series, several files or --combinations"),
        ("none.xdmf", 3, "no such file"),
        ("run.xdmf --measures sstrain", 2, "Did you mean 'strain'"),
        ("run.xdmf --measures principal_direction_1", 2, "has no largest value"),
        ("dead.vtu wind.vtu --measures spin", 2, "load cases do not follow"),
        ("part_1.vtu part_2.vtu --as-series --measures spin", 2, "rates need the time of every step"),
        ("run.xdmf --measures spinn", 2, "Did you mean 'spin'"),
        ("run.xdmf --measures strain_eror", 2, "Did you mean 'strain_error'"),
        ("run.xdmf --steps-output s.xdmf", 2, "no measure of a series"),
        ("run.xdmf --steps-output s.msh --measures spin", 2, "s.msh"),
        ("dead.vtu wind.vtu --as-series", 2, "holds no number"),
        ("run.xdmf --base hencky --solve linear", 2, "are fiction"),
        ("run.xdmf --region roof", 2, "no region is called 'roof'"),
        ("run.xdmf --alive status", 2, "no cell array is called 'status'"),
        ("run.xdmf --zero-step 9", 2, "--zero-step 9 does not exist"),
        ("dead.vtu wind.vtu --zero-step 0", 2, "several files are given"),
        ("run.xdmf -o no/where.vtu", 2, "Choose a folder that exists"),
        ("run.xdmf -o out.xyz", 2, "no format is written"),
        ("run.xdmf --combinations none.toml", 2, "cannot be read"),
        (
            "dead.vtu wind.vtu --combinations ok.toml --solve nonlinear",
            2,
            "nonlinear solve cannot be superposed",
        ),
        ("dead.vtu wind.vtu --combinations ok.toml", 2, "state --solve linear if they were"),
        ("dead.vtu --combinations ok.toml --solve linear", 2, "no load case is called 'wind'"),
        ("part_1.vtu part_2.vtu --combinations ok.toml --as-series", 2, "give one of them"),
        ("dead.vtu dead.vtu --combinations ok.toml", 2, "two load cases are called 'dead'"),
        ("dead.vtu other.vtu", 3, "another one"),
    ],
)
def test_wrong_calls(desk: Path, command: str, status: int, words: str) -> None:
    Path("ok.toml").write_text("[combinations.a]\ndead = 1\nwind = 1\n")
    other = patch(ELEMENTS["tetra"])
    unturn.write(other.result(u=other.points), "other.vtu")
    before = set(desk.iterdir())
    text = said(command, status)
    assert words in text
    assert text.startswith("unturn: ")
    assert text.count("\n") == 1
    assert set(desk.iterdir()) == before


@pytest.mark.practice("an array that is there is not replaced unasked")
def test_arrays_are_not_overwritten_unasked(desk: Path) -> None:
    said("part_1.vtu part_2.vtu -o e.vtu")
    assert "is not overwritten unasked" in said("part_2.vtu e.vtu -o f.vtu", 2)
    said("part_2.vtu e.vtu -o f.vtu --prefix new_")
    assert "new_strain_maximum" in unturn.read("f.vtu").cell_data
    said("part_2.vtu e.vtu -o f.vtu --overwrite")


@pytest.mark.derived("displacements from a step of the series")
def test_zero_step(desk: Path) -> None:
    said("run.xdmf --zero-step 1 -o z.vtu --measures strain")
    found = unturn.read("z.vtu").cell_data
    assert np.allclose(found["strain_minimum"][:, 0], -3e-3, rtol=0.01)
