"""A file is written whole or not at all, and what was there before stays until then."""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import unturn.io
import vtk_samples as samples
from roundtrip import assert_same, digests
from unturn.errors import UnturnError, UsageError
from unturn.io import _atomic, _readback
from unturn.io._atomic import replacing
from unturn.io.vtk_result import result_from_vtk
from unturn.result import Result

# Common practice, no source: every check of this file.


@pytest.fixture
def result() -> Result:
    return result_from_vtk(samples.tetrahedra(3))


def folders_left(folder: Path) -> list[str]:
    return [p.name for p in folder.iterdir() if p.name.startswith(_atomic.WORK_PREFIX)]


def test_nothing_but_the_target_is_left(result: Result, tmp_path: Path) -> None:
    unturn.io.write(result, tmp_path / "out.vtu")
    assert [p.name for p in tmp_path.iterdir()] == ["out.vtu"]


def test_a_file_may_replace_the_one_it_was_read_from(result: Result, tmp_path: Path) -> None:
    path = tmp_path / "in.vtu"
    unturn.io.write(result, path)
    read = unturn.io.read(path)
    more = read.with_arrays(cell_data={"strain": np.ones((read.n_cells, 6))})
    unturn.io.write(more, path)
    assert_same(more, unturn.io.read(path))


@pytest.mark.parametrize(
    "error", [OSError(errno.ENOSPC, "No space left on device"), RuntimeError("x"), KeyboardInterrupt()]
)
def test_a_failure_leaves_what_was_there(
    error: BaseException, result: Result, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "out.vtu"
    unturn.io.write(result, path)
    before = digests(tmp_path, None)

    def fail(*_: Any) -> None:
        raise error

    monkeypatch.setattr("unturn.io.vtk_xml.run_writer", fail)
    expected = UsageError if isinstance(error, OSError) else type(error)
    with pytest.raises(expected) as caught:
        unturn.io.write(result, path)
    if isinstance(error, OSError):
        assert "No space left" in str(caught.value)
        assert "unchanged" in str(caught.value)
    assert digests(tmp_path, None) == before
    assert folders_left(tmp_path) == []


def test_a_full_disk_is_told(result: Result, tmp_path: Path) -> None:
    code = """
import resource, signal, sys
import unturn.io
from unturn.errors import UsageError
result = unturn.io.read(sys.argv[1])
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000))
for name in sys.argv[2:]:
    try:
        unturn.io.write(result, name)
    except UsageError as error:
        print(error)
"""
    unturn.io.write(result, tmp_path / "in.vtu")
    targets = [tmp_path / name for name in ("out.vtu", "out.vtk", "out.vtkhdf")]
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "in.vtu"), *map(str, targets)],
        capture_output=True, text=True, check=False, timeout=60,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    lines = done.stdout.splitlines()
    assert [
        str(t) in line and "cannot be written" in line for t, line in zip(targets, lines, strict=True)
    ] == [True] * 3
    assert [p.name for p in tmp_path.iterdir()] == ["in.vtu"]


def test_a_kill_leaves_what_was_there_and_a_folder_that_is_known(result: Result, tmp_path: Path) -> None:
    path = tmp_path / "out.vtu"
    unturn.io.write(result, path)
    before = path.read_bytes()
    code = """
import os, signal, sys
import unturn.io
import unturn.io._readback
result = unturn.io.read(sys.argv[1])
unturn.io.check_same = lambda *_: os.kill(os.getpid(), signal.SIGKILL)
unturn.io.write(result, sys.argv[1])
"""
    done = subprocess.run([sys.executable, "-c", code, str(path)], check=False, timeout=60)
    assert done.returncode == -signal.SIGKILL
    assert path.read_bytes() == before
    assert len(folders_left(tmp_path)) == 1
    assert folders_left(tmp_path)[0].endswith(".tmp")


