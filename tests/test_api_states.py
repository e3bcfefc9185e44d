"""`unturn.envelope` and `unturn.convergence`: what the commands do, from Python."""

from __future__ import annotations

import inspect
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from typer.main import get_command

import unturn
from documents import run
from meshes import patch
from test_cli_convergence import plate
from unturn.cli._main import app
from unturn.cli._output import write_json
from unturn.elements import ELEMENTS
from unturn.errors import InputError, UsageError
from unturn.io import series_writer
from unturn.pipeline import StrainOptions
from unturn.result import Result

MESH = patch(ELEMENTS["hexahedron"])
COMMANDS: dict[str, Any] = dict(get_command(app).commands)  # type: ignore[attr-defined]


def step(k: float, **cells: Any) -> Result:
    u = 1e-3 * np.sin(k + 3 * MESH.points) + 1e-3 * k * MESH.points
    return MESH.result(u=u).with_arrays(cell_data=cells)


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    with series_writer("run.xdmf") as writer:
        for k in range(4):
            writer.add(step(k), 0.5 * k)
    for k, name in enumerate(("dead", "wind")):
        unturn.write(step(k), f"{name}.vtu")
    return tmp_path


def same_arrays(a: Result, b: Result) -> None:
    for ours, theirs in ((a.cell_data, b.cell_data), (a.point_data, b.point_data)):
        assert list(ours) == list(theirs)
        for name, values in ours.items():
            assert np.array_equal(values, theirs[name], equal_nan=values.dtype.kind == "f"), name
    assert a.component_names == b.component_names


@pytest.mark.derived("the command and the function do the same")
@pytest.mark.parametrize(
    ("command", "series", "options"),
    [
        ("run.xdmf", "run.xdmf", {}),
        ("run.xdmf --at nodes --base hencky", "run.xdmf", {"at": "nodes", "base": "hencky"}),
        (
            "run.xdmf --no-range --zero-step 1 --measures strain,spin",
            "run.xdmf",
            {"range": False, "zero_step": 1, "measures": ["strain", "spin"]},
        ),
        ("dead.vtu wind.vtu --prefix e_", ["dead.vtu", "wind.vtu"], {"prefix": "e_"}),
        (
            "dead.vtu wind.vtu --combinations c.toml --solve linear",
            ["dead.vtu", Path("wind.vtu")],
            {"combinations": {"a": {"dead": 1.35, "wind": "+-1.5"}, "b": {"dead": 1}}, "solve": "linear"},
        ),
    ],
)
def test_an_envelope_is_that_of_the_command(
    desk: Path, command: str, series: Any, options: dict[str, Any]
) -> None:
    Path("c.toml").write_text('[combinations.a]\ndead = 1.35\nwind = "+-1.5"\n[combinations.b]\ndead = 1\n')
    status, text = run(["envelope", *command.split(), "-o", "out.vtu", "--json", "out.json"])
    assert status == 0, text
    found = unturn.envelope(series, **options)
    same_arrays(found.result, unturn.read("out.vtu"))
    assert text.startswith(found.text + "\nwrote out.vtu")
    write_json({**found.data, "output": "out.vtu"}, Path("again.json"))
    assert json.loads(Path("again.json").read_text()) == json.loads(Path("out.json").read_text())
    assert found.failures == {}


