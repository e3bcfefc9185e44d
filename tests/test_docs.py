"""The documents say what the program does: every example runs, every table is held against the code."""

from __future__ import annotations

import json
import math
import re
import shutil
import tomllib
from pathlib import Path
from typing import Any, get_args

import numpy as np
import pytest
from typer.main import get_command

import unturn
import unturn._accessor  # found by itself only when the package is installed
from documents import EVERY_PAGE, PAGES, ROOT, Session, blocks, run, spoken, table
from unturn import CellBlock, Result, refinement
from unturn.cli._main import app
from unturn.cli._options import BaseChoice
from unturn.elements import ELEMENTS
from unturn.errors import InputError, UnturnError
from unturn.io import FORMATS, Format
from unturn.kinematics._finite import BASES
from unturn.measures import DEFAULT_MEASURES, ESTIMATES, GEOMETRY, MEASURES, SMALL, Measure
from unturn.picture_keys import PICTURE_KEYS
from unturn.pictures.plan import PLAN_KEYS, PLAN_READING_KEYS
from unturn.refinement import Behaviour
from unturn.report_keys import REPORT_KEYS
from unturn.series import SERIES_MEASURES
from unturn.verdicts.finding import STATES
from unturn.verdicts.imposed import imposed_fields
from unturn.verdicts.installation import check_installation, record_data
from unturn.verdicts.installation_checks import FORMULAS, Case, Check
from unturn.verdicts.tolerances import ARRAY_KEYS, FILE_KEYS

SAMPLES = [p for p in (ROOT / "sample_meshes").iterdir() if p.suffix in (".vtu", ".xdmf", ".h5", ".toml")]
README, DOCS = ROOT / "README.md", ROOT / "docs"
COMMANDS: dict[str, Any] = dict(get_command(app).commands)  # type: ignore[attr-defined]

pytestmark = pytest.mark.derived("the documents and the code say the same")


@pytest.fixture
def desk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A working folder with the sample results in it, and in a folder of it as in a clone."""
    (tmp_path / "sample_meshes").mkdir()
    for sample in SAMPLES:
        shutil.copy(sample, tmp_path)
        shutil.copy(sample, tmp_path / "sample_meshes")
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("COLUMNS", "100")
    return tmp_path


@pytest.mark.parametrize("page", PAGES, ids=lambda p: p.name)
def test_every_example_runs_and_prints_what_is_shown(page: Path, desk: Path) -> None:
    session = Session(page)
    for number, block in enumerate(blocks(page)):
        if page == README and number == 0:
            status, said = run(_main_job(block.text))
            assert status == 0, said
            assert (desk / "bracket.png").stat().st_size > 5_000
            session.said = said
        elif page != README or block.text != _test_command():
            session.play(block)


def _main_job(line: str) -> list[str]:
    """Return the arguments of the README's first command."""
    *install, job = line.split(" && ")
    assert install == ["python3 -m venv .venv", ".venv/bin/pip install --quiet ."]
    return spoken(job.removeprefix(".venv/bin/"))


def _test_command() -> str:
    return [b for b in blocks(README) if b.info == "sh"][1].text


def test_the_first_two_commands_are_single_lines_that_need_nothing_else() -> None:
    shell = [b for b in blocks(README) if b.info == "sh"]
    assert shell[0].text.startswith(
        "python3 -m venv .venv && .venv/bin/pip install --quiet . && .venv/bin/unturn strain "
    )
    assert "--picture" in shell[0].text
    assert shell[1].text == (
        "python3 -m venv .venv-test && .venv-test/bin/pip install --quiet -e '.[test]' && "
        ".venv-test/bin/python -m pytest -n auto"
    )
    assert "\n" not in shell[0].text + shell[1].text


def test_the_table_of_commands_is_the_programs() -> None:
    assert [row[0] for row in table(README, "command")] == [f"`unturn {name}`" for name in COMMANDS]


@pytest.mark.parametrize("name", list(COMMANDS))
def test_every_option_is_documented(name: str) -> None:
    documented = {row[0] for row in table(DOCS / "commands.md", f"option of `{name}`")}
    options = {opt for p in COMMANDS[name].params for opt in p.opts if opt.startswith("--")} - {"--help"}
    assert {re.search(r"--[\w-]+", d)[0] for d in documented} == options  # type: ignore[index]


