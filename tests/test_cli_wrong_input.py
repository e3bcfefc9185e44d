"""Wrong input at the command line: exit status, one paragraph that says what to do, input untouched, nothing left over."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import unturn
from documents import run
from unturn import CellBlock, Result

SAMPLES = Path(__file__).parents[1] / "sample_meshes"
POINTS = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 1.0]])
TETS = CellBlock("tetra", np.array([[0, 1, 2, 3], [4, 2, 1, 3]]), np.arange(2))
U = 1e-3 * POINTS


def two_tets(**arrays: np.ndarray) -> Result:
    return Result(POINTS, (TETS,), arrays)


def prepare(folder: Path) -> None:
    """The hostile files, made in a folder."""
    unturn.write(two_tets(u=U), folder / "good.vtu")
    unturn.write(two_tets(u=U, displacement=2 * U), folder / "two.vtu")
    unturn.write(two_tets(temperature=U[:, 0]), folder / "none.vtu")
    unturn.write(two_tets(u=np.full_like(U, np.nan)), folder / "nan.vtu")
    unturn.write(two_tets(u_re=U, u_im=U), folder / "harmonic.vtu")
    unturn.write(Result(POINTS, (TETS,), {}, {"u": np.ones((2, 3))}), folder / "cells.vtu")
    unturn.write(unturn.strain(two_tets(u=U)), folder / "done.vtu")
    vertices = CellBlock("vertex", np.arange(5)[:, None], np.arange(5))
    unturn.write(Result(POINTS, (vertices,), {"u": U}), folder / "vertices.vtu")
    whole = (folder / "good.vtu").read_bytes()
    (folder / "cut.vtu").write_bytes(whole[: len(whole) * 2 // 3])
    (folder / "empty.vtu").touch()
    (folder / "broken.vtu").write_text('<VTKFile type="UnstructuredGrid"><Piece')
    (folder / "noise.vtu").write_bytes(np.random.default_rng(0).bytes(2000))
    (folder / "folder.vtu").mkdir()
    (folder / "lever.xdmf").write_bytes((SAMPLES / "lever.xdmf").read_bytes())  # its .h5 stays away
    (folder / "limits.txt").write_text("nothing of ours")


def state(folder: Path) -> dict[str, str]:
    return {
        str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest() if p.is_file() else "folder"
        for p in sorted(folder.rglob("*"))
    }


CASES = [
    ("missing.vtu", [], 3, "there is no such file"),
    ("folder.vtu", [], 3, "is a folder"),
    ("empty.vtu", [], 3, "is empty (0 bytes)"),
    ("broken.vtu", [], 3, "is not complete XML"),
    ("cut.vtu", [], 3, "cut.vtu"),
    ("noise.vtu", [], 3, "noise.vtu"),
    ("limits.txt", [], 3, "neither the suffix '.txt' nor the content"),
    ("lever.xdmf", [], 3, "the HDF5 file 'lever.h5' is missing"),
    ("two.vtu", [], 3, "2 point arrays could be the displacement: 'u', 'displacement'"),
    ("none.vtu", [], 3, "no displacement found; the point arrays are: 'temperature'"),
    ("cells.vtu", [], 3, "is stored on cells"),
    ("harmonic.vtu", [], 3, "complex (harmonic)"),
    ("vertices.vtu", [], 3, "no element of this mesh can be computed"),
    ("nan.vtu", [], 3, "no cell could be computed: 2 displacement not finite"),
    ("done.vtu", [], 2, "already has a cell array called 'strain'"),
    ("good.vtu", ["--displacement", "uu"], 2, "no point array is called 'uu'. Did you mean 'u'?"),
    ("good.vtu", ["--displacement", "ux,uy,uz"], 2, "no point array is called 'ux'"),
    ("good.vtu", ["--measures", "strian"], 2, "Did you mean 'strain'"),
    ("good.vtu", ["--step", "2"], 2, "has 1 step"),
    ("good.vtu", ["--step", "first"], 2, "use 'last', 'all' or a number"),
    ("good.vtu", ["--plane", "strain"], 2, "needs a mesh whose highest cells are two-dimensional"),
    ("good.vtu", ["--region", "arm"], 2, "no region is called 'arm'"),
    ("good.vtu", ["--alive", "status"], 2, "no cell array is called 'status'"),
    ("good.vtu", ["--threads", "0"], 2, "--threads"),
    ("good.vtu", ["--at", "corner"], 2, "--at"),
    ("good.vtu", ["--unknown"], 2, "--unknown"),
    ("good.vtu", ["-o", "out.foo"], 2, "no format is written to the suffix '.foo'"),
    ("good.vtu", ["-o", "out.msh"], 2, "results are not written as MSH"),
    ("good.vtu", ["-o", "nowhere/out.vtu"], 2, "nowhere/out.vtu cannot be written"),
    ("good.vtu", ["--picture", "a.jpg"], 2, "pictures are written as PNG"),
    ("good.vtu", ["--picture", "nowhere/a.png"], 2, "there is no folder nowhere"),
    ("good.vtu", ["--json", "nowhere/a.json"], 2, "there is no folder nowhere"),
    ("good.vtu", ["--picture", "folder.vtu"], 2, "pictures are written as PNG"),
    ("good.vtu", ["--json", "folder.vtu"], 2, "folder.vtu is a folder"),
    ("good.vtu", ["--json", "good.vtu"], 2, "good.vtu is an input file and would be lost"),
    ("good.vtu", ["--json", "out.vtu", "-o", "out.vtu"], 2, "the place of the picture or the JSON"),
    ("good.vtu", ["-o", "x" * 300 + ".vtu"], 2, "File name too long"),
    ("good.vtu", ["-o", os.fsdecode(b"lat\xe9.vtu")], 2, "the name is not UTF-8"),
    (os.fsdecode(b"lat\xe9.vtu"), [], 3, "the name is not UTF-8"),
    ("good.vtu", ["--prefix", " "], 2, "not every format keeps blanks"),
    ("good.vtu", ["--prefix", "a\nb"], 2, "characters that cannot be printed"),
    ("good.vtu", ["--prefix", "x" * 500], 2, "more than 100"),
    ("good.vtu", ["--measures", ""], 2, "no measure is named"),
    ("good.vtu", ["--measures", " , "], 2, "no measure is named"),
    ("good.vtu", ["--displacement-table", "missing.csv"], 3, "missing.csv"),
]


@pytest.mark.parametrize(("name", "arguments", "status", "said"), CASES)
def test_wrong_input_is_answered_and_nothing_changes(
    name: str, arguments: list[str], status: int, said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    prepare(tmp_path)
    monkeypatch.chdir(tmp_path)
    before = state(tmp_path)
    found, text = run(["strain", name, *arguments])
    assert (found, said in text) == (status, True), text
    assert "Traceback" not in text
    assert state(tmp_path) == before


def test_one_bad_file_does_not_stop_the_others(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    prepare(tmp_path)
    monkeypatch.chdir(tmp_path)
    status, text = run(["strain", "two.vtu", "good.vtu"])
    assert status == 3
    assert "wrote good.strain.vtu" in text
    assert "1 of 2 files failed" in text
    status, text = run(["strain", "good.vtu", "none.vtu", "-o", "one.vtu"])
    assert status == 2
    assert "must be an existing folder" in text


def test_the_input_is_replaced_only_when_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    prepare(tmp_path)
    monkeypatch.chdir(tmp_path)
    before = state(tmp_path)["good.vtu"]
    assert run(["strain", "good.vtu"])[0] == 0
    assert state(tmp_path)["good.vtu"] == before
    assert run(["strain", "good.vtu", "-o", "good.vtu"])[0] == 0
    assert "strain" in unturn.read("good.vtu").cell_data


def test_a_fault_of_ours_is_no_broken_limit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    prepare(tmp_path)
    monkeypatch.chdir(tmp_path)

    def fail(*_: object, **__: object) -> None:
        raise RuntimeError("planted")

    monkeypatch.setattr("unturn.stepwise.compute", fail)
    status, text = run(["strain", "good.vtu"])
    assert status == 70
    assert "a fault of unturn" in text
    assert "RuntimeError: planted" in text


def test_the_interpreter_survives_damaged_files(tmp_path: Path) -> None:
    prepare(tmp_path)
    for name in ("cut.vtu", "noise.vtu", "broken.vtu"):
        done = subprocess.run(
            [sys.executable, "-c", "from unturn.cli import main; main()", "survey", str(tmp_path / name)],
            capture_output=True, text=True, timeout=60, check=False,
        )  # fmt: skip
        assert done.returncode == 3, done.stderr
        assert done.stdout == ""
        assert done.stderr.count("\n") == 1
