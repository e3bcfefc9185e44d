"""What the verdict says to do was tried: followed, it gives the number that was promised."""

from __future__ import annotations

import json
import shlex
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import meshes
from documents import run
from strategies import axis_angle
from unturn import CellBlock, Result, io
from unturn.elements import ELEMENTS

LEVER = Path(__file__).parents[1] / "sample_meshes" / "lever.xdmf"
STRAINED = np.array([[1e-3, 4e-4, 0], [4e-4, -3e-4, 2e-4], [0, 2e-4, 5e-4]])


def summary(path: Path, *arguments: str) -> tuple[dict[str, Any], str]:
    """Run the command; return its JSON and its text."""
    target = path.with_suffix(".json")
    output = path.with_name(f"out{path.suffix}")
    status, said = run(["strain", str(path), "-o", str(output), "--json", str(target), *arguments])
    assert status == 0, said
    data: dict[str, Any] = json.loads(target.read_text())
    return data, said


def region(data: dict[str, Any], name: str) -> dict[str, Any]:
    found: dict[str, Any] = next(r for r in data["regions"] if r["name"] == name)["verdict"]
    return found


def parts(tmp_path: Path, how: str, turn: np.ndarray) -> Path:
    """Two separate patches; the second turns. Regions by tag, by body, or one body alone."""
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    n = len(mesh.points)
    points, cells = mesh.points, mesh.cells
    u = points @ STRAINED.T
    if how != "whole":
        points = np.concatenate([points, points + np.array([5.0, 0, 0])])
        cells = np.concatenate([cells, cells + n])
        u = np.concatenate([u, u])
    moving = slice(n, None) if how != "whole" else slice(None)
    X = points[moving]
    bump = 2e-4 * np.stack([X[:, 1] ** 2, X[:, 2] * X[:, 0], 0 * X[:, 0]], axis=1)
    strained = X + u[moving] + bump
    u[moving] += bump + strained @ turn.T
    cell_data = {"part": np.repeat([1, 2], 7).astype(np.int32)} if how == "tag" else {}
    path = tmp_path / "case.vtu"
    io.write(
        Result(points, (CellBlock("hexahedron", cells, np.arange(len(cells))),), {"u": u}, cell_data), path
    )
    return path


TURN = axis_angle([0.36, 0.48, 0.8], 0.4)


@pytest.mark.derived("the option that is named is what was tried")
@pytest.mark.parametrize(
    ("how", "option"),
    [("tag", "part=2"), ("body", "bodies"), ("whole", "whole")],
)
@pytest.mark.parametrize("solve", ["nonlinear", "unknown"])
@pytest.mark.parametrize("at", ["centroid", "mean"])
def test_the_suggestion_keeps_its_promise(tmp_path: Path, how: str, option: str, solve: str, at: str) -> None:
    path = parts(tmp_path, how, TURN)
    data, said = summary(path, "--solve", solve, "--at", at)
    broken = next(r["name"] for r in data["regions"] if r["verdict"]["small_strain"] == "does not hold")
    verdict = region(data, broken)
    tried = verdict["tried"][0]
    supposed = "--solve nonlinear " if solve == "unknown" else ""
    assert tried["option"] == f"{supposed}--remove-rigid {option}"
    assert f": rigid motion of {broken} taken out, error left " in said
    assert f"of its strain -> {tried['option']}" in said
    assert ("tried (if the solve was nonlinear)" in said) == (solve == "unknown")
    assert tried["small_strain"] in ("holds", "marginal")
    assert tried["error_left_over_size"] < 0.05 < verdict["largest_error_over_size"]
    known = () if supposed else ("--solve", solve)
    followed, again = summary(path, *known, "--at", at, *shlex.split(tried["option"]))
    after = region(followed, broken)
    assert after["largest_error_over_size"] == pytest.approx(
        tried["error_left_over_size"], rel=1e-6, abs=1e-9
    )
    assert after["small_strain"] == tried["small_strain"]
    assert "tried:" not in again
    motion = max(
        followed["rigid_motion_taken_out"], key=lambda m: np.linalg.norm(m["rotation_vector_degrees"])
    )
    assert np.linalg.norm(motion["rotation_vector_degrees"]) == pytest.approx(np.degrees(0.4), rel=1e-3)
    assert motion["fit"] == "finite"