def test_no_page_names_an_option_that_does_not_exist() -> None:
    known = {opt for c in COMMANDS.values() for p in c.params for opt in (*p.opts, *p.secondary_opts)} | {
        "--version",
        "--debug",
        "--help",
    }
    for page in (p for p in EVERY_PAGE if p.name != "DEVELOPERS.md"):
        named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]*", page.read_text(encoding="utf-8")))
        assert not named - known - {"--quiet"}, page.name


def test_the_exit_codes_are_those_of_the_errors() -> None:
    rows = {int(row[0]): row[1] for row in table(DOCS / "commands.md", "exit status")}
    assert {0, 1} | {e.exit_status for e in _all_errors(UnturnError)} == set(rows)
    assert rows == {int(row[0]): row[1] for row in table(README, "exit status")}


def _all_errors(kind: type[UnturnError]) -> set[type[UnturnError]]:
    return {kind}.union(*(_all_errors(k) for k in kind.__subclasses__()))


def _row(m: Measure) -> list[str]:
    return [
        f"`{m.name}`", _components(m), "radian" if m.unit == "radian" else "1", "yes" if m.needs_third else "no",
        m.meaning, f"{m.source.text} ({m.source.kind})",
    ]  # fmt: skip


def _components(m: Measure) -> str:
    return " ".join(m.components) or "one number"


def test_the_tables_of_measures_are_the_codes() -> None:
    page = DOCS / "conventions.md"
    assert table(page, "array", "components") == [_row(m) for m in SMALL.values()]
    motion = [m for m in MEASURES.values() if m.finite and not m.name.endswith(BASES)]
    assert table(page, "array of the motion") == [_row(m) for m in motion]
    assert table(page, "mechanical array") == [_row(m) for m in MEASURES.values() if m.mechanical]
    geometry = [[f"`{name}`", meaning] for name, meaning in GEOMETRY.items()]
    assert table(page, "array of the mesh alone") == geometry
    estimates = [[f"`{name}`", meaning] for name, meaning in ESTIMATES.items() if not name.endswith(BASES)]
    assert table(page, "estimate") == estimates
    assert f"`{', '.join(DEFAULT_MEASURES)}`" in page.read_text(encoding="utf-8")


def test_the_tables_of_series_and_studies_are_the_codes() -> None:
    page = DOCS / "conventions.md"
    assert table(page, "array of a series") == [
        [f"`{m.name}`", " ".join(m.components) or "one number", "1" if m.unit == "strain" else m.unit, m.meaning,
         f"{m.source.text} ({m.source.kind})"]
        for m in SERIES_MEASURES.values()
    ]  # fmt: skip
    assert [row[0] for row in table(page, "behaviour")] == [f"`{b}`" for b in get_args(Behaviour)]
    text = " ".join(page.read_text(encoding="utf-8").split())
    assert f"{refinement.SOURCE.text} ({refinement.SOURCE.kind})" in text
    assert f"an order between {refinement.LOWEST:g} and {refinement.HIGHEST:g}" in text
    assert f"by less than a factor of {refinement.SMALL_RATIO:g}" in text


def test_the_table_of_an_envelope_names_what_is_written(desk: Path) -> None:
    rows = table(DOCS / "conventions.md", "array of an envelope")
    words = " ".join(row[0] for row in rows).replace("NAME", "principal_strain")
    documented = set(re.findall(r"`(\w+)`", words))
    assert {"principal_direction_1_at_maximum", "principal_direction_3_at_minimum"} <= documented
    documented |= {f"principal_direction_{k}_at_{end}" for k in (1, 2, 3) for end in ("maximum", "minimum")}
    assert run(spoken("unturn envelope lever.xdmf --measures principal_strain -o e.vtu"))[0] == 0
    written = set(unturn.read("e.vtu").cell_data) - set(unturn.read("lever.xdmf").cell_data)
    assert written == documented


