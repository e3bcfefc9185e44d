"""`unturn convergence` as it is called: text, JSON, exit statuses and messages."""

from __future__ import annotations

import json
import math
from pathlib import Path
from unittest.mock import patch as replaced

import numpy as np
import pytest

import unturn
from documents import run
from meshes import straight
from unturn.elements import ELEMENTS
from unturn.result import Result


def plate(n: int, power: float = 0.0) -> Result:
    """The unit square in n x n quads, two parts; u = exp(x) or x^power."""
    line = np.linspace(0.0, 1.0, n + 1)
    corners = np.stack(np.meshgrid(line, line, indexing="ij"), axis=-1).reshape(-1, 2)
    i, j = (k.reshape(-1) for k in np.meshgrid(np.arange(n), np.arange(n), indexing="ij"))
    first = i * (n + 1) + j
    cells = np.stack([first, first + n + 1, first + n + 2, first + 1], axis=1)
    mesh = straight(corners, cells, ELEMENTS["quad"])
    x = np.abs(mesh.points[:, 0])
    u = np.zeros_like(mesh.points)
    u[:, 0] = 1e-3 * (x**power if power else np.exp(x))
    part = (mesh.points[mesh.cells].mean(axis=1)[:, 1] > 0.5).astype(np.int32)
    return mesh.result(u=u).with_arrays(cell_data={"part": part})


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    for name, n in (("coarse", 8), ("medium", 16), ("fine", 32)):
        unturn.write(plate(n), f"{name}.vtu")
        unturn.write(plate(n, 0.5), f"{name}_root.vtu")
    return tmp_path


MESHES = "coarse.vtu medium.vtu fine.vtu"
ROOT = "coarse_root.vtu medium_root.vtu fine_root.vtu"


def said(files: str, *quantities: str, status: int = 0, more: str = "--plane strain") -> str:
    asked = [word for q in quantities for word in ("--quantity", q)]
    found, text = run(["convergence", *files.split(), *more.split(), *asked])
    assert found == status, text
    return text


@pytest.mark.derived("u = exp(x): largest strain e, half a cell away at the centroid: first order")
def test_a_study_says_order_limit_and_index(desk: Path) -> None:
    texts = ("peak strain_XX", "peak strain_XX in part=1", "percentile 50 strain_XX", "value strain_XX at 0,0,0",
             "peak strain_XX within 0.2 of 1,1,0")  # fmt: skip
    text = said(MESHES, *texts, more="--plane strain --json c.json")
    assert "size (volume/cells)^(1/dim) 0.125 0.0625 0.03125" in " ".join(text.split())
    data = json.loads(Path("c.json").read_text())
    assert data["schema"] == "unturn.convergence/1"
    assert [m["cells"] for m in data["meshes"]] == [64, 256, 1024]
    assert [q["quantity"] for q in data["quantities"]] == list(texts)
    first = data["quantities"][0]
    assert first["behaviour"] == "converges"
    assert first["order"] == pytest.approx(1, abs=0.05)
    assert first["extrapolated"] == pytest.approx(1e-3 * math.e, rel=1e-3)
    fine = first["on"][2]
    assert fine["value"] == pytest.approx(1e-3 * (math.e - math.exp(31 / 32)) * 32)
    assert fine["at"][0] == pytest.approx(1 - 1 / 64)
    assert first["grid_convergence_index"] == pytest.approx(first["error"] / fine["value"])
    assert data["quantities"][1]["on"][0]["cells"] == 32
    assert data["quantities"][3]["extrapolated"] == pytest.approx(1e-3, rel=1e-3)
    assert f"peak strain_XX: {fine['value'] * 1e6:.6g} on the fine mesh, +-" in text


@pytest.mark.derived(
    "a strain that grows like x^-1/2 towards an end has no limit there, and one away from it"
)
def test_a_singular_peak_is_undecided_and_a_value_away_from_it_is_not(desk: Path) -> None:
    text = said(
        ROOT, "peak strain_XX", "value strain_XX at 1,0.3,0", status=1, more="--plane strain --json r.json"
    )
    assert "peak strain_XX: NO ORDER, it diverges" in text
    assert "1 of 2 quantities have no order" in text
    data = json.loads(Path("r.json").read_text())
    assert [q["behaviour"] for q in data["quantities"]] == ["diverges", "converges"]
    assert data["quantities"][0]["order"] is None
    assert data["quantities"][1]["extrapolated"] == pytest.approx(0.5e-3, rel=2e-3)


def sheared(n: int, kind: type, part: int = 1) -> Result:
    """u = (y, x) / 1000 and a shift: no strain along x or y, but for rounding; its second part is numbered `part`."""
    result = plate(n)
    points = result.points + np.array([0.3, 0.7, 0.0])
    u = 1e-3 * points[:, [1, 0, 2]] + np.array([0.37, 0.11, 0.0])
    tags = {"part": part * np.asarray(result.cell_data["part"])}
    return Result(points, result.blocks, {"u": u.astype(kind)}, tags)


@pytest.mark.derived("a strain that is zero does not diverge, whatever rounding makes of it")
@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_zero_to_rounding_is_below_the_stored_precision(desk: Path, kind: type) -> None:
    for name, n in (("a", 8), ("b", 16), ("c", 32)):
        unturn.write(sheared(n, kind), f"{name}.vtu")
    texts = ("peak strain_YY", "lowest strain_XX", "percentile 95 strain_YY", "value strain_XX at 0.8,0.9")
    text = said("a.vtu b.vtu c.vtu", *texts, "peak strain_XY", more="--plane strain --json z.json")
    found = json.loads(Path("z.json").read_text())["quantities"]
    assert [q["behaviour"] for q in found] == ["below precision"] * 4 + ["unchanged"]
    for q in found[:4]:
        assert all(abs(on["value"]) <= on["floor"] for on in q["on"])
        assert q["error"] == max(on["floor"] for on in q["on"])
        assert (q["order"], q["extrapolated"]) == (None, None)
    assert [on["at"] is None for q in found for on in q["on"]] == [False] * 6 + [True] * 3 + [False] * 6
    assert text.count("below the stored precision: zero as far as the numbers tell") == 4
    assert found[4]["on"][2]["value"] == pytest.approx(1e-3, abs=found[4]["on"][2]["floor"])