@pytest.mark.derived("linear and out of range: no measure mends it, so none is offered")
def test_a_linear_solve_is_out_of_range(tmp_path: Path) -> None:
    path = parts(tmp_path, "tag", TURN)
    data, said = summary(path, "--solve", "linear")
    verdict = region(data, "part=2")
    assert verdict["small_strain"] == "does not hold"
    assert verdict["tried"] == []
    assert "tried" not in said
    assert "beyond what linear theory covers" in said
    assert "no measure of this result mends it" in said


def test_the_finite_base_that_is_named_contains_no_turning(tmp_path: Path) -> None:
    path = parts(tmp_path, "tag", TURN)
    data, _ = summary(path, "--solve", "nonlinear")
    assert "--base green-lagrange, hencky or biot" in region(data, "part=2")["action"]
    for base in ("green-lagrange", "hencky", "biot"):
        finite, _ = summary(path, "--solve", "nonlinear", "--base", base)
        key = base.replace("-", "_")
        for r in finite["regions"]:  # what the two parts were strained by, whatever they turned
            assert 1.0e-3 < r["statistics"][f"principal_strain_{key}_1"]["maximum"]["value"] < 1.8e-3


def test_nothing_is_changed_unasked(tmp_path: Path) -> None:
    path = parts(tmp_path, "tag", TURN)
    summary(path, "--solve", "nonlinear")
    written, before = io.read(tmp_path / "out.vtu"), io.read(path)
    assert set(written.cell_data) - set(before.cell_data) == {
        "strain",
        "rotation",
        "equivalent_strain",
        "principal_strain",
    }
    assert not written.field_data
    np.testing.assert_array_equal(written.point_data["u"], before.point_data["u"])
    assert np.abs(written.cell_data["strain"][7:]).max() > 0.02  # the turning is still in it


def test_the_lever(tmp_path: Path) -> None:
    for name in ("lever.xdmf", "lever.h5"):
        (tmp_path / name).write_bytes(LEVER.with_name(name).read_bytes())
    path = tmp_path / "lever.xdmf"
    data, said = summary(path, "--solve", "nonlinear")
    for r in data["regions"]:
        tried = r["verdict"]["tried"][0]
        followed, _ = summary(path, "--solve", "nonlinear", *shlex.split(tried["option"]))
        after = region(followed, r["name"])
        assert after["largest_error_over_size"] == pytest.approx(tried["error_left_over_size"], rel=1e-6)
        assert after["small_strain"] == tried["small_strain"]
        if tried["small_strain"] == "does not hold":
            assert "of its strain: not enough" in said


def test_a_region_named_on_the_command_line(tmp_path: Path) -> None:
    path = parts(tmp_path, "tag", TURN)
    data, _ = summary(path, "--region", "part=2", "--solve", "nonlinear")
    assert [r["name"] for r in data["regions"]] == ["part=2"]
    assert region(data, "part=2")["tried"][0]["option"] == "--remove-rigid part=2"


def test_a_name_with_spaces_is_quoted(tmp_path: Path) -> None:
    mesh = meshes.patch(ELEMENTS["tetra"])
    result = Result(mesh.points, (CellBlock("tetra", mesh.cells, np.arange(len(mesh.cells))),),
                    {"u": (mesh.points + mesh.points @ STRAINED.T) @ TURN.T + mesh.points @ STRAINED.T},
                    groups={"left arm's end": np.arange(10), "rest": np.arange(10, len(mesh.cells))})  # fmt: skip
    from unturn.options import StrainOptions
    from unturn.pipeline import compute
    from unturn.summary import SummaryOptions, summarise

    made = summarise(
        compute(result, StrainOptions(solve="nonlinear"), diagnose=True), SummaryOptions(solve="nonlinear")
    )
    options = {r.region.name: t.option for r in made.regions for t in r.trials[:1]}
    assert shlex.split(options["left arm's end"]) == ["--remove-rigid", "left arm's end"]
    assert shlex.split(options["rest"]) == ["--remove-rigid", "rest"]