def test_the_tables_of_finite_strains_are_the_codes() -> None:
    page = DOCS / "conventions.md"
    strains = table(page, "base", "array")
    assert [[row[0], row[1]] for row in strains] == [[f"`{_spoken(b)}`", f"`strain_{b}`"] for b in BASES]
    assert [f"`{choice}`" for choice in list(BaseChoice)[1:]] == [row[0] for row in strains]
    text = page.read_text(encoding="utf-8")
    named = {m.name: m for m in MEASURES.values() if m.finite and m.name.endswith(BASES)}
    described = set()
    for base, row in zip(BASES, strains):
        strain = named[f"strain_{base}"]
        assert row[2] == strain.meaning
        assert f"{strain.source.text} ({strain.source.kind})" in " ".join(text.split())
        described.add(strain.name)
        for array, components, meaning in table(page, "derived array"):
            measure = named[array.strip("`").replace("BASE", base)]
            assert [components, meaning.replace("STRAIN", row[2])] == [_components(measure), measure.meaning]
            described.add(measure.name)
    assert described == set(named)
    assert all(m.needs_third and m.unit in ("strain", "1") for m in named.values())


def _spoken(base: str) -> str:
    return base.replace("_", "-")


def test_the_table_of_imposed_fields_is_the_codes() -> None:
    expected = [
        [f"`{f.name}`", f.title, f"{f.source.text} ({f.source.kind})"] for f in imposed_fields(None, 1.0)
    ]
    assert table(DOCS / "patchtest.md", "field") == expected


def test_the_table_of_elements_is_the_codes() -> None:
    expected = [
        [f"`{e.name}`", str(e.dim), str(e.n_nodes), str(e.order), str(len(e.quadrature)), e.source.text]
        for e in ELEMENTS.values()
    ]
    assert table(DOCS / "conventions.md", "cell type", "dimension") == expected


def test_the_table_of_formats_is_the_codes() -> None:
    expected = [
        [
            f.name,
            " ".join(f"`{s}`" for s in f.suffixes),
            "yes" if f.write else "no",
            "yes" if f.write_series else "no",
        ]
        for f in FORMATS
        if _is_read(f)
    ]
    assert [row[:4] for row in table(DOCS / "formats.md", "format", "suffixes")] == expected


def _is_read(line: Format) -> bool:
    """Whether a format is read at all; some are known by name only, and refused with a reason."""
    try:
        line.open(Path("no-such-file" + line.suffixes[0]))
    except InputError as error:
        return "are not read" not in str(error)
    except OSError:
        return True
    return True


def test_the_tables_of_pictures_are_the_codes() -> None:
    page = DOCS / "pictures.md"
    assert table(page, "key of a picture") == [[f"`{k.name}`", k.meaning] for k in PICTURE_KEYS]
    assert table(page, "table of a plan") == [[f"`{k.name}`", k.meaning] for k in PLAN_KEYS]
    assert table(page, "key of `reading`") == [[f"`{k.name}`", k.meaning] for k in PLAN_READING_KEYS]


@pytest.mark.parametrize("page", EVERY_PAGE, ids=lambda p: p.name)
def test_every_link_leads_to_a_file(page: Path) -> None:
    for target in re.findall(r"\]\(([^)#]+)", page.read_text(encoding="utf-8")):
        assert target.startswith("https://") or (page.parent / target).exists(), f"{page.name}: {target}"


def test_the_picture_is_small() -> None:
    picture = DOCS / "images" / "bracket.png"
    assert 5_000 < picture.stat().st_size < 150_000
    assert "docs/images/bracket.png" in README.read_text(encoding="utf-8")