@pytest.mark.practice("what is missing on one mesh is told of that mesh")
def test_a_region_that_one_mesh_lacks(desk: Path) -> None:
    for name, n, part in (("a", 8, 1), ("b", 16, 2), ("c", 32, 1)):
        unturn.write(sheared(n, np.float64, part), f"{name}.vtu")
    text = said("a.vtu b.vtu c.vtu", "percentile 50 strain_XX in part=1", status=2)
    assert "medium mesh: b.vtu: 'percentile 50 strain_XX in part=1': region 'part=1' holds no cell" in text


@pytest.mark.practice("rigid motion and free thermal strain are taken out on every mesh")
def test_options_of_strain_hold_on_every_mesh(desk: Path) -> None:
    for name, n in (("a", 4), ("b", 8), ("c", 16)):
        result = plate(n)
        hot = 20 + 100 * result.points[:, 0]
        u = np.asarray(result.point_data["u"]) + np.column_stack(
            [-0.2 * result.points[:, 1], 0.2 * result.points[:, 0], 0 * hot]
        )
        unturn.write(
            Result(result.points, result.blocks, {"u": u, "T": hot}, result.cell_data), f"{name}.vtu"
        )
    heat = "--plane strain --thermal-expansion 12e-6 --temperature T --reference-temperature 20"
    text = said(
        "a.vtu b.vtu c.vtu", "peak mechanical_strain_XX", "peak strain_XX", more=f"{heat} --json m.json"
    )
    hot, cold = (q["on"][2] for q in json.loads(Path("m.json").read_text())["quantities"])
    assert cold["value"] - hot["value"] == pytest.approx(12e-6 * 100 * cold["at"][0], rel=1e-9)
    assert "2 quant" not in text
    assert "the value at a point is that of the total strain" in said(
        "a.vtu b.vtu c.vtu", "value mechanical_strain_XX at 0.5,0.5", status=2, more=heat
    )
    said(
        "a.vtu b.vtu c.vtu",
        "peak rotation_Z",
        status=0,
        more="--plane strain --remove-rigid whole --solve linear --json r.json",
    )
    turned = json.loads(Path("r.json").read_text())["quantities"][0]["on"]
    assert all(abs(on["value"]) < 1e-3 for on in turned)


@pytest.mark.practice("stdout is for the JSON when asked")
def test_json_on_the_standard_output(desk: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from unturn.cli import main

    arguments = [
        "convergence",
        *MESHES.split(),
        "--plane",
        "strain",
        "--quantity",
        "peak strain_XX",
        "--json",
        "-",
    ]
    with replaced("sys.argv", ["unturn", *arguments]), pytest.raises(SystemExit):
        main()
    out, err = capsys.readouterr()
    assert json.loads(out)["quantities"][0]["unit"] == "1"
    assert "grid convergence index" in err


@pytest.mark.practice("what makes an index doubtful is said")
def test_doubts_are_notes(desk: Path) -> None:
    unturn.write(plate(9), "nearly.vtu")
    assert "differ in size by a factor of 1.12" in said("coarse.vtu nearly.vtu fine.vtu", "peak strain_XX")
    other = plate(16)
    stretched = Result(other.points * [1.0, 1.2, 1.0], other.blocks, other.point_data, other.cell_data)
    unturn.write(stretched, "other.vtu")
    assert "is it the same part?" in said("coarse.vtu other.vtu fine.vtu", "peak strain_XX")


@pytest.mark.practice("wrong usage is exit 2, an unusable input 3, each with what to do")
@pytest.mark.parametrize(
    ("files", "quantity", "status", "words"),
    [
        (MESHES, "", 2, "say what is to be followed"),
        (MESHES, "largest strain_XX", 2, "is not understood"),
        (MESHES, "peak strain_XXX", 2, "Did you mean 'strain_XX'"),
        (MESHES, "peak strain_XX in arm", 2, "no region is called 'arm'"),
        (MESHES, "value strain_XX at 5,0,0", 2, "no computed element holds that point"),
        ("fine.vtu medium.vtu coarse.vtu", "peak strain_XX", 2, "is not finer than the coarse one"),
        ("coarse.vtu medium.vtu medium.vtu", "peak strain_XX", 2, "the fine mesh is not finer"),
        ("coarse.vtu medium.vtu none.vtu", "peak strain_XX", 3, "no such file"),
    ],
)
def test_wrong_calls(desk: Path, files: str, quantity: str, status: int, words: str) -> None:
    text = said(files, *([quantity] if quantity else []), status=status)
    assert words in text
    assert text.startswith("unturn: ")
    assert text.count("\n") == 1


@pytest.mark.practice("a plane mesh must state its third direction for what depends on it")
def test_options_reach_the_computation(desk: Path) -> None:
    assert "the mesh is plane" in said(MESHES, "peak equivalent_strain", status=2, more="--at mean")
    assert "equals" not in said(MESHES, "peak equivalent_strain", more="--plane stress --poisson 0.3")
    assert "follows one step" in said(MESHES, "peak strain_XX", status=2, more="--step all")
    assert "does not exist" in said(MESHES, "peak strain_XX", status=2, more="--step 3")