@pytest.mark.derived("the same states from memory, from files and by name")
def test_states_in_memory_are_those_of_files(desk: Path) -> None:
    from_file = unturn.envelope("run.xdmf", measures=["strain", "strain_increment"]).result
    steps = [unturn.read("run.xdmf", k) for k in range(4)]
    in_memory = unturn.envelope(steps, as_series=True, measures=["strain", "strain_increment"]).result
    same_arrays(in_memory, from_file)
    assert set(in_memory.cell_data["strain_maximum_time"].ravel().tolist()) <= {0.0, 0.5, 1.0, 1.5}
    cases = unturn.envelope({"dead": step(0), "wind": "wind.vtu"}, measures=["strain"])
    files = unturn.envelope(["dead.vtu", "wind.vtu"], measures=["strain"])
    same_arrays(cases.result, files.result)
    assert [s["name"] for s in cases.data["states"]] == ["dead", "wind"]
    both = {"combinations": {"x": {"dead": 2.0, "wind": -1.0}}, "solve": "linear", "measures": ["strain"]}
    same_arrays(
        unturn.envelope({"dead": step(0), "wind": step(1)}, **both).result,
        unturn.envelope(["dead.vtu", "wind.vtu"], **both).result,
    )
    zeroed = unturn.envelope(steps, as_series=True, zero_step=2, measures=["strain"]).result
    same_arrays(zeroed, unturn.envelope("run.xdmf", zero_step=2, measures=["strain"]).result)


@pytest.mark.practice("a state that fails is named, and the others go on when asked to")
def test_failures_are_kept(desk: Path) -> None:
    Path("wind.vtu").write_text("<VTKFile")
    with pytest.raises(InputError, match="wind"):
        unturn.envelope(["dead.vtu", "wind.vtu"])
    found = unturn.envelope(["dead.vtu", "wind.vtu", "dead.vtu"], keep_going=True)
    assert list(found.failures) == ["wind.vtu"]
    assert set(found.result.cell_data["equivalent_strain_maximum_case"].tolist()) == {0}


@pytest.mark.derived("a table of displacements for each load case, on one mesh")
def test_tables_of_load_cases(desk: Path) -> None:
    unturn.write(MESH.result(), "mesh.vtu")
    for k in (1, 2):
        u = step(k).point_data["u"]
        lines = ["node,ux,uy,uz", *(f"{n + 1},{x!r},{y!r},{z!r}" for n, (x, y, z) in enumerate(u.tolist()))]
        Path(f"case_{k}.csv").write_text("\n".join(lines))
    tables = ["case_2.csv", "case_1.csv"]
    found = unturn.envelope("mesh.vtu", displacement_table=tables, measures=["strain"]).result
    expected = unturn.envelope([step(2), step(1)], measures=["strain"]).result
    assert np.array_equal(found.cell_data["strain_maximum"], expected.cell_data["strain_maximum"])
    assert np.array_equal(found.cell_data["strain_maximum_case"], expected.cell_data["strain_maximum_case"])
    status, text = run(
        ["envelope", "mesh.vtu", "-o", "t.vtu", "--as-series", "--measures", "strain,strain_increment",
         "--displacement-table", "case_2.csv", "--displacement-table", "case_1.csv"]
    )  # fmt: skip
    assert status == 0, text
    series = unturn.envelope(
        [step(1), step(2)], as_series=True, measures=["strain", "strain_increment"]
    ).result
    assert np.array_equal(
        unturn.read("t.vtu").cell_data["strain_increment_maximum"],
        series.cell_data["strain_increment_maximum"],
    )
    Path("c.toml").write_text('[combinations.a]\ncase_1 = 1.0\ncase_2 = "+-2.0"\n')
    status, text = run(
        ["envelope", "mesh.vtu", "-o", "c.vtu", "--combinations", "c.toml", "--solve", "linear",
         "--displacement-table", "case_2.csv", "--displacement-table", "case_1.csv"]
    )  # fmt: skip
    assert status == 0, text
    both = {"a": {"case_1": 1.0, "case_2": "+-2.0"}}
    same = unturn.envelope({"case_1": step(1), "case_2": step(2)}, combinations=both, solve="linear").result
    found = unturn.read("c.vtu")
    assert np.allclose(found.cell_data["strain_maximum"], same.cell_data["strain_maximum"], atol=1e-17)
    for bad, words in (
        (["dead.vtu", "wind.vtu"], "several files are given"),
        (["mesh.vtu", "--displacement", "u"], "exclude each other"),
        (["mesh.vtu", "--zero-step", "0"], "step of one series"),
    ):
        status, text = run(["envelope", *bad, "--displacement-table", "case_1.csv"])
        assert (status, text.count("\n")) == (2, 1), text
        assert words in text