def test_the_version_has_an_entry_in_the_changelog() -> None:
    version = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]["version"]
    assert f"\n## {version}" in (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")


# --- the JSON schemas -------------------------------------------------------------------------------------------------

_KINDS: dict[str, tuple[type, ...]] = {
    "object": (dict,), "list": (list,), "string": (str,), "integer": (int,), "number": (int, float),
    "boolean": (bool,), "null": (type(None),),
}  # fmt: skip


def _paths(data: Any, documented: set[str], path: str = "") -> dict[str, list[Any]]:
    """Return every key of JSON data with its values; keys that the documents write in capitals stand for any key."""
    found: dict[str, list[Any]] = {}
    if isinstance(data, dict):
        free = [d for d in documented if re.fullmatch(re.escape(f"{path}.".lstrip(".")) + r"[A-Z]+", d)]
        for key, value in data.items():
            below = free[0] if free else f"{path}.{key}".lstrip(".")
            _merge(found, {below: [value]})
            _merge(found, _paths(value, documented, below))
    elif isinstance(data, list):
        for value in data:
            if isinstance(value, dict):
                _merge(found, _paths(value, documented, f"{path}[]"))
    return found


def _merge(into: dict[str, list[Any]], more: dict[str, list[Any]]) -> None:
    for key, values in more.items():
        into.setdefault(key, []).extend(values)


def _mixed_file(path: Path) -> None:
    """A tetrahedron, a triangle apart from it, a vertex that cannot be computed, a group and a NaN."""
    points = np.array([*np.eye(4, 3), [2, 0, 0], [3, 0, 0], [2, 1, 0.0]])
    cells = [("tetra", [[0, 1, 2, 3]], [0]), ("triangle", [[4, 5, 6]], [1]), ("vertex", [[0]], [2])]
    blocks = tuple(CellBlock(t, np.array(c), np.array(i)) for t, c, i in cells)
    noisy = np.array([np.nan, 1, 2, 3, 4, 5, 6])
    groups = {"body": np.array([0])}
    unturn.write(Result(points, blocks, {"u": 1e-3 * points, "noisy": noisy}, groups=groups), path)


def _check_schema(page: Path, produced: list[dict[str, Any]], *heading: str) -> None:
    rows = {row[0].strip("`"): row[1] for row in table(page, *(heading or ("key", "type")))}
    found: dict[str, list[Any]] = {}
    for data in produced:
        _merge(found, _paths(data, set(rows)))
    assert set(found) == set(rows), f"{page.name}: {sorted(set(found) ^ set(rows))}"
    for key, values in found.items():
        kinds = tuple(k for word in rows[key].split(" or ") for k in _KINDS[word])
        wrong = [v for v in values if not isinstance(v, kinds) or (isinstance(v, bool) and bool not in kinds)]
        assert not wrong, f"{page.name}: {key} is {wrong[0]!r}, documented as {rows[key]}"


def _json_of(command: str) -> Any:
    status, said = run([*spoken(command), "--json", "out.json"])
    assert status == 0, said
    return json.loads(Path("out.json").read_text(encoding="utf-8"))


def test_the_summary_schema_is_documented_key_by_key(desk: Path) -> None:
    _mixed_file(desk / "mixed.xdmf")
    commands = (
        "bracket.vtu --solve linear",
        "bracket.strain.vtu --prefix again_",
        "ring.vtu --plane strain",
        "ring.vtu --plane stress --poisson 0.38",
        "ring.vtu --measures strain",
        "skin.vtu --mode --measures all",
        "lever.xdmf",
        "lever.xdmf --solve nonlinear --base hencky",
        "lever.xdmf --remove-rigid regions --frame 'cylindrical z'",
        "mixed.xdmf",
        "bracket_tets.vtu --at nodes --prefix n_",
        "bracket.vtu --at surface",
        "bracket.vtu --measures strain,strain_error --prefix e_",
    )
    produced = [_json_of(f"unturn strain {c}") for c in commands]
    assert {d["schema"] for d in produced} == {"unturn.summary/1"}
    _check_schema(DOCS / "summary-json.md", produced)


def test_several_summaries_are_one_list(desk: Path) -> None:
    for command, n in (("bracket.vtu bracket_tets.vtu", 2), ("lever.xdmf --step all", 7)):
        data = _json_of(f"unturn strain {command}")
        assert set(data) == {"schema", "results", "failed"}
        assert data["failed"] == []
        assert data["schema"] == "unturn.summaries/1"
        assert len(data["results"]) == n
        assert {d["schema"] for d in data["results"]} == {"unturn.summary/1"}


def test_the_survey_schema_is_documented_key_by_key(desk: Path) -> None:
    _mixed_file(desk / "mixed.xdmf")
    names = ("bracket.vtu", "ring.vtu", "lever.xdmf", "mixed.xdmf")
    produced = [_json_of(f"unturn survey {name}") for name in names]
    no_displacement = Result(np.eye(4, 3), (CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0])),), {})
    unturn.write(no_displacement, desk / "bare.vtu")
    produced.append(_json_of("unturn survey bare.vtu"))
    _check_schema(DOCS / "survey-json.md", produced)


