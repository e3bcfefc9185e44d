"""A flat shell whose first step does not move: it is a surface throughout, not a plane mesh at first."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from documents import run
from unturn import CellBlock, Result, io

X, Y = (a.ravel() for a in np.meshgrid(np.arange(3.0), np.arange(3.0)))
POINTS = np.stack([X, Y, 0 * X], axis=1)
CELLS = CellBlock("quad", np.array([0, 1, 3, 4])[:, None] + [0, 1, 4, 3], np.arange(4))


def series(path: Path, across: float) -> None:
    with io.series_writer(path) as writer:
        for t in range(3):
            u = t * 1e-3 * np.stack([X, 0 * X, across * X * Y], axis=1)
            writer.add(Result(POINTS, (CELLS,), {"u": u}), float(t))


@pytest.mark.derived(
    "u = t 1e-3 x: XX = t 1e-3; a surface keeps no strain along its normal, a plane mesh must state it"
)
def test_a_flat_shell_is_a_surface_in_every_step(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    series(tmp_path / "shell.xdmf", across=1.0)
    status, said = run(["strain", "shell.xdmf", "--step", "all"])
    assert status == 0, said
    for t in range(3):
        strain = io.read("shell.strain.xdmf", t).cell_data["strain"]
        np.testing.assert_allclose(strain[:, 0], t * 1e-3, rtol=1e-12)
        assert np.abs(strain[:, 2]).max() < 1e-15
    status, said = run(["envelope", "shell.xdmf"])
    assert status == 0, said
    series(tmp_path / "plate.xdmf", across=0.0)
    for command in (["strain", "plate.xdmf", "--step", "all"], ["envelope", "plate.xdmf"]):
        status, said = run(command)
        assert status == 2
        assert "the mesh is plane" in said
