"""The pages on limits files and build servers say what the code does."""

from __future__ import annotations

import json
import re
import shutil
import stat
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any, get_args

import pytest

from documents import ROOT, run, table
from unturn.errors import UnturnError
from unturn.toml_kinds import REQUIRED, Key
from unturn.verdicts.finding import STATES
from unturn.verdicts.limit import Accepted
from unturn.verdicts.limit_keys import ACCEPTED, LIMIT_KEYS, WAIVER_KEYS
from unturn.verdicts.read_limits import FILE_KEYS, READING_KEYS, RESULT_KEYS
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.units import UNITS
from unturn.written_regions.read import REGION_KEYS

PAGE, SERVER, JSON = (ROOT / "docs" / name for name in ("limits.md", "build-server.md", "check-json.md"))

pytestmark = pytest.mark.derived("the documents and the code say the same")


@pytest.mark.parametrize(
    ("heading", "keys"),
    [
        ("key of the file", FILE_KEYS),
        ("key of `[result]`", RESULT_KEYS),
        ("key of `[reading]`", READING_KEYS),
        ("key of `[regions.NAME]`", REGION_KEYS),
        ("key of `[[limits]]`", LIMIT_KEYS),
        ("key of `waiver`", WAIVER_KEYS),
    ],
)
def test_every_key_is_documented(heading: str, keys: Sequence[Key]) -> None:
    expected = [
        [f"`{k.name}`", k.kind.words, "yes" if k.default is REQUIRED else "no", k.meaning] for k in keys
    ]
    assert table(PAGE, heading) == expected


def test_every_statistic_unit_state_and_consent_is_documented() -> None:
    rows = table(PAGE, "statistic")
    assert [(r[0], r[1]) for r in rows] == [(f"`{s.name}`", s.meaning) for s in STATISTICS.values()]
    assert [r[4] == "undecided" for r in rows] == [s.extreme for s in STATISTICS.values()]
    assert table(PAGE, "unit") == [[f"`{u.name}`", u.quantity] for u in UNITS.values()]
    assert {r[0] for r in table(PAGE, "state")} == {f"`{s}`" for s in STATES}
    assert [r[0] for r in table(PAGE, "what may be accepted")] == [f"`{a}`" for a in ACCEPTED]
    assert set(get_args(Accepted)) == set(ACCEPTED)


def test_every_exit_status_is_documented() -> None:
    statuses = {0, 1} | {e.exit_status for e in (UnturnError, *UnturnError.__subclasses__())}
    assert {int(row[0]) for row in table(SERVER, "status of `check`")} == statuses


def _kinds(words: str) -> tuple[type, ...]:
    kinds = {"string": (str,), "integer": (int,), "number": (int, float), "object": (dict,), "list": (list,),
             "null": (type(None),)}  # fmt: skip
    return tuple(k for word in words.split(" or ") for k in kinds[word])


def _keys(data: dict[str, Any], path: str = "") -> dict[str, list[Any]]:
    found: dict[str, list[Any]] = {}
    for key, value in data.items():
        found.setdefault(path + key, []).append(value)
        inner = [(f"{path}{key}.", value)] if isinstance(value, dict) and key != "place" else []
        if isinstance(value, list):
            inner = [(f"{path}{key}[].", v) for v in value if isinstance(v, dict)]
        for below, part in inner:
            for name, values in _keys(part, below).items():
                found.setdefault(name, []).extend(values)
    return found


def test_the_json_is_documented_key_by_key(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    for name in ("bracket.vtu", "bracket.limits.toml"):
        shutil.copy(ROOT / "sample_meshes" / name, tmp_path)
    status, said = run(
        ["check", "bracket.vtu", "bracket.limits.toml", "--json", "o.json", "--today", "2026-12-01"]
    )
    assert status == 0, said
    data = json.loads(Path("o.json").read_text(encoding="utf-8"))
    details: dict[str, list[Any]] = {}
    for finding in data["findings"]:
        if finding["id"].startswith("result/"):
            assert set(finding["details"]) == {"required"}
            continue
        for key, values in _keys(finding["details"]).items():
            details.setdefault(key, []).extend(values)
    settings = {key: [value] for key, value in data["settings"].items()}
    for heading, found in (("key of `details`", details), ("key of `settings`", settings)):
        rows = {row[0].strip("`"): row[1] for row in table(JSON, heading)}
        assert set(found) == set(rows), sorted(set(found) ^ set(rows))
        for key, values in found.items():
            wrong = [v for v in values if not isinstance(v, _kinds(rows[key]))]
            assert not wrong, f"{key} is {wrong[0]!r}, documented as {rows[key]}"


@pytest.mark.skipif(sys.platform == "win32", reason="the step is for a POSIX shell")
@pytest.mark.parametrize(
    ("change", "status", "said"),
    [
        (("", ""), 0, "every limit is met"),
        (("at_most = 0.75\nwarn_above = 0.6", "at_most = 0.5"), 1, "a limit is exceeded"),
        (("at_most = 0.75", "at_mots = 0.75"), 2, "nothing was tested"),
        (None, 3, "a result cannot be used"),
    ],
)
def test_the_step_of_a_pipeline_runs(
    tmp_path: Path, change: tuple[str, str] | None, status: int, said: str
) -> None:
    """The indented script of the page, with the program of this process's own Python in the path."""
    text = SERVER.read_text(encoding="utf-8")
    script = "\n".join(line[4:] for line in re.findall(r"^    .*$", text, re.MULTILINE))
    assert script.startswith("set -u")
    (tmp_path / "results").mkdir()
    shutil.copy(ROOT / "sample_meshes" / "bracket.vtu", tmp_path / "results")
    limits = (ROOT / "sample_meshes" / "bracket.limits.toml").read_text(encoding="utf-8")
    if change is None:
        (tmp_path / "results" / "bracket.vtu").write_text("<VTKFile")
    else:
        assert change[0] in limits
        limits = limits.replace(*change)
    (tmp_path / "limits.toml").write_text(limits, encoding="utf-8")
    program = tmp_path / "bin" / "unturn"
    program.parent.mkdir()
    source = ROOT / "src"
    program.write_text(
        f"#!{sys.executable}\nimport sys\nsys.path.insert(0, {str(source)!r})\nfrom unturn.cli import main\nmain()\n"
    )
    program.chmod(program.stat().st_mode | stat.S_IXUSR)
    done = subprocess.run(
        ["sh", "-c", script], cwd=tmp_path, capture_output=True, text=True, timeout=120, check=False,
        env={"PATH": f"{program.parent}:/usr/bin:/bin"},
    )  # fmt: skip
    assert done.returncode == status, done.stdout + done.stderr
    assert said in done.stdout
    assert (tmp_path / "verdicts.xml").exists() is (status != 2)