def test_the_pictures_schema_is_documented_key_by_key(desk: Path) -> None:
    small = "--size 480x480"
    commands = (
        f"bracket.vtu -o a.png --measure strain_XX --csv a.csv {small}",
        f"lever.xdmf -o b.png --solve nonlinear {small}",
        f"lever.xdmf -o c.gif --solve nonlinear {small}",
    )
    produced = [_json_of(f"unturn picture {c}") for c in commands]
    assert {d["schema"] for d in produced} == {"unturn.pictures/1"}
    _check_schema(DOCS / "pictures-json.md", produced)


def _loads(desk: Path) -> None:
    """Combinations of the bracket, and a file that cannot be read."""
    (desk / "loads.toml").write_text('[combinations.a]\nbracket = 1\n[combinations.b]\nbracket = "+-1.5"\n')
    (desk / "broken.vtu").write_text("<VTKFile")


def test_the_envelope_schema_is_documented_key_by_key(desk: Path) -> None:
    _mixed_file(desk / "mixed.xdmf")
    _loads(desk)
    commands = (
        "lever.xdmf --solve nonlinear --base hencky",
        "lever.xdmf --solve nonlinear --measures spin,accumulated_equivalent_strain -o spin.vtu",
        "bracket.vtu --combinations loads.toml --solve linear",
        "bracket.vtu --combinations loads.toml --solve linear --at nodes -o nodes.vtu",
        "ring.vtu ring.vtu --measures strain -o ring.out.vtu",
        "mixed.xdmf mixed.xdmf -o mixed.out.xdmf",
    )
    produced = [_json_of(f"unturn envelope {c}") for c in commands]
    status, said = run(spoken("unturn envelope bracket.vtu broken.vtu --keep-going --json failed.json"))
    assert status == InputError.exit_status, said
    produced.append(json.loads(Path("failed.json").read_text(encoding="utf-8")))
    assert {d["schema"] for d in produced} == {"unturn.envelope/1"}
    _check_schema(DOCS / "envelope-json.md", produced)


def _square(n: int, power: int) -> Result:
    """The unit square in n x n quads with u = (x^power, 0)."""
    x, y = (k.ravel() for k in np.meshgrid(np.linspace(0, 1, n + 1), np.linspace(0, 1, n + 1), indexing="ij"))
    number = np.arange((n + 1) ** 2).reshape(n + 1, n + 1)
    corners = number[:-1, :-1], number[1:, :-1], number[1:, 1:], number[:-1, 1:]
    cells = np.stack(corners, axis=-1).reshape(-1, 4)
    points = np.column_stack([x, y, 0 * x])
    u = 1e-3 * np.column_stack([x**power, 0 * x, 0 * x])
    return Result(points, (CellBlock("quad", cells, np.arange(n * n)),), {"u": u})


def test_the_convergence_schema_is_documented_key_by_key(desk: Path) -> None:
    for power in (1, 2):
        for n in (2, 4, 8):
            unturn.write(_square(n, power), desk / f"square_{power}_{n}.vtu")
    asked = " ".join(
        f"--quantity '{q}'"
        for q in (
            "peak strain_XX",
            "percentile 50 strain_XX",
            "value strain_XX at 0.3,0.3,0",
            "peak rotation_Z",
        )
    )
    produced = [
        _json_of(f"unturn convergence square_1_2.vtu square_1_4.vtu square_1_8.vtu {asked}"),
    ]
    meshes = "square_2_2.vtu square_2_4.vtu square_2_8.vtu"
    status, said = run(spoken(f"unturn convergence {meshes} {asked} --json study.json"))
    assert status == 1, said  # the value at a point oscillates
    produced.append(json.loads(Path("study.json").read_text(encoding="utf-8")))
    assert {d["schema"] for d in produced} == {"unturn.convergence/1"}
    _check_schema(DOCS / "convergence-json.md", produced)


