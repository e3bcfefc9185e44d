"""Names, places and ends that a command meets on real machines: nothing is lost, and the exit status says what was."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import unturn
from documents import run
from test_cli_wrong_input import TETS, U, state, two_tets
from unturn import Result

# Common practice, no source: every check of this file is that files survive and that the exit status is honest.

PROGRAM = [sys.executable, "-c", "from unturn.cli import main; main()"]
LEVER = Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf"


def test_results_of_one_call_do_not_replace_each_other(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    for folder in ("a", "b", "out"):
        (tmp_path / folder).mkdir()
        unturn.write(two_tets(u=U), tmp_path / folder / "job.vtu")
    status, text = run(["strain", "a/job.vtu", "b/job.vtu", "-o", "out"])
    assert status == 2
    assert (
        "b/job.vtu: its result would go to out/job.strain.vtu, the place of the result of a/job.vtu" in text
    )
    before = state(tmp_path)
    status, text = run(["strain", "out/job.vtu", "out/job.strain.vtu"])  # as a pattern *.vtu gives them
    assert status == 2
    assert "would replace out/job.strain.vtu, which is an input too" in text
    assert state(tmp_path) == before


@pytest.mark.parametrize(
    "name", ["with blank.vtu", "\u00fcn\u00ef\u2603.vtu", "-dash.vtu", "a.b.vtu", "UPPER.VTU", "[1].vtu"]
)
def test_names_of_files(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    unturn.write(two_tets(u=U), name)
    status, text = run(["strain", "--", name])
    assert status == 0, text
    out = f"{Path(name).stem}.strain{Path(name).suffix}"
    assert f"wrote {out}" in text
    assert "strain" in unturn.read(out).cell_data


@pytest.mark.parametrize("command", ["survey", "strain"])
def test_a_file_that_may_not_be_read_is_no_wrong_usage(
    command: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    unturn.write(two_tets(u=U), tmp_path / "secret.vtu")
    (tmp_path / "secret.vtu").chmod(0)
    denied = PermissionError(13, "Permission denied")

    def closed(*_: object, **__: object) -> None:
        raise denied

    # permissions do not stop every user
    monkeypatch.setattr("os.access", lambda *_, **__: False)
    monkeypatch.setattr("unturn.io.format_of_file", closed)
    status, text = run([command, str(tmp_path / "secret.vtu")])
    assert (status, "secret.vtu cannot be read: Permission denied" in text) == (3, True), text


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
def test_text_that_nobody_reads_is_no_broken_limit(tmp_path: Path) -> None:
    unturn.write(two_tets(u=U), tmp_path / "good.vtu")
    out = str(tmp_path / "out.xdmf")
    for arguments in (
        ["survey", str(tmp_path / "good.vtu")],
        ["strain", str(LEVER), "--step", "all", "-o", out],
    ):
        read, write = os.pipe()
        os.close(read)
        done = subprocess.run(
            [*PROGRAM, *arguments],
            stdout=write,
            stderr=subprocess.PIPE,
            timeout=60,
            check=False,
        )
        os.close(write)
        assert (done.returncode, done.stderr) == (141, b"")
    assert [p.name for p in tmp_path.iterdir()] == ["good.vtu"]


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
@pytest.mark.parametrize(("sent", "status"), [(signal.SIGTERM, 143), (signal.SIGINT, 130)])
def test_a_request_to_stop_leaves_the_folder_as_it_was(
    sent: signal.Signals, status: int, tmp_path: Path
) -> None:
    unturn.write(two_tets(u=U), tmp_path / "good.vtu")
    (tmp_path / "good.strain.vtu").write_text("old")
    before = state(tmp_path)
    slow = (
        "import time, unturn.io as i\n"
        "i.check_same = lambda *_: time.sleep(60)\n"
        "from unturn.cli import main; main()"
    )
    child = subprocess.Popen(
        [sys.executable, "-c", slow, "strain", str(tmp_path / "good.vtu")], stderr=subprocess.PIPE
    )
    try:
        end = time.monotonic() + 30
        while not list(tmp_path.glob(".unturn-*/*.vtu")) and time.monotonic() < end:
            time.sleep(0.02)
        time.sleep(0.2)
        child.send_signal(sent)
        assert child.wait(timeout=30) == status
    finally:
        child.kill()
        assert child.stderr is not None
        child.stderr.close()
    assert state(tmp_path) == before


def test_an_array_of_nan_does_not_make_a_file_unreadable(tmp_path: Path) -> None:
    import pyvista

    grid = pyvista.UnstructuredGrid({10: TETS.connectivity}, two_tets().points)
    grid.point_data["u"] = U
    grid.cell_data["failed"] = np.full(2, np.nan)
    grid.cell_data["failed_vector"] = np.full((2, 3), np.nan)
    for name in ("failed", "failed_vector"):
        grid.GetCellData().GetArray(name).GetRange(-1)
    grid.save(tmp_path / "grid.vtu")
    assert b"InformationKey" in (tmp_path / "grid.vtu").read_bytes()  # the range that VTK cannot read again
    found: Result = unturn.read(tmp_path / "grid.vtu")
    assert np.isnan(found.cell_data["failed_vector"]).all()
    np.testing.assert_array_equal(found.point_data["u"], U)


def test_files_beside_a_new_output_replace_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(["strain", str(LEVER), "--step", "all", "-o", "run.pvd"])[0] == 0
    (tmp_path / "run.pvd").rename(tmp_path / "old.pvd")  # its files still lie in run/
    before = state(tmp_path)
    status, text = run(["strain", "old.pvd", "--step", "all", "-o", "run.pvd", "--prefix", "p_"])
    assert status == 2
    assert "run.pvd needs the name run/run_0000.vtu beside it, and such a file is there already" in text
    assert state(tmp_path) == before
    for _ in range(2):  # an output of the same name is replaced with all that belongs to it
        status, text = run(["strain", "old.pvd", "--step", "all", "-o", "new.pvd", "--overwrite"])
        assert status == 0, text
