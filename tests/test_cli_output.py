"""No output is written over an input, nor over a file in which an input keeps its numbers."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

import unturn
from documents import run
from meshes import patch
from unturn.elements import ELEMENTS
from unturn.errors import InputError
from unturn.io import files_behind, series_writer
from unturn.result import Result

pytestmark = pytest.mark.practice("a file that is read is not lost by writing another")

MESH = patch(ELEMENTS["hexahedron"])


def step(size: float = 1e-3) -> Result:
    return MESH.result(u=size * MESH.points)


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    for name in ("run.xdmf", "run.pvd"):
        with series_writer(name) as writer:
            for k in range(3):
                writer.add(step(1e-3 * k), 0.5 * k)
    unturn.write(step(), "one.xdmf")
    unturn.write(step(), "part.vtu")
    Path("all.vtm").write_text(
        '<VTKFile type="vtkMultiBlockDataSet" version="1.0"><vtkMultiBlockDataSet>'
        '<DataSet index="0" name="a" file="part.vtu"/></vtkMultiBlockDataSet></VTKFile>'
    )
    Path("other.xdmf").write_text(Path("one.xdmf").read_text().replace("one.xdmf.h5", "numbers.xdmf.h5"))
    Path("numbers.xdmf.h5").write_bytes(Path("one.xdmf.h5").read_bytes())
    grid = "/Xdmf/Domain/Grid"
    Path("index.xdmf").write_text(
        '<Xdmf Version="3.0" xmlns:xi="http://www.w3.org/2001/XInclude"><Domain>'
        f'<xi:include href="one.xdmf" xpointer="xpointer({grid})"/></Domain></Xdmf>'
    )
    lines = ["node,ux,uy,uz", *(f"{k + 1},{x},{y},{z}" for k, (x, y, z) in enumerate(1e-3 * MESH.points))]
    Path("table.csv").write_text("\n".join(lines) + "\n")
    unturn.write(MESH.result(), "bare.vtu")
    Path("new.json").write_text("{}")
    return tmp_path


def bytes_of(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


@pytest.mark.parametrize(
    ("command", "words"),
    [
        ("strain one.xdmf --json one.xdmf.h5", "one.xdmf.h5 holds numbers of the input one.xdmf"),
        ("survey one.xdmf --json one.xdmf.h5", "would be lost; give another name"),
        ("strain index.xdmf --json one.xdmf", "one.xdmf holds numbers of the input index.xdmf"),
        ("strain index.xdmf --json one.xdmf.h5", "one.xdmf.h5 holds numbers of the input index.xdmf"),
        ("strain run.pvd --json run/run_0001.vtu", "run_0001.vtu holds numbers of the input run.pvd"),
        ("strain run.pvd -o run/run_0001.vtu", "run_0001.vtu holds numbers of the input run.pvd"),
        ("strain all.vtm -o part.vtu", "part.vtu holds numbers of the input all.vtm"),
        ("strain other.xdmf -o numbers.xdmf", "numbers.xdmf needs the name numbers.xdmf.h5 beside it"),
        ("strain one.xdmf other.xdmf --json numbers.xdmf.h5", "holds numbers of the input other.xdmf"),
        ("envelope run.xdmf --json run.xdmf.h5", "run.xdmf.h5 holds numbers of the input run.xdmf"),
        ("envelope other.xdmf part.vtu -o numbers.xdmf", "needs the name numbers.xdmf.h5 beside it"),
        (
            "envelope run.xdmf --measures spin --steps-output run.xdmf",
            "run.xdmf is an input file and would be lost",
        ),
        ("envelope run.pvd --measures spin --steps-output run.pvd", "is an input file"),
        ("envelope run/run_0001.vtu part.vtu --json part.vtu", "is an input file"),
        (
            "convergence part.vtu other.xdmf one.xdmf --quantity x --json numbers.xdmf.h5",
            "holds numbers of the input other.xdmf",
        ),
        ("strain bare.vtu --displacement-table table.csv --json table.csv", "table.csv is an input file"),
        ("envelope bare.vtu --displacement-table table.csv --json table.csv", "table.csv is an input file"),
    ],
)
def test_outputs_are_not_written_over_what_is_behind_an_input(desk: Path, command: str, words: str) -> None:
    before = bytes_of(desk)
    status, text = run(command.split())
    assert (status, text.count("\n")) == (2, 1), text
    assert words in text
    assert bytes_of(desk) == before


@pytest.mark.parametrize(
    "command",
    [
        "strain one.xdmf -o one.xdmf --json new.json",  # the input, named as the output
        "strain run.pvd --step all -o run.pvd",
        "strain part.vtu -o free.xdmf --json one.xdmf.json",
        "envelope run.xdmf -o fresh.xdmf --measures spin --steps-output steps.pvd",
    ],
)
def test_other_places_are_written_to(desk: Path, command: str) -> None:
    for _ in range(2):  # again over its own output
        status, text = run([*command.split(), "--overwrite"])
        assert status == 0, text


def test_the_files_behind_a_file(desk: Path) -> None:
    def names(path: str) -> list[str]:
        return sorted(
            p.relative_to(desk.resolve()).as_posix() for p in map(Path.resolve, files_behind(Path(path)))
        )

    assert names("index.xdmf") == ["one.xdmf", "one.xdmf.h5"]
    assert names("run.pvd") == [f"run/run_000{k}.vtu" for k in range(3)]
    assert names("all.vtm") == ["part.vtu"]
    assert names("part.vtu") == names("table.csv") == []
    raw = np.arange(3.0)
    raw.tofile("numbers.bin")
    Path("bin.xdmf").write_text(
        '<Xdmf Version="3.0"><DataItem Format="Binary" Dimensions="3">numbers.bin</DataItem>'
        '<DataItem Format="HDF" Dimensions="3"> one.xdmf.h5:/a </DataItem><DataItem>1 2</DataItem></Xdmf>'
    )
    assert names("bin.xdmf") == ["numbers.bin", "one.xdmf.h5"]
    Path("loop.xdmf").write_text(
        '<Xdmf Version="3.0"><include href="loop.xdmf"/><include href="bin.xdmf"/></Xdmf>'
    )
    assert names("loop.xdmf") == ["bin.xdmf", "numbers.bin", "one.xdmf.h5"]
    Path("cut.xdmf").write_text(
        '<Xdmf Version="3.0"><Domain><DataItem Format="HDF">one.xdmf.h5:/a</DataItem>'
    )
    assert names("cut.xdmf") == ["one.xdmf.h5"]
    status, text = run(["strain", "none.xdmf", "--json", "new.json"])
    assert (status, "there is no such file" in text) == (3, True)


@pytest.mark.practice("a file that may not be read is not called damaged")
def test_numbers_that_may_not_be_read(desk: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refused(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    with monkeypatch.context() as m:
        m.setattr(h5py, "File", refused)
        with pytest.raises(InputError, match=r"one\.xdmf\.h5 may not be read\. Check its permissions"):
            unturn.read("one.xdmf")