def test_the_verdict_schema_is_documented_key_by_key(desk: Path) -> None:
    _mixed_file(desk / "mixed.xdmf")
    commands = (
        "bracket.vtu bracket_tets.vtu --measures strain",
        "lever.xdmf lever.xdmf --step all --measures strain",
        "mixed.xdmf mixed.xdmf",
        "bracket.vtu ring.vtu",
    )
    produced = []
    for command in commands:
        run([*spoken(f"unturn compare {command}"), "--json", "out.json"])
        produced.append(json.loads(Path("out.json").read_text(encoding="utf-8")))
    assert {d["schema"] for d in produced} == {"unturn.verdict/1"}
    details = [f.pop("details") for d in produced for f in d["findings"]]
    settings = {key for d in produced for key in d.pop("settings")}
    for finding in (f for d in produced for f in d["findings"]):
        finding["details"] = {}
    for data in produced:
        data["settings"] = {}
    page = DOCS / "verdict-json.md"
    _check_schema(page, produced)
    _check_schema(page, [d for d in details if "array" in d], "detail of `compare`", "type")
    text = page.read_text(encoding="utf-8")
    assert all(f"`{key}`" in text for key in settings)
    assert [row[0] for row in table(page, "state", "meaning")] == [f"`{s}`" for s in STATES]


def test_the_keys_of_tolerances_are_the_codes() -> None:
    page = DOCS / "compare.md"
    for heading, keys in (("key of the file", FILE_KEYS), ("key of an array", ARRAY_KEYS)):
        expected = [[f"`{k.name}`", k.kind.words, k.meaning] for k in keys]
        assert table(page, heading) == expected


def test_the_schema_of_an_installation_is_documented_key_by_key() -> None:
    def broken() -> list[Case]:
        raise OSError("no such library")

    sound = [c for c in FORMULAS if c.name in ("simple_shear", "refinement")]
    failed = Check("failed", "one is two", FORMULAS[0].source, lambda: [Case("one", math.inf, 0.0)])
    fault = Check("fault", "it cannot be run", FORMULAS[0].source, broken)
    data = record_data(check_installation("2026-12-31", [*sound, failed, fault]))
    _check_schema(DOCS / "installation-json.md", [json.loads(json.dumps(data, allow_nan=False))])


def test_the_keys_of_a_report_are_the_codes() -> None:
    assert table(DOCS / "report.md", "key of `report`") == [[f"`{k.name}`", k.meaning] for k in REPORT_KEYS]


def test_the_report_schema_is_documented_key_by_key(desk: Path) -> None:
    produced = []
    for job in ("bracket.vtu small.toml", "lever.xdmf lever.toml"):
        Path("lever.toml").write_text(_SMALL_PLAN.replace("linear", "nonlinear"), encoding="utf-8")
        Path("small.toml").write_text(
            _SMALL_PLAN
            + '[report]\nregions = ["part=1"]\nlimits = "bracket.limits.toml"\nreference = "bracket.vtu"\n',
            encoding="utf-8",
        )
        status, said = run(spoken(f"unturn report {job} -o out.json --format json"))
        assert status == 0, said
        data = json.loads(Path("out.json").read_text(encoding="utf-8"))
        assert data["summary"]["schema"] == "unturn.summary/1"
        nested = [data["limits"], (data["comparison"] or {}).get("findings")]
        assert {d["schema"] for d in nested if d} <= {"unturn.verdict/1"}
        for holder, key in ((data, "summary"), (data, "limits"), (data["comparison"] or {}, "findings")):
            holder[key] = holder.get(key) and {}  # documented on their own pages
        images = [*data["pictures"], *(data["comparison"] or {}).get("pictures", ())]
        for image in images:
            assert set(image.pop("drawn")) >= {"measure", "factor", "range"}
            image["drawn"] = {}
        produced.append(data)
    _check_schema(DOCS / "report-json.md", produced)


_SMALL_PLAN = """
schema = "unturn.plan/1"
[reading]
solve = "linear"
[defaults]
size = [480, 480]
[[pictures]]
name = "whole"
"""