def test_what_does_not_come_back_is_not_put_in_place(
    result: Result, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "out.vtu"
    unturn.io.write(result, path)
    before = digests(tmp_path, None)
    honest = unturn.io.vtk_xml.run_writer  # type: ignore[attr-defined]

    def careless(writer: Any, dataset: Any, target: str) -> None:
        dataset.GetPointData().GetArray("f8").SetValue(0, 1e9)
        honest(writer, dataset, target)

    copy = result.with_arrays(point_data={"f8": result.point_data["f8"].copy()})
    meant = replace(copy, carrier=None)
    monkeypatch.setattr("unturn.io.vtk_xml.run_writer", careless)
    monkeypatch.setattr("unturn.io.vtk_arrays.numpy_to_vtk", _copying)
    with pytest.raises(UnturnError, match="point array 'f8' did not come back") as caught:
        unturn.io.write(meant, path)
    assert caught.value.exit_status == 70
    assert digests(tmp_path, None) == before


def _copying(values: Any) -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk

    return numpy_to_vtk(values, deep=True)


def test_places_that_cannot_be_written_to(
    result: Result, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "folder.vtu").mkdir()
    with pytest.raises(UsageError, match="is a folder"):
        unturn.io.write(result, tmp_path / "folder.vtu")
    with pytest.raises(UsageError, match="No such file"):
        unturn.io.write(result, tmp_path / "missing" / "out.vtu")

    def denied(*_: Any, **__: Any) -> str:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr("tempfile.mkdtemp", denied)  # root may write everywhere, so the refusal is played
    with pytest.raises(UsageError, match="Permission denied"):
        unturn.io.write(result, tmp_path / "out.vtu")
    assert [p.name for p in tmp_path.iterdir()] == ["folder.vtu"]


def test_a_link_stays_a_link(result: Result, tmp_path: Path) -> None:
    (tmp_path / "deep").mkdir()
    unturn.io.write(result, tmp_path / "deep" / "real.vtu")
    (tmp_path / "link.vtu").symlink_to(tmp_path / "deep" / "real.vtu")
    more = result.with_arrays(point_data={"new": np.zeros(result.n_points)})
    unturn.io.write(more, tmp_path / "link.vtu")
    assert (tmp_path / "link.vtu").is_symlink()
    assert "new" in unturn.io.read(tmp_path / "deep" / "real.vtu").point_data


def test_the_permissions_of_the_old_file_stay(result: Result, tmp_path: Path) -> None:
    path = tmp_path / "out.vtu"
    unturn.io.write(result, path)
    path.chmod(0o640)
    unturn.io.write(result, path)
    assert path.stat().st_mode & 0o777 == 0o640


def test_several_files_go_together(tmp_path: Path) -> None:
    target = tmp_path / "index.txt"
    for text in ("old", "new"):
        with replacing(target) as work:
            (work.parent / "steps").mkdir()
            for path in (work, work.parent / "data.bin", work.parent / "steps" / "0.bin"):
                path.write_text(text)
    assert {p.name: p.read_text() for p in tmp_path.rglob("*") if p.is_file()} == dict.fromkeys(
        ("index.txt", "data.bin", "0.bin"), "new"
    )


def test_several_files_go_back_together(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "index.txt"
    with replacing(target) as work:
        work.write_text("old")
        (work.parent / "data.bin").write_text("old")
    before = digests(tmp_path, None)
    real = os.replace

    def failing(source: Any, place: Any) -> None:
        if Path(place) == target:
            raise OSError(errno.EIO, "Input/output error")
        real(source, place)

    monkeypatch.setattr(os, "replace", failing)
    with pytest.raises(UsageError, match="Input/output error"), replacing(target) as work:
        fill(work)
    assert digests(tmp_path, None) == before


def fill(work: Path) -> None:
    for name in (work.name, "data.bin", "more.bin"):
        (work.parent / name).write_text("new")


def test_the_check_sees_every_difference(result: Result) -> None:
    result = replace(result, carrier=None)
    block = result.blocks[0]
    turned = replace(block, connectivity=block.connectivity[:, ::-1])
    point = result.point_data
    differences: list[tuple[Result, str]] = [
        (replace(result, points=np.nextafter(result.points, 9)), "the points"),
        (replace(result, points=result.points.astype(np.float32)), "the points"),
        (replace(result, blocks=(turned,)), "tetra cells"),
        (replace(result, point_data={k: v for k, v in point.items() if k != "u"}), "point array 'u'"),
        (result.with_arrays(point_data={"u": -point["u"]}), "point array 'u'"),
        (result.with_arrays(point_data={"half nan": np.abs(point["half nan"])}), "point array 'half nan'"),
        (result.with_arrays(point_data={"i4": point["i4"].astype("i8")}), "point array 'i4'"),
        (result.with_arrays(cell_data={"label": np.array(["x", "y", "z"])}), "cell array 'label'"),
        (result.with_arrays(field_data={"TimeValue": np.array([2.0])}), "field array 'TimeValue'"),
        (replace(result, component_names={}), "component names"),
    ]  # fmt: skip
    _readback.check_same(result, result, ())
    for found, what in differences:
        with pytest.raises(UnturnError, match=what):
            _readback.check_same(result, found, ())
    without = replace(result, point_data={k: v for k, v in point.items() if k != "u"})
    _readback.check_same(result, without, ("The point array 'u' was not written.",))


def test_component_names_of_an_array_taken_away_do_not_matter(result: Result, tmp_path: Path) -> None:
    bare = replace(result, point_data={"u": result.point_data["u"]}, cell_data={}, field_data={})
    assert bare.component_names
    assert unturn.io.write(bare, tmp_path / "out.vtu") == ()


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="the system has no named pipes")
def test_a_pipe_or_a_device_is_not_replaced_by_a_file(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe.json"
    os.mkfifo(pipe)
    with pytest.raises(UsageError, match="is a device or a pipe"), replacing(pipe) as work:
        work.write_text("x")
    assert pipe.is_fifo()
    assert [*tmp_path.iterdir()] == [pipe]
