"""`unturn check` as it is called: exit statuses, outputs, several files, the same bytes every time."""

from __future__ import annotations

import csv
import hashlib
import json
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import junitparser
import numpy as np
import pytest

import unturn
from documents import ROOT, run
from limits_samples import row, write, written

pytestmark = pytest.mark.derived("the rules of docs/limits.md and docs/build-server.md")

PULL: dict[str, Any] = {
    "id": "pull",
    "measure": "strain",
    "component": "XX",
    "statistic": "maximum",
    "at_most": 2000,
    "unit": "microstrain",
    "accept": ["plus-minus", "singular"],
}


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("COLUMNS", "110")
    unturn.write(row([1e-3, -5e-4], element_number=[7, 8]), "good.vtu")
    unturn.write(row([3e-3, -5e-4], element_number=[7, 8]), "bad.vtu")
    mesh = row([1e-3, -5e-4])
    u = mesh.point_data["u"].copy()
    u[-1] = np.nan
    unturn.write(mesh.with_arrays(point_data={"u": u}), "gap.vtu")
    Path("broken.vtu").write_text("<VTKFile")
    write(Path("limits.toml"), written(PULL))
    return tmp_path


def said(*arguments: str, status: int = 0) -> str:
    found, text = run(["check", *arguments])
    assert found == status, text
    return text


def data(*arguments: str, status: int = 0) -> Any:
    said(*arguments, "--json", "out.json", status=status)
    return json.loads(Path("out.json").read_text(encoding="utf-8"))


def test_every_exit_status(desk: Path) -> None:
    assert "1 met of 1: PASSED" in said("good.vtu", "limits.toml")
    assert "1 exceeded of 1: NOT PASSED" in said("bad.vtu", "limits.toml", status=1)
    assert "1 undecided of 1: NOT PASSED" in said("gap.vtu", "limits.toml", status=1)
    allowed = said("gap.vtu", "limits.toml", "--allow-undecided")
    assert "UNDECIDED" in allowed
    assert "(undecided is allowed): PASSED" in allowed
    line = 1 + write(Path("wrong.toml"), written({**PULL, "at_mots": 1})).read_text().splitlines().index(
        "at_mots = 1"
    )
    assert f"unturn: wrong.toml, line {line}: limits[1].at_mots" in said("good.vtu", "wrong.toml", status=2)
    assert "the limits cannot be read" in said("good.vtu", "missing.toml", status=2)
    assert "give the result files and, last, the limits file" in said("good.vtu", status=2)
    assert "broken.vtu" in said("broken.vtu", "limits.toml", status=3)
    assert "no such file" in said("missing.vtu", "limits.toml", status=3)


def test_allowed_undecided_does_not_let_anything_else_pass(desk: Path) -> None:
    said("bad.vtu", "limits.toml", "--allow-undecided", status=1)
    said("broken.vtu", "limits.toml", "--allow-undecided", status=3)
    write(Path("gone.toml"), written({**PULL, "region": "it"}, regions={"it": {"tag": "element_number=99"}}))
    said("good.vtu", "gone.toml", "--allow-undecided", status=1)


def test_a_verdict_names_value_bound_margin_element_place_and_hashes(desk: Path) -> None:
    text = said("bad.vtu", "limits.toml", status=1)
    lines = " ".join(text.split())
    assert re.search(r"EXCEEDED pull 3000 \+-\d+ at most 2000 margin -1000 microstrain", lines)
    assert "element 7 (cell 0) at 0.5, 0.5, 0.5" in lines
    for name in ("bad.vtu", "limits.toml"):
        assert hashlib.sha256(Path(name).read_bytes()).hexdigest() in text
    found = data("bad.vtu", "limits.toml", status=1)
    assert found["schema"] == "unturn.verdict/1"
    assert found["passed"] is False
    (finding,) = found["findings"]
    assert finding["value"] == pytest.approx(3000)
    assert (finding["low"], finding["high"]) == (None, 2000)
    assert finding["margin"] == pytest.approx(-1000)
    assert finding["place"]["element"] == 7
    assert finding["place"]["at"] == pytest.approx([0.5, 0.5, 0.5])
    assert [i["sha256"] for i in found["inputs"]] == [
        hashlib.sha256(Path(n).read_bytes()).hexdigest() for n in ("limits.toml", "bad.vtu")
    ]