@pytest.mark.practice("a call that cannot be right says what to do")
@pytest.mark.parametrize(
    ("series", "options", "words"),
    [
        ([], {}, "the series is empty"),
        (["dead.vtu"], {}, "holds one step"),
        ([step(0)], {}, "holds one step"),
        ("run.xdmf", {"messures": ["strain"]}, "Did you mean 'measures'"),
        ("run.xdmf", {"borders": "split"}, "'borders' is no option"),
        ("run.xdmf", {"at": "surface"}, "an envelope is of values at centroid, mean, nodes"),
        ("run.xdmf", {"combinations": {"a": {"run:0": 1}}}, "state --solve linear if they were"),
        (
            "run.xdmf",
            {"combinations": {"a": {"run:9": 1}}, "solve": "linear"},
            "no load case is called 'run:9'",
        ),
        ([step(0), step(1)], {"combinations": {"a": {}}, "solve": "linear"}, "holds no load case"),
        ([step(0), step(1)], {"zero_step": 0}, "as_series=True"),
        ([step(0), step(1)], {"displacement_table": ["t.csv"]}, "a mesh given by its path"),
        ([step(0), step(1)], {"region": ["roof"]}, "no region is called 'roof'"),
    ],
)
def test_wrong_calls(desk: Path, series: Any, options: dict[str, Any], words: str) -> None:
    with pytest.raises(UsageError, match=words):
        unturn.envelope(series, **options)


@pytest.mark.derived("the command and the function do the same")
def test_a_study_is_that_of_the_command(desk: Path) -> None:
    meshes = {f"{name}.vtu": plate(n) for name, n in (("a", 8), ("b", 16), ("c", 32))}
    for name, result in meshes.items():
        unturn.write(result, name)
    texts = ["peak strain_XX", "value strain_XX at 0,0.3"]
    asked = [word for t in texts for word in ("--quantity", t)]
    status, text = run(["convergence", *meshes, *asked, "--plane", "strain", "--json", "c.json"])
    assert status == 0, text
    found = unturn.convergence(*meshes, quantity=texts, plane="strain")
    assert text == found.text + "\n"
    write_json(found.data, Path("again.json"))
    assert json.loads(Path("again.json").read_text()) == json.loads(Path("c.json").read_text())
    one = unturn.convergence(*meshes.values(), quantity=texts[0], plane="strain")
    assert one.studies == {texts[0]: found.studies[texts[0]]}
    for options, words in (
        ({"quantity": []}, "quantity is empty"),
        ({"quantity": "peak strain"}, "name one of strain_XX"),
        ({"quantity": texts, "frame": "cylindrical z"}, "'frame' is no option of a refinement study"),
        ({"quantity": texts, "at": "nodes"}, "at 'centroid' or 'mean'"),
        ({"quantity": texts, "planes": "strain"}, "Did you mean 'plane'"),
        ({"quantity": texts, "plane": "strain", "step": 3}, "coarse mesh: a.vtu has no step 3"),
    ):
        with pytest.raises(UsageError, match=words):
            unturn.convergence("a.vtu", "b.vtu", "c.vtu", **options)  # type: ignore[arg-type]


@pytest.mark.derived("keyword names are option names")
@pytest.mark.parametrize("name", ["envelope", "convergence"])
def test_keywords_are_the_options_of_the_command(name: str) -> None:
    known = set(StrainOptions.__dataclass_fields__)
    keywords = {p.name for p in inspect.signature(getattr(unturn, name)).parameters.values()
                if p.kind is p.KEYWORD_ONLY}  # fmt: skip
    options = {
        p.opts[0].lstrip("-").replace("-", "_") for p in COMMANDS[name].params if p.opts[0].startswith("-")
    }
    files = {"o", "json", "steps_output"}  # where the command writes
    assert options - known - files == keywords
