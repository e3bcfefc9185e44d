"""`unturn patchtest` as it is called: text, files, exit statuses and messages."""

from __future__ import annotations

import csv
import datetime
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from junitparser import JUnitXml
from lxml import etree

import meshes
import unturn
from documents import ROOT, run, table
from unturn.elements import ELEMENTS
from unturn.verdicts import installation
from unturn.verdicts.installation_checks import FORMULAS, Case, Check

pytestmark = pytest.mark.practice("exit statuses and messages as the documents say")

BRACKET = ROOT / "sample_meshes" / "bracket_tets.vtu"
SCHEMA = etree.XMLSchema(etree.parse(Path(__file__).parent / "schemas" / "junit-10.xsd"))


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def turned(path: Path, cells: slice = slice(None)) -> None:
    """A mesh of straight hexahedra with the tops of some listed in a wrong order."""
    line = np.linspace(0, 1, 4)
    points = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange(64).reshape(4, 4, 4)
    square = ((0, 0), (1, 0), (1, 1), (0, 1))
    conn = np.stack(
        [number[a : 3 + a, b : 3 + b, c : 3 + c].ravel() for c in (0, 1) for a, b in square], axis=1
    )
    conn[cells] = conn[cells][:, [0, 1, 2, 3, 5, 6, 7, 4]]
    result = meshes.Mesh(points, conn, ELEMENTS["hexahedron"]).result()
    unturn.write(replace(result, cell_data={"element_number": np.arange(1001, 1028)}), path)


def test_a_sound_mesh_passes_in_every_form(desk: Path) -> None:
    before = BRACKET.read_bytes()
    outputs = ["--json", "a.json", "--junit", "a.xml", "--markdown", "a.md", "--csv", "a.csv"]
    status, said = run(["patchtest", str(BRACKET), "--at", "nodes", "--at", "surface", *outputs])
    assert status == 0, said
    assert "26 met of 26: PASSED" in said
    assert "note: solid mesh: 2376 tetra10; the displacement of the file was not used" in said
    data = json.loads(Path("a.json").read_text(encoding="utf-8"))
    assert data["schema"].startswith("unturn.verdict/")
    assert data["command"] == "patchtest"
    assert data["passed"] is True
    assert data["settings"]["fields"][0]["name"] == "translation"
    strains = {f["id"]: f for f in data["findings"]}
    assert strains["uniform_strain.tetra10.part=1"]["details"]["relative"] < 1e-12
    assert strains["turn.tetra10.part=2"]["place"]["element"] > 0
    SCHEMA.assertValid(etree.parse("a.xml"))
    assert JUnitXml.fromfile("a.xml").failures == 0
    rows = list(csv.DictReader(Path("a.csv").read_text(encoding="utf-8").splitlines()))
    assert len(rows) == 26
    assert "**unturn patchtest: 26 met of 26: PASSED**" in Path("a.md").read_text(encoding="utf-8").replace(
        "\\", ""
    )
    assert BRACKET.read_bytes() == before


def test_the_details_of_findings_are_documented_key_by_key(desk: Path) -> None:
    page = ROOT / "docs" / "patchtest.md"
    rows = {row[0].strip("`"): row[1] for row in table(page, "detail of `patchtest`", "type")}
    assert run(["patchtest", str(BRACKET), "--at", "nodes", "--at", "surface", "--json", "a.json"])[0] == 0
    data = json.loads(Path("a.json").read_text(encoding="utf-8"))
    assert {key for f in data["findings"] for key in f["details"]} == set(rows)
    kinds = {"integer": int, "number": (int, float), "string": str, "object": dict, "boolean": bool}
    for key, value in ((k, v) for f in data["findings"] for k, v in f["details"].items()):
        allowed = rows[key].split(" or ")
        assert (value is None and "null" in allowed) or isinstance(value, kinds[allowed[0]]), key  # type: ignore[arg-type]
    text = page.read_text(encoding="utf-8")
    named = [*data["settings"], *data["settings"]["fields"][0]]
    assert all(f"`{key}`" in text for key in named)


def test_a_wrong_order_of_nodes_fails_the_build(desk: Path) -> None:
    turned(desk / "turned.vtu")
    status, said = run(["patchtest", "turned.vtu", "--junit", "t.xml"])
    assert status == 1
    assert "27 hold the nodes of a straight cell in another order than that of a hexahedron cell" in said
    assert "element 1001 (cell 0)" in said
    assert "NOT PASSED" in said
    assert JUnitXml.fromfile("t.xml").failures == 2
    turned(desk / "sound.vtu", slice(0))
    assert run(["patchtest", "sound.vtu"])[0] == 0


def test_what_is_undecided_can_be_allowed(desk: Path) -> None:
    mesh = meshes.curved(meshes.patch(ELEMENTS["wedge"]))
    cells = mesh.cells.copy()
    cells[:3] = cells[:3][:, [0, 1, 2, 4, 5, 3]]
    unturn.write(mesh._replace(cells=cells).result(), desk / "wedges.vtu")
    assert run(["patchtest", "wedges.vtu"])[0] == 1
    status, said = run(["patchtest", "wedges.vtu", "--allow-undecided"])
    assert status == 0
    assert "UNDECIDED" in said