def test_several_files_have_their_own_cases(desk: Path) -> None:
    text = said(
        "good.vtu", "bad.vtu", "broken.vtu", "limits.toml", "--junit", "j.xml", "--csv", "t.csv", status=3
    )
    assert "1 with an error, 1 exceeded, 1 met of 3" in text
    suites = list(junitparser.JUnitXml.fromfile("j.xml"))
    assert [s.name for s in suites] == ["good.vtu", "bad.vtu", "broken.vtu"]
    results = {s.name: [type(r) for c in s for r in c.result] for s in suites}
    assert results == {"good.vtu": [], "bad.vtu": [junitparser.Failure], "broken.vtu": [junitparser.Error]}
    with Path("t.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [(r["group"], r["state"]) for r in rows] == [
        ("good.vtu", "met"), ("bad.vtu", "exceeded"), ("broken.vtu", "error"),
    ]  # fmt: skip
    hashes = {
        n: hashlib.sha256(Path(n).read_bytes()).hexdigest() for n in ("limits.toml", "good.vtu", "bad.vtu")
    }
    limits = f"limits limits.toml {hashes['limits.toml']}"
    assert [r["sha256"] for r in rows] == [
        f"{limits}; result good.vtu {hashes['good.vtu']}", f"{limits}; result bad.vtu {hashes['bad.vtu']}", limits,
    ]  # fmt: skip


def test_one_file_given_twice_is_refused(desk: Path) -> None:
    assert "are the same file" in said("good.vtu", "./good.vtu", "limits.toml", status=2)
    Path("again").mkdir()
    shutil.copy("good.vtu", "again/good.vtu")
    assert "2 met of 2" in said("good.vtu", "again/good.vtu", "limits.toml")


def test_the_same_input_gives_the_same_bytes(desk: Path) -> None:
    outputs = ["--json", "o.json", "--junit", "o.xml", "--markdown", "o.md", "--csv", "o.csv"]
    seen = set()
    for threads in ("1", "2", "1"):
        text = said(
            "good.vtu",
            "bad.vtu",
            "limits.toml",
            "--today",
            "2026-12-01",
            "--threads",
            threads,
            *outputs,
            status=1,
        )
        seen.add((text, *(Path(n).read_bytes() for n in outputs[1::2])))
    assert len(seen) == 1


def test_no_output_replaces_an_input(desk: Path) -> None:
    for option in ("--json", "--junit", "--markdown", "--csv"):
        for name in ("limits.toml", "good.vtu"):
            before = Path(name).read_bytes()
            assert "input file" in said("good.vtu", "limits.toml", option, name, status=2)
            assert Path(name).read_bytes() == before


def test_data_on_the_standard_output_stands_alone(desk: Path) -> None:
    program = f"import sys; sys.path.insert(0, {str(ROOT / 'src')!r}); from unturn.cli import main; main()"
    command = [sys.executable, "-c", program, "check", "good.vtu", "limits.toml"]
    done = subprocess.run([*command, "--json", "-"], capture_output=True, text=True, check=True, timeout=120)
    assert json.loads(done.stdout)["schema"] == "unturn.verdict/1"
    assert "1 met of 1: PASSED" in done.stderr


def test_waivers_are_judged_on_the_day_that_is_given(desk: Path) -> None:
    waiver = '\n[limits.waiver]\nowner = "A. Person"\nreason = "known"\nexpires = 2026-12-24\n'
    write(Path("waived.toml"), written(PULL) + waiver)
    assert "1 waived of 1: PASSED" in said("bad.vtu", "waived.toml", "--today", "2026-12-24")
    assert "has expired" in said("bad.vtu", "waived.toml", "--today", "2026-12-25", status=1)
    assert "is no date" in said("bad.vtu", "waived.toml", "--today", "tomorrow", status=2)


