"""`unturn compare` on the command line: exit statuses, files that are written, tolerances that are read, series."""

from __future__ import annotations

import json
import shutil
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import junitparser
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from lxml import etree

import unturn
from documents import ROOT, run
from meshes import patch
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.io import series_writer
from unturn.result import Result
from unturn.testing import assert_results_close
from unturn.verdicts.compare_series import paired_steps
from unturn.verdicts.inputs import hashed_inputs
from unturn.verdicts.tolerances import ARRAY_KEYS, parse_tolerances, read_tolerances

SCHEMA = etree.XMLSchema(etree.parse(Path(__file__).parent / "schemas" / "junit-10.xsd"))


def _result(factor: float = 1.0, **arrays: Any) -> Result:
    mesh = patch(ELEMENTS["hexahedron"])
    u = factor * 1e-3 * mesh.points * [1.0, -0.3, -0.3]
    return mesh.result(u=u, **arrays).with_arrays(cell_data={"lot": np.arange(len(mesh.cells))})


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder with a result, one that is 2 % larger, and two series."""
    unturn.write(_result(), tmp_path / "before.vtu")
    unturn.write(_result(1.02), tmp_path / "now.vtu")
    _series(tmp_path / "before.xdmf", (0.0, 0.5, 1.0))
    monkeypatch.chdir(tmp_path)
    return tmp_path


def _series(path: Path, times: tuple[float, ...], wrong: float = -1.0) -> None:
    """A series that grows with time; at one time it is 2 % too large."""
    with series_writer(path) as writer:
        for t in times:
            writer.add(_result(t * (1.02 if t == wrong else 1.0)), t)


# --- exit statuses ----------------------------------------------------------------------------------------------------


@pytest.mark.derived("0 within tolerance, 1 beyond or undecided, 2 wrong usage, 3 not usable")
@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        ("before.vtu before.vtu", 0, "PASSED"),
        ("now.vtu before.vtu", 1, "NOT PASSED"),
        ("now.vtu before.vtu --relative 0.0199", 1, "EXCEEDED"),
        ("now.vtu before.vtu --relative 0.0201", 0, "PASSED"),
        ("now.vtu before.vtu --relative u=0.0201", 0, "PASSED"),
        ("now.vtu before.vtu --of-largest 0.0201", 0, "PASSED"),
        ("now.vtu before.vtu --absolute 1e-4", 0, "PASSED"),
        ("now.vtu before.vtu --array lot", 0, "PASSED"),
        ("now.vtu before.vtu --ignore u", 0, "PASSED"),
        ("now.vtu before.vtu --relative 0.0201 --measures strain,rotation", 0, "computed strain in whole"),
        ("now.vtu before.vtu --ignore u --measures strain", 1, "computed strain in whole"),
        ("now.vtu before.vtu --array uu", 2, "Did you mean 'u'"),
        ("now.vtu before.vtu --relative uu=0.1", 2, "Did you mean 'u'"),
        ("now.vtu before.vtu --relative -1", 2, "a number from 0 on"),
        ("now.vtu before.vtu --relative nan", 2, "a number from 0 on"),
        ("now.vtu before.vtu --absolute u=x", 2, "'x' is no tolerance"),
        ("now.vtu before.vtu --outside 2", 2, "share of the volume"),
        ("now.vtu before.vtu --step x", 2, "'last', 'all' or a number"),
        ("now.vtu before.vtu --step 1", 2, "step 1 does not exist"),
        ("now.vtu before.vtu --region arm", 2, "no region is called 'arm'"),
        ("now.vtu before.vtu --base hencky", 2, "name them with --measures"),
        ("now.vtu before.vtu --measures strian", 2, "Did you mean 'strain'"),
        ("now.vtu before.vtu --tolerances none.toml", 2, "cannot be read"),
        ("now.vtu before.vtu --json before.vtu", 2, "would be lost"),
        ("now.vtu before.vtu --json a --junit a", 2, "two outputs"),
        ("before.xdmf before.xdmf --csv before.xdmf.h5", 2, "would be lost"),
        ("now.vtu before.vtu -o out.stl", 2, "out.stl"),
        ("none.vtu before.vtu", 3, "no such file"),
        ("before.vtu none.vtu", 3, "no such file"),
        ("before.vtu before.vtu --ignore u --ignore lot", 3, "no array to compare"),
    ],
)
def test_the_exit_status_says_what_was_found(desk: Path, arguments: str, status: int, words: str) -> None:
    found, said = run(["compare", *arguments.split()])
    assert found == status, said
    assert words in said
    assert "Traceback" not in said


@pytest.mark.derived("undecided is 1, unless it is allowed")
def test_undecided_may_be_allowed(desk: Path) -> None:
    half = patch(ELEMENTS["hexahedron"])
    some = half._replace(cells=half.cells[:4])
    unturn.write(replace(some.result(u=_result().point_data["u"])), desk / "part.vtu")
    arguments = ["compare", "part.vtu", "before.vtu", "--array", "u"]
    status, said = run(arguments)
    assert (status, "UNDECIDED" in said) == (1, True)
    status, said = run([*arguments, "--allow-undecided"])
    assert (status, "undecided is allowed" in said) == (0, True)


# --- what is written --------------------------------------------------------------------------------------------------


@pytest.mark.source("XML schema of JUnit results in common use; junitparser as an independent reader")
def test_every_form_is_written_and_says_the_same(desk: Path) -> None:
    forms = ["--json", "a.json", "--junit", "a.xml", "--markdown", "a.md", "--csv", "a.csv", "-o", "a.vtu"]
    arguments = ["compare", "now.vtu", "before.vtu", "--measures", "strain", *forms]
    status, said = run(arguments)
    assert status == 1
    first = {name: Path(name).read_bytes() for name in forms[1::2]}
    data = json.loads(first["a.json"])
    by_id = {f["id"]: f for f in data["findings"]}
    assert (data["schema"], data["command"], data["passed"]) == ("unturn.verdict/1", "compare", False)
    SCHEMA.assertValid(etree.fromstring(first["a.xml"]))
    cases = [case for suite in junitparser.JUnitXml.fromstring(first["a.xml"]) for case in suite]
    assert [c.name for c in cases] == list(by_id)
    assert [bool(c.result) for c in cases] == [f["state"] == "exceeded" for f in data["findings"]]
    strain = by_id["computed strain in whole"]
    assert strain["state"] == "exceeded"
    assert (strain["unit"], strain["value"]) == ("microstrain", pytest.approx(20))
    assert strain["details"]["largest"]["value"] == pytest.approx(2e-5)
    assert strain["details"]["relative"]["value"] == pytest.approx(0.02 / np.sqrt(1 + 2 * 0.09), rel=1e-9)
    assert f"{len(by_id)}: NOT PASSED" in said
    written = unturn.read("a.vtu")
    assert written.point_data["u_difference"] == pytest.approx(
        0.02 * unturn.read("before.vtu").point_data["u"], abs=1e-16
    )
    assert written.cell_data["strain_difference"][:, 0] == pytest.approx(2e-5)
    run(arguments)
    assert {name: Path(name).read_bytes() for name in forms[1::2]} == first


@pytest.mark.derived("the hashes of the inputs, and of the numbers behind an index")
def test_the_inputs_are_named_with_their_hashes(desk: Path) -> None:
    Path("t.toml").write_text('schema = "unturn.tolerances/1"\n[default]\nrelative = 0.03\n')
    status, _ = run(["compare", "now.vtu", "before.vtu", "--tolerances", "t.toml", "--json", "a.json"])
    assert status == 0
    inputs = json.loads(Path("a.json").read_text())["inputs"]
    assert [i["role"] for i in inputs] == ["result", "reference", "tolerances"]
    index, data = hashed_inputs("result", "before.xdmf")
    assert Path(data.path).name == "before.xdmf.h5"
    shutil.copy("before.xdmf.h5", "other.h5")
    Path("before.xdmf.h5").write_bytes(Path("before.xdmf.h5").read_bytes() + b"\0")
    assert hashed_inputs("result", "before.xdmf")[0] == index
    assert hashed_inputs("result", "before.xdmf")[1].sha256 != data.sha256
    with series_writer(desk / "many.pvd") as writer:
        for t in range(6):
            writer.add(_result(), float(t))
    main, pieces = hashed_inputs("result", "many.pvd")
    assert (main.path, pieces.path) == ("many.pvd", "6 files that many.pvd names")


@pytest.mark.derived("an index of indices")
def test_what_lies_behind_an_index_of_indices_is_hashed(tmp_path: Path) -> None:
    (tmp_path / "a.pvd").write_text('<VTKFile><DataSet timestep="0" file="b.pvtu"/></VTKFile>')
    (tmp_path / "b.pvtu").write_text('<VTKFile><Piece Source="x"/><DataSet file="c.vtu"/></VTKFile>')
    (tmp_path / "c.vtu").write_text("<VTKFile/>")
    assert [Path(i.path).name for i in hashed_inputs("result", tmp_path / "a.pvd")] == [
        "a.pvd",
        "b.pvtu",
        "c.vtu",
    ]


@dataclass
class _Opened:
    """A file with these steps, that is never read."""

    steps: tuple[float, ...] | None
    path: str = "x.xdmf"
    format_name: str = "XDMF"

    def read(self, step: int = 0) -> Result:
        raise NotImplementedError


@pytest.mark.derived("one step is the counterpart of one step, within 1e-6 of the time of the series")
def test_a_step_is_matched_once() -> None:
    def matched(
        ours: tuple[float, ...], theirs: tuple[float, ...]
    ) -> tuple[list[tuple[int, int]], list[str]]:
        pairs, findings = paired_steps(_Opened(ours), _Opened(theirs), "all")
        return [(p.ours, p.theirs) for p in pairs], [f.state for f in findings]

    assert matched((0.0, 1.0, 2.0), (0.0, 1.0, 2.0)) == ([(0, 0), (1, 1), (2, 2)], ["met"])
    assert matched((2.0, 0.0), (0.0, 2.0)) == ([(1, 0), (0, 1)], ["met"])
    assert matched((0.0, 1.0), (0.0, 1.0, 1.0 + 1e-9)) == ([(0, 0), (1, 1)], ["exceeded"])
    assert matched((0.0, 1.0 + 1e-7), (0.0, 1.0)) == ([(0, 0), (1, 1)], ["met"])
    assert matched((0.0, 1.0 + 1e-5), (0.0, 1.0)) == ([(0, 0)], ["exceeded"])
    assert matched((5.0,), (0.0, 1.0)) == ([], ["exceeded"])


@pytest.mark.derived("names out of files break no form")
def test_hostile_names_of_arrays(desk: Path) -> None:
    name = 'a|b <script>"`x`" @all &amp; ]]> \u202e'
    unturn.write(_result(**{name: np.ones(16)}), desk / "h.vtu")
    unturn.write(_result(**{name: np.zeros(16)}), desk / "i.vtu")
    status, _ = run(
        [
            "compare",
            "h.vtu",
            "i.vtu",
            "--junit",
            "a.xml",
            "--markdown",
            "a.md",
            "--csv",
            "a.csv",
            "--json",
            "a.json",
        ]
    )
    assert status == 1
    root = etree.fromstring(Path("a.xml").read_bytes())
    SCHEMA.assertValid(root)
    assert any("<script>" in n for n in root.xpath("//testcase/@name"))
    assert "<script" not in Path("a.md").read_text(encoding="utf-8")
    assert any(name in f["id"] for f in json.loads(Path("a.json").read_text(encoding="utf-8"))["findings"])


# --- series -----------------------------------------------------------------------------------------------------------


@pytest.mark.derived("steps are matched by their time; one that is missing is beyond tolerance")
def test_steps_are_matched_by_time(desk: Path) -> None:
    _series(desk / "more.xdmf", (0.0, 0.25, 0.5, 1.0))
    _series(desk / "fewer.xdmf", (0.0, 0.5))
    _series(desk / "wrong.xdmf", (0.0, 0.5, 1.0), wrong=0.5)
    status, said = run(["compare", "more.xdmf", "before.xdmf", "--step", "all", "--measures", "strain"])
    assert (status, "steps that the reference has not, at t = 0.25" in said) == (0, True)
    status, said = run(["compare", "fewer.xdmf", "before.xdmf", "--step", "all"])
    assert (status, "the result has no step at t = 1" in said) == (1, True)
    status, said = run(["compare", "fewer.xdmf", "before.xdmf"])
    assert (status, "a series that is not finished" in said) == (1, True)
    assert run(["compare", "wrong.xdmf", "before.xdmf"])[0] == 0  # the last step is right
    assert run(["compare", "wrong.xdmf", "before.xdmf", "--step", "0"])[0] == 0
    assert run(["compare", "wrong.xdmf", "before.xdmf", "--step", "1"])[0] == 1
    status, said = run(
        ["compare", "wrong.xdmf", "before.xdmf", "--step", "all", "--json", "a.json", "-o", "d.xdmf"]
    )
    assert status == 1
    (one,) = [f for f in json.loads(Path("a.json").read_text())["findings"] if f["id"] == "point u in whole"]
    assert (one["state"], one["place"]["step"], one["place"]["time"]) == ("exceeded", 1, 0.5)
    assert one["details"]["steps_not_met"] == [1]
    largest = [np.abs(unturn.read("d.xdmf", k).point_data["u_difference"]).max() for k in range(3)]
    assert largest == [0.0, pytest.approx(1e-5), 0.0]


@pytest.mark.derived("a series against a single state")
def test_a_series_against_a_single_state(desk: Path) -> None:
    status, said = run(["compare", "before.vtu", "before.xdmf", "--array", "u"])
    assert (status, "the result is no series" in said) == (0, True)
    status, said = run(["compare", "before.xdmf", "before.vtu", "--array", "u"])
    assert (status, "the reference is no series" in said) == (0, True)
    status, said = run(["compare", "before.vtu", "before.xdmf", "--step", "all"])
    assert (status, "is no series" in said) == (2, True)


@pytest.mark.derived(
    "the steps of a series on another mesh: a linear field is exact, and a wrong step is found"
)
def test_a_series_on_another_mesh(desk: Path) -> None:
    fine = patch(ELEMENTS["tetra10"])
    for name, factor in (("fine.xdmf", 1.0), ("off.xdmf", 1.02)):
        with series_writer(desk / name) as writer:
            for t in (0.0, 0.5, 1.0):
                u = (factor if t == 0.5 else 1.0) * t * 1e-3 * fine.points * [1.0, -0.3, -0.3]
                writer.add(fine.result(u=u), t)
    options = ["--step", "all", "--array", "u", "--measures", "strain", "--json", "a.json"]
    assert run(["compare", "before.xdmf", "fine.xdmf", *options])[0] == 0
    assert run(["compare", "before.xdmf", "off.xdmf", *options])[0] == 1
    data = json.loads(Path("a.json").read_text())
    wrong = {f["id"]: f["details"]["steps_not_met"] for f in data["findings"] if f["state"] == "exceeded"}
    assert wrong == {"point u in whole": [1], "computed strain in whole": [1]}


# --- tolerances -------------------------------------------------------------------------------------------------------


@pytest.mark.derived("a misspelt or senseless tolerance is an error with its place, and never a pass")
@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "'schema' is missing"),
        ('schema = "unturn.tolerances/9"', "unturn.tolerances/1"),
        ("[default", "not a TOML file"),
        ("[defualt]\nabsolute = 1", "Did you mean 'default'"),
        ("[default]\nabsolut = 1", "Did you mean 'absolute'"),
        ("[default]\nabsolute = -1", "line 3: default.absolute: expected a number from 0 on, found -1"),
        ("[default]\nabsolute = nan", "a number from 0 on"),
        ("[default]\nabsolute = inf", "a number from 0 on"),
        ("[default]\nabsolute = true", "a number from 0 on"),
        ('[default]\nabsolute = "1"', "a number from 0 on"),
        ("[default]\nshare = 1.0", "below 1"),
        ('[default]\nby = "component"', "Did you mean 'components'"),
        ('[default]\nsign = "any"', 'one of "fixed", "free"'),
        ("[arrays.uu]\nabsolute = 1", "Did you mean 'u'"),
        ("[arrays.u]\nabsolut = 1", "arrays.u.absolut"),
        ("arrays = 1", "tables [arrays.NAME]"),
        ("default = 1", "expected a table"),
        ('ignore = "u"', "a list of different texts"),
        ('ignore = ["nothing"]', "neither of the results has"),
    ],
)
def test_malformed_tolerances_are_wrong_usage(desk: Path, text: str, words: str) -> None:
    head = "" if not text or text.startswith("schema") else 'schema = "unturn.tolerances/1"\n'
    Path("t.toml").write_text(head + text)
    status, said = run(["compare", "before.vtu", "before.vtu", "--tolerances", "t.toml"])
    assert status == UsageError.exit_status, said
    assert words in " ".join(said.split())


@pytest.mark.derived("what is stated for an array goes before the default, and an option before both")
def test_tolerances_are_laid_over_each_other(desk: Path) -> None:
    Path("t.toml").write_text(
        'schema = "unturn.tolerances/1"\nignore = ["lot"]\n[default]\nabsolute = 1.0\nshare = 0.5\n'
        '[arrays.u]\nrelative = 0.25\nby = "norm"\n[arrays."a.b"]\nabsolute = 0\n'
    )
    t = read_tolerances("t.toml")
    assert (t.of("x").absolute, t.of("x").relative, t.of("x").by) == (1.0, 0.0, "components")
    assert (t.of("u").absolute, t.of("u").relative, t.of("u").by, t.of("u").share) == (1.0, 0.25, "norm", 0.5)
    assert t.of("a.b").absolute == 0.0
    over = t.with_options(absolute=["2", "u=3", "a=b=4"])
    assert [over.of(n).absolute for n in ("x", "u", "a=b", "a.b")] == [2.0, 3.0, 4.0, 0.0]
    assert over.ignore == ("lot",)


@pytest.mark.derived("no malformed table is taken for a tolerance")
@given(
    st.dictionaries(
        st.sampled_from([k.name for k in ARRAY_KEYS] + ["absolut", ""]),
        st.one_of(st.floats(), st.integers(), st.booleans(), st.text(), st.none(), st.lists(st.integers())),
    )
)
@settings(max_examples=200)
def test_no_malformed_table_is_a_tolerance(table: dict[str, Any]) -> None:
    try:
        found = parse_tolerances({"default": table}).default
    except UsageError:
        return
    assert set(table) <= {k.name for k in ARRAY_KEYS}
    for key, value in table.items():
        assert getattr(found, key) == value
        if key in ("absolute", "relative", "of_largest", "share"):
            assert 0 <= value < (1 if key == "share" else np.inf)


# --- from a test ------------------------------------------------------------------------------------------------------


@pytest.mark.derived("the message of an assertion names array, difference, tolerance and place")
def test_results_are_asserted_to_be_close(desk: Path) -> None:
    now, before = _result(1.02), _result()
    assert_results_close(now, before, relative=0.0201)
    assert_results_close("now.vtu", Path("before.vtu"), relative=0.0201, measures=["strain"])
    assert_results_close("before.xdmf", "before.xdmf", step="all")
    for pair in ((now, before), ("now.vtu", "before.vtu")):
        with pytest.raises(AssertionError) as raised:
            assert_results_close(*pair, relative=0.0199)
        said = str(raised.value)
        assert "EXCEEDED  point u in whole" in said
        assert "at most" in said
        assert "point " in said
        assert "cell lot" not in said
        assert "2 more findings pass" in said
    with pytest.raises(UsageError, match="two results in memory, or the paths"):
        assert_results_close(now, "before.vtu")
    with pytest.raises(UsageError, match="no option"):
        assert_results_close(now, before, plaine="strain")


@pytest.mark.derived("the sample results")
def test_the_sample_brackets_on_different_meshes() -> None:
    samples = ROOT / "sample_meshes"
    found = unturn.compare(
        unturn.read(samples / "bracket.vtu"), unturn.read(samples / "bracket_tets.vtu"), arrays=["u"],
        tolerances={"default": {"of_largest": 0.02}},
    )  # fmt: skip
    assert found.passed  # "the displacements of the two agree within 2 %", sample_meshes/README.md