def test_json_on_the_standard_output_is_alone_there(desk: Path, capsys: pytest.CaptureFixture[str]) -> None:
    turned(desk / "sound.vtu", slice(0))
    from unittest.mock import patch

    from unturn.cli import main

    with (
        patch("sys.argv", ["unturn", "patchtest", "sound.vtu", "--json", "-"]),
        pytest.raises(SystemExit) as stop,
    ):
        main()
    out, err = capsys.readouterr()
    assert stop.value.code in (0, None)
    assert json.loads(out)["passed"] is True
    assert "PASSED" in err


def test_a_mesh_without_arrays_and_a_region_of_it(desk: Path) -> None:
    mesh = meshes.patch(ELEMENTS["quad"]).result()
    unturn.write(replace(mesh, cell_data={"part": np.array([1, 1, 2, 2, 2])}), desk / "plate.vtu")
    status, said = run(["patchtest", "plate.vtu", "--region", "part=2"])
    assert status == 0, said
    assert "plane mesh (as plane strain): 5 quad" in said
    assert "quad in part=2" in said
    assert "part=1" not in said
    status, said = run(["patchtest", "plate.vtu", "--region", "part=3"])
    assert status == 2
    assert "holds no cell" in said


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        ([], 2, "name the file whose mesh is to be tested, or say --installation"),
        (["nothing.vtu"], 3, "there is no such file"),
        (["bad.vtu"], 3, "bad.vtu"),
        (["ok.vtu", "--installation"], 2, "leave FILE and the options for it away"),
        (["--installation", "--at", "nodes"], 2, "leave FILE and the options for it away"),
        (["--installation", "--step", "3"], 2, "leave FILE and the options for it away"),
        (["ok.vtu", "-o", "record.txt"], 2, "-o and --today belong to --installation"),
        (["ok.vtu", "--today", "2026-12-31"], 2, "-o and --today belong to --installation"),
        (["--installation", "--today", "31.12.2026"], 2, "'31.12.2026' is not a date"),
        (["--installation", "-o", "no/such/folder.txt"], 2, "there is no folder"),
        (["--installation", "-o", "a.json", "--json", "a.json"], 2, "named for two outputs"),
        (["ok.vtu", "--json", "ok.vtu"], 2, "is an input file"),
        (["ok.vtu", "--at", "centroid"], 2, "'centroid' is not one of 'nodes', 'surface'"),
        (["ok.vtu", "--step", "all"], 2, "--step 'all'"),
        (["ok.vtu", "--alive", "nothing"], 2, "no cell array is called 'nothing'"),
        (["bow.vtu"], 3, "no cell could be computed: 5 tangled"),
    ],
)
def test_what_cannot_be_done_is_said(desk: Path, arguments: list[str], status: int, words: str) -> None:
    turned(desk / "ok.vtu", slice(0))
    (desk / "bad.vtu").write_text("<VTKFile")
    plate = meshes.patch(ELEMENTS["quad"])
    unturn.write(plate._replace(cells=plate.cells[:, [0, 1, 3, 2]]).result(), desk / "bow.vtu")
    found, said = run(["patchtest", *arguments])
    assert found == status, said
    assert words in said
    assert "Traceback" not in said


# --- the record of an installation --------------------------------------------------------------------------------


@pytest.fixture
def few(monkeypatch: pytest.MonkeyPatch) -> list[Check]:
    """Some checks in the place of all, which take seconds."""
    checks = [c for c in FORMULAS if c.name in ("simple_shear", "refinement", "percentiles")]
    monkeypatch.setattr(installation, "all_checks", lambda: tuple(checks))
    return checks


def test_the_record_is_printed_and_written(desk: Path, few: list[Check]) -> None:
    arguments = [
        "patchtest",
        "--installation",
        "--today",
        "2026-12-31",
        "-o",
        "record.txt",
        "--json",
        "r.json",
        "--junit",
        "r.xml",
    ]
    status, said = run(arguments)
    assert status == 0, said
    written = Path("record.txt").read_text(encoding="utf-8")
    assert written == said
    assert "PASSED: 3 met of 3 checks" in said
    data = json.loads(Path("r.json").read_text(encoding="utf-8"))
    assert data["schema"] == "unturn.installation/1"
    assert data["date"] == "2026-12-31"
    assert data["sha256"] in written
    SCHEMA.assertValid(etree.parse("r.xml"))
    first = Path("r.json").read_bytes(), Path("r.xml").read_bytes()
    assert run(arguments) == (0, said)
    assert (Path("r.json").read_bytes(), Path("r.xml").read_bytes()) == first


def test_without_a_date_it_is_todays(desk: Path, few: list[Check]) -> None:
    before = datetime.date.today()
    said = run(["patchtest", "--installation"])[1]
    assert any(f"date           {day.isoformat()}\n" in said for day in (before, datetime.date.today()))


def test_a_failed_check_gives_exit_status_1_and_a_record(desk: Path, few: list[Check]) -> None:
    few.append(Check("off", "one is two", few[0].source, lambda: [Case("off", 1.0, 0.5)]))
    status, said = run(["patchtest", "--installation", "-o", "record.txt"])
    assert status == 1
    assert "NOT PASSED: 1 exceeded, 3 met of 4 checks" in said
    assert "EXCEEDED" in Path("record.txt").read_text(encoding="utf-8")