def test_explain_reads_no_result(desk: Path) -> None:
    text = said("--explain", "limits.toml")
    assert "strain XX, largest in whole, at centroids; all steps" in text
    assert "must be at most 2000 microstrain" in text
    assert "--explain reads no result" in said("--explain", "good.vtu", "limits.toml", status=2)


def test_every_bound_level_and_consent_is_explained(desk: Path) -> None:
    shutil.copy(ROOT / "sample_meshes" / "bracket.limits.toml", desk)
    text = " ".join(said("--explain", "bracket.limits.toml", "--today", "2026-12-01").split())
    for part in (
        "9 limits, pole bracket, service load", "solve: stated linear", "its displacement is 'u'",
        "it has 704 cells, or 25 % more or fewer", "its small strain is marginal or better",
        "bond: box from (-0.001, -0.021, 0.014) to (0.009, 0.021, 0.019)", "arm: tag part=1; at least 100 cells",
        "arm_away: tag part=1 and in none of bond, bores", "pull/arm_away",
        "must be at most 4000 microstrain; warning above 1000",
        "must be at least -100 microstrain and at most 100 microstrain", "99 % of the volume below in arm",
        "share above 400 microstrain in arm", "must be at most 50 percent",
        "accepted: a peak that is suspected singular is taken as it is",
        "waived: until 2099-12-31 by J. Doe (invented)", "source: Ebbstrider design note 7, table 2 (invented)",
        "must be at most 0.001 length",
    ):  # fmt: skip
        assert part in text, part


def test_the_sample_limits_pass_and_fail(desk: Path) -> None:
    for name in ("bracket.vtu", "bracket_tets.vtu", "bracket.limits.toml"):
        shutil.copy(ROOT / "sample_meshes" / name, desk)
    day = ("--today", "2026-12-01")
    found = data("bracket.vtu", "bracket.limits.toml", *day)
    states = {f["id"]: f["state"] for f in found["findings"]}
    assert states["bond"] == "waived"
    assert states["turn"] == "warning"
    assert states["pull/arm_away"] == "warning"
    assert {"undecided", "exceeded", "error"}.isdisjoint(states.values())
    other = data("bracket_tets.vtu", "bracket.limits.toml", *day, status=1)
    states = {f["id"]: f["state"] for f in other["findings"]}
    assert states["result/cells"] == "error"  # another mesh than the one the limits were written for
    assert {states[i] for i in ("deflection", "mesh", "push/arm_away")} == {"error"}
    mesh = unturn.read("bracket.vtu")
    unturn.write(mesh.with_arrays(point_data={"u": 3.0 * mesh.point_data["u"]}), "worse.vtu")
    worse = data("worse.vtu", "bracket.limits.toml", *day, status=1)
    assert {f["id"]: f["state"] for f in worse["findings"]}["deflection"] == "exceeded"


def test_the_heavy_data_of_an_index_is_hashed_too(desk: Path) -> None:
    for name in ("lever.xdmf", "lever.h5"):
        shutil.copy(ROOT / "sample_meshes" / name, desk)
    write(Path("lever.toml"), written({**PULL, "base": "hencky", "steps": "last", "at_most": 1e9}))
    inputs = {i["file"]: i["sha256"] for i in data("lever.xdmf", "lever.toml")["inputs"]}
    assert inputs["lever.h5"] == hashlib.sha256(Path("lever.h5").read_bytes()).hexdigest()
    pvtu = (
        '<VTKFile type="PUnstructuredGrid" version="1.0"><PUnstructuredGrid GhostLevel="0">'
        '<Piece Source="good.vtu"/></PUnstructuredGrid></VTKFile>'
    )
    Path("all.pvtu").write_text(pvtu)
    found = unturn.io.files_behind(Path("all.pvtu"))
    assert [p.name for p in found] == ["good.vtu"]
    assert unturn.io.files_behind(Path("good.vtu")) == []
