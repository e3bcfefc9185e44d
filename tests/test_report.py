"""Reports: what the page says is what the numbers are, it needs nothing else, and it is the same every time."""

from __future__ import annotations

import base64
import csv
import hashlib
import html.parser
import itertools
import json
import re
import shutil
import sys
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import unturn
from documents import ROOT, run
from limits_samples import row
from unturn.report.content import Curve, Series
from unturn.report.page import css_text
from unturn.report.plots import plot_series
from unturn.report.words import bound, outward, percent
from unturn.report_keys import REPORT_KEYS, ReportWish

pytestmark = pytest.mark.derived("what a report says is what the numbers are")

HOSTILE = "<script>alert(1)</script>\"'&\u202e"
PLAN = """schema = "unturn.plan/1"
title = "Row </style><b> of \\"bricks\\""
[report]
number = "N-1"
[reading]
solve = "linear"
[defaults]
size = [480, 480]
[[pictures]]
name = "whole"
"""
EQUIVALENT = 2.0 / 3.0  # of a pull along one axis alone: sqrt(2/3 (4/9 + 1/9 + 1/9))


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """A report with everything in it on a row of four bricks of known strain, as page and as data."""
    folder = tmp_path_factory.mktemp("report")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        write_row("row.xdmf", 1.0)
        write_row("old.xdmf", 0.5)
        Path("limits.toml").write_text(LIMITS.replace("REGION", "left"), encoding="utf-8")
        wish = '[report]\nlimits = "limits.toml"\nreference = "old.xdmf"\nregions = ["left"]\n'
        Path("plan.toml").write_text(PLAN.replace("[report]\n", wish), encoding="utf-8")
        call = ["report", "row.xdmf", "plan.toml", "--today", "2026-12-01"]
        Path("files").mkdir()
        status, said = run([*call, "-o", "page.html", "--folder", "files"])
        assert status == 1, said  # a limit is exceeded
        page = Path("page.html").read_text(encoding="utf-8")
        status, said = run([*call, "-o", "data.json", "--format", "json"])
        assert status == 1, said
        data = json.loads(Path("data.json").read_text(encoding="utf-8"))
    return {"page": page, "data": data, "folder": folder / "files", "seen": Page.of(page)}


LIMITS = """schema = "unturn.limits/1"
title = "pull"
number_of_limits = 2
[result]
[regions.left]
group = "REGION"
[[limits]]
id = "high"
measure = "equivalent_strain"
region = "left"
statistic = "maximum"
at_most = 600
unit = "microstrain"
reason = "r"
source = "s"
[[limits]]
id = "wide"
measure = "equivalent_strain"
region = "left"
statistic = "maximum"
at_most = 6000
unit = "microstrain"
accept = ["plus-minus", "singular"]
reason = "r"
source = "s"
"""


def write_row(path: str, factor: float) -> None:
    """Four bricks pulled by 1000, 500, 2000 and 100 microstrain times a factor, the first two the group ``left``."""
    bricks = row([factor * s for s in (1e-3, 5e-4, 2e-3, 1e-4)], element_number=[11, 12, 13, 14])
    groups = {"left": np.array([0, 1]), HOSTILE: np.array([2, 3])}
    result = unturn.Result(bricks.points, bricks.blocks, bricks.point_data, bricks.cell_data, groups=groups)
    unturn.write(result, path)


class Page(html.parser.HTMLParser):
    """A page as a reader and a browser see it: elements in order, each with its attributes and its text."""

    VOID = frozenset(("meta", "img", "br", "link", "hr", "input"))

    def __init__(self) -> None:
        super().__init__()
        self.found: list[tuple[str, dict[str, str | None], list[str]]] = []
        self.open: list[int] = []
        self.wrong: list[str] = []

    @classmethod
    def of(cls, text: str) -> Page:
        page = cls()
        page.feed(text)
        page.close()
        assert not page.wrong
        assert not page.open
        return page

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.found.append((tag, dict(attrs), []))
        if tag not in self.VOID:
            self.open.append(len(self.found) - 1)

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.found[self.open[-1]][0] != tag:
            self.wrong.append(f"</{tag}> at {self.getpos()}")
        else:
            self.open.pop()

    def handle_data(self, data: str) -> None:
        for k in self.open:
            self.found[k][2].append(data)

    def all(self, tag: str) -> list[tuple[dict[str, str | None], str]]:
        """Attributes and text of every element of a kind."""
        return [(attrs, " ".join("".join(text).split())) for name, attrs, text in self.found if name == tag]


def table_of(folder: Path, name: str) -> list[dict[str, str]]:
    with open(folder / f"table-{name}.csv", encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


# --- what it says -----------------------------------------------------------------------------------------------------


def test_extremes_are_those_of_the_bricks(made: dict[str, Any]) -> None:
    found = {e["label"]: e for e in made["data"]["extremes"]}
    assert found["largest principal"]["value"] == pytest.approx(1e-3)
    assert found["equivalent, largest"]["value"] == pytest.approx(1e-3 * EQUIVALENT)
    assert {e["region"] for e in found.values()} == {"left"}
    assert (found["largest principal"]["cell"], found["largest principal"]["element"]) == (0, 11)
    rows = {r["what"].removesuffix(" (suspected singular)"): r for r in table_of(made["folder"], "extremes")}
    assert float(rows["equivalent, largest"]["value"]) == pytest.approx(1e-3 * EQUIVALENT)
    assert rows["equivalent, largest"]["where"] == "element 11 (cell 0)"
    cells = [text for _, text in made["seen"].all("td")]
    assert "666.67" in cells  # 666.666... rounded up
    assert "element 11 (cell 0)" in cells


def test_what_is_not_reported_has_its_own_peak(made: dict[str, Any]) -> None:
    (beyond,) = made["data"]["beyond"]
    assert (beyond["cells"], beyond["cell"], beyond["element"], beyond["dimension"]) == (2, 2, 13, 3)
    assert beyond["value"] == pytest.approx(2e-3 * EQUIVALENT)
    assert any("1333.4" in text and "equivalent" in text for _, text in made["seen"].all("td"))


def test_cells_without_a_value_are_told_as_such(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    points = np.array([*np.eye(4, 3), [2, 0, 0], [3, 0, 0], [2, 1, 0.0]])
    cells = (("tetra", [[0, 1, 2, 3]]), ("triangle", [[4, 5, 6]]), ("vertex", [[0]]))
    blocks = tuple(unturn.CellBlock(t, np.array(c), np.array([k])) for k, (t, c) in enumerate(cells))
    u = 1e-3 * points
    u[5] = np.nan
    unturn.write(unturn.Result(points, blocks, {"u": u}), "gap.vtu")
    Path("plan.toml").write_text(PLAN, encoding="utf-8")
    status, said = run(["report", "gap.vtu", "plan.toml", "-o", "r.html", "--folder", "."])
    assert status == 0, said
    why = {r["why"]: r["first of them"] for r in table_of(tmp_path, "left-out")}
    assert why["displacement not finite"] == "cell 1"
    assert not Path("table-beyond.csv").exists()  # the triangle has no value that could be told


def test_limits_are_told_with_value_bound_and_verdict(made: dict[str, Any]) -> None:
    rows = {r["limit"]: r for r in table_of(made["folder"], "limits")}
    assert (rows["high"]["verdict"], rows["wide"]["verdict"]) == ("exceeded", "met")
    assert rows["high"]["bound"] == "at most 600"
    assert float(rows["high"]["value"]) == pytest.approx(1000 * EQUIVALENT)
    assert made["data"]["limits"]["passed"] is False
    assert made["data"]["passed"] is False
    assert any("not all met" in text for _, text in made["seen"].all("dd"))
    assert ({"class": "bad", "scope": "row"}, "exceeded") in made["seen"].all("th")


def test_the_comparison_tells_a_doubled_strain_as_such(made: dict[str, Any]) -> None:
    versus = made["data"]["comparison"]
    for pair in versus["extremes"]:
        if pair["reference"]["value"] and pair["this"]["array"] != "angle_of_turn":
            assert pair["this"]["value"] == pytest.approx(2 * pair["reference"]["value"])
    rows = {r["what"]: r for r in table_of(made["folder"], "change")}
    assert float(rows["equivalent, largest"]["change"]) == pytest.approx(5e-4 * EQUIVALENT)
    assert any(text == "+100 %" for _, text in made["seen"].all("td"))
    new, old, difference = (p["drawn"] for p in versus["pictures"])
    assert new["range"] == old["range"]  # one colour range
    assert new["factor"] == old["factor"]
    assert new["camera"] == old["camera"] == difference["camera"]
    assert difference["extremes"][0]["value"] == pytest.approx(
        1e-3 * EQUIVALENT
    )  # of the brick pulled by 2000
    assert difference["range"][0] == -difference["range"][1]
    assert not versus["judged"]


def test_files_are_told_with_their_hashes(made: dict[str, Any]) -> None:
    desk = made["folder"].parent
    roles = {f["role"]: f for f in made["data"]["files"]}
    assert set(roles) == {"result", "result data", "plan", "limits", "reference", "reference data"}
    for file in roles.values():
        raw = (desk / Path(file["path"]).name).read_bytes()
        assert (file["sha256"], file["size"]) == (hashlib.sha256(raw).hexdigest(), len(raw))
        assert file["sha256"] in made["page"]


def test_a_reference_is_judged_where_tolerances_are_stated(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    write_row("old.xdmf", 0.999)
    for share, status in ((0.01, 0), (1e-4, 1)):
        Path("t.toml").write_text(
            f'schema = "unturn.tolerances/1"\n[default]\nrelative = {share}\n', encoding="utf-8"
        )
        wish = '[report]\nreference = "old.xdmf"\ntolerances = "t.toml"\n'
        Path("plan.toml").write_text(PLAN.replace("[report]\n", wish), encoding="utf-8")
        found, said = run(["report", "row.xdmf", "plan.toml", "-o", "r.json", "--format", "json"])
        assert found == status, said
        assert json.loads(Path("r.json").read_text())["comparison"]["findings"]["passed"] is (status == 0)


def test_a_series_is_told_step_by_step(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("lever.xdmf", "lever.h5"):
        shutil.copy(ROOT / "sample_meshes" / name, tmp_path)
    monkeypatch.chdir(tmp_path)
    Path("plan.toml").write_text(PLAN.replace("linear", "nonlinear"), encoding="utf-8")
    status, said = run(
        ["report", "lever.xdmf", "plan.toml", "-o", "r.json", "--format", "json", "--folder", "."]
    )
    assert status == 0, said
    data = json.loads(Path("r.json").read_text(encoding="utf-8"))
    last = {(e["region"], e["array"], e["extreme"]): e["value"] for e in data["extremes"]}
    assert len(data["series"]["steps"]) == 7
    for curve in data["series"]["curves"]:
        assert curve["values"][-1] == pytest.approx(last[curve["region"], curve["array"], curve["extreme"]])
    middle = unturn.strain(unturn.read("lever.xdmf", 3), measures=["equivalent_strain"])
    part = middle.cell_data["part"] == 1
    curve = next(
        c for c in data["series"]["curves"] if c["array"] == "equivalent_strain" and c["region"] == "part=1"
    )
    assert curve["values"][3] == pytest.approx(middle.cell_data["equivalent_strain"][part].max())
    for plot in data["series"]["plots"]:
        tree = ElementTree.parse(Path(f"{plot['name']}.svg"))
        assert tree.getroot().tag.endswith("svg")
        links = [v for e in tree.iter() for k, v in e.attrib.items() if k.endswith("href")]
        assert all(link.startswith("#") for link in links)  # nothing from elsewhere


# --- rounding ---------------------------------------------------------------------------------------------------------

_VALUES = st.floats(-1e3, 1e3, allow_nan=False).filter(lambda x: x == 0 or abs(x) > 1e-10)


@given(_VALUES)
def test_no_rounding_makes_an_extreme_smaller_than_it_is(value: float) -> None:
    # fifteen digits are kept through the change of unit; the sixth and further are rounded outwards
    slack = 1e-14 * abs(value) * 1e6
    assert float(outward(value, "maximum", "strain")) >= value * 1e6 - slack
    assert float(outward(value, "minimum", "strain")) <= value * 1e6 + slack
    assert float(outward(value, "maximum", "strain")) == pytest.approx(value * 1e6, rel=1e-4)
    assert float(bound(abs(value), "strain")) >= abs(value) * 1e6 * (1 - 1e-14)
    assert float(percent(abs(value)).removesuffix(" %")) >= abs(value) * 100 * (1 - 1e-14)


def test_a_value_of_a_limit_shows_its_side(made: dict[str, Any]) -> None:
    for f in made["data"]["limits"]["findings"]:
        if f["id"] == "high":
            shown = next(t for _, t in made["seen"].all("td") if t.startswith("666.6") and "±" in t)
            assert float(shown.split()[0]) >= f["value"]


# --- one file that needs nothing else ---------------------------------------------------------------------------------


def test_nothing_comes_from_elsewhere_and_nothing_runs(made: dict[str, Any]) -> None:
    seen = made["seen"]
    assert not {tag for tag, _, _ in seen.found} & {
        "script",
        "link",
        "iframe",
        "object",
        "embed",
        "form",
        "base",
    }
    for tag, attrs, _ in seen.found:
        assert not [a for a in attrs if a.startswith("on")], tag
        for name in ("src", "href", "srcset", "action", "background"):
            value = attrs.get(name)
            assert value is None or value.startswith(("data:image/", "#")), f"{tag} {name}={value!r}"
    (style,) = ["".join(text) for tag, _, text in seen.found if tag == "style"]
    assert "@import" not in style
    assert "url(" not in style
    policy = next(
        a["content"] for a, _ in seen.all("meta") if a.get("http-equiv") == "Content-Security-Policy"
    )
    assert policy == "default-src 'none'; img-src data:; style-src 'unsafe-inline'"


def test_names_of_a_file_are_no_markup(made: dict[str, Any]) -> None:
    assert "alert(1)" not in "".join(str(a) for _, a, _ in made["seen"].found)
    assert "<script" not in made["page"]
    assert "\u202e" not in made["page"]
    (heading,) = made["seen"].all("h1")
    assert heading[1] == 'Row </style><b> of "bricks"'
    (style,) = [text for tag, _, text in made["seen"].found if tag == "style"]
    assert "N\\2d 1" in "".join(style)


def test_images_are_inside_and_those_of_the_folder(made: dict[str, Any]) -> None:
    images = made["seen"].all("img")
    held = [base64.b64decode(a["src"].split(",", 1)[1]) for a, _ in images]
    names = [i["name"] for i in (*made["data"]["pictures"], *made["data"]["comparison"]["pictures"])]
    assert len(held) == len(names) == 4
    for raw, name in zip(held, names):
        assert raw == (made["folder"] / f"{name}.png").read_bytes()
        assert raw.startswith(b"\x89PNG")


@pytest.mark.source("CSS Syntax Module Level 3, 4.3.5 and 4.3.7: strings and escapes")
@given(st.text())
def test_any_text_stays_in_its_string_of_the_style_sheet(text: str) -> None:
    held = css_text(text)
    assert re.fullmatch(r"(?:[A-Za-z0-9]|\\[0-9a-f]{1,6} )*", held)
    read = re.sub(r"\\([0-9a-f]+) ", lambda m: chr(int(m[1], 16)), held)
    assert read.isprintable() or any(not c.isprintable() for c in text)


def test_the_same_input_gives_the_same_bytes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    Path("plan.toml").write_text(PLAN, encoding="utf-8")
    pages = []
    for day in ("2026-12-01", "2026-12-01", "2027-03-31"):
        status, said = run(["report", "row.xdmf", "plan.toml", "-o", "r.html", "--today", day])
        assert status == 0, said
        pages.append(Path("r.html").read_text(encoding="utf-8"))
    assert pages[0] == pages[1]
    assert pages[0] == pages[2].replace("2027-03-31", "2026-12-01")
    assert pages[0] != pages[2]


# --- who reads it -----------------------------------------------------------------------------------------------------


@pytest.mark.source("Web Content Accessibility Guidelines 2.2: 1.1.1, 1.3.1, 2.4.1, 2.4.2, 2.4.6, 3.1.1")
def test_the_page_can_be_read_without_seeing_it(made: dict[str, Any]) -> None:
    seen = made["seen"]
    assert seen.all("html")[0][0] == {"lang": "en"}
    assert seen.all("title")[0][1]
    assert all(len(seen.all(tag)) == 1 for tag in ("header", "nav", "main", "footer", "h1"))
    levels = [int(tag[1]) for tag, _, _ in seen.found if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))
    ids = [a["id"] for _, a, _ in seen.found if "id" in a]
    assert len(ids) == len(set(ids))
    for _, attrs, _ in seen.found:
        for name in (attrs.get("aria-labelledby"), (attrs.get("href") or "").removeprefix("#")):
            assert not name or name in ids
    for attrs, _ in seen.all("img"):
        assert len(re.findall(r"\d", attrs["alt"] or "")) > 6  # the numbers that it shows
    for attrs, text in seen.all("th"):
        assert attrs["scope"] in ("row", "col"), text
    assert len(seen.all("caption")) == len(seen.all("table"))
    assert all(text for _, text in seen.all("caption"))
    assert all(a["tabindex"] == "0" for a, _ in seen.all("div") if a.get("role") == "region")


@pytest.mark.source(
    "Web Content Accessibility Guidelines 2.2: 1.4.3, contrast ratio of at least 4.5 for text"
)
def test_every_colour_of_text_stands_out_from_white(made: dict[str, Any]) -> None:
    colours = set(re.findall(r"[{; ]color: (#[0-9a-f]{6})", made["page"]))
    assert len(colours) >= 4
    for colour in colours:
        linear = []
        for k in (1, 3, 5):
            c = int(colour[k : k + 2], 16) / 255
            linear.append(c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4)
        luminance = 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
        assert 1.05 / (luminance + 0.05) >= 4.5, colour


def test_a_verdict_is_told_by_a_sign_and_a_word_not_by_colour_alone(made: dict[str, Any]) -> None:
    for tone in ("good", "open", "bad"):
        assert re.search(rf"td\.{tone}::before[^}}]*content", made["page"])


@pytest.mark.source("HTML Living Standard, as the parser of html5lib holds a page against it")
def test_the_page_is_valid_html(made: dict[str, Any]) -> None:
    html5lib = pytest.importorskip("html5lib")
    parser = html5lib.HTMLParser(strict=True, namespaceHTMLElements=False)
    tree = parser.parse(made["page"])
    assert len(list(tree.iter("h2"))) == len(made["seen"].all("h2")) > 6


def test_the_title_block_can_be_signed(made: dict[str, Any]) -> None:
    rows = [text for attrs, text in made["seen"].all("th") if attrs["scope"] == "row"]
    assert rows[:3] == ["Prepared", "Checked", "Approved"]
    assert "N-1" in [text for _, text in made["seen"].all("dd")]


# --- plans ------------------------------------------------------------------------------------------------------------


def test_keys_and_fields_are_the_same() -> None:
    assert {k.name: k.default for k in REPORT_KEYS} == vars(ReportWish())


def test_the_plan_that_is_made_makes_the_same_report(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    call = ["report", "row.xdmf", "-o", "r.json", "--format", "json"]
    status, said = run([*call, "--solve", "linear", "--write-plan", "plan.toml", "--displacement", "u"])
    assert status == 0, said
    first = json.loads(Path("r.json").read_text(encoding="utf-8"))
    status, said = run([*call, "plan.toml"])
    assert status == 0, said
    second = json.loads(Path("r.json").read_text(encoding="utf-8"))
    for key in ("title", "extremes", "pictures", "summary"):
        assert first[key] == second[key]


@pytest.mark.parametrize(
    ("old", "new", "status", "words"),
    [
        ('number = "N-1"', 'numbr = "N-1"', 2, ("plan.toml, line 4", "Did you mean 'number'?")),
        ('number = "N-1"', "number = 1", 2, ("plan.toml, line 4", "report.number")),
        ('number = "N-1"', 'side_by_side = ["hole"]', 2, ("line 4", "Did you mean 'whole'?")),
        ('number = "N-1"', 'at = "quadrature"', 2, ("line 4", "report.at")),
        ('number = "N-1"', 'regions = ["lift"]', 2, ("'lift'", "Did you mean 'left'?")),
        ('number = "N-1"', 'limits = "none.toml"', 2, ("none.toml",)),
        ('number = "N-1"', 'reference = "none.vtu"', 3, ("none.vtu",)),
        ('solve = "linear"', "zero_step = 3", 2, ("zero_step 3",)),
        ("[report]", "[raport]", 2, ("line 3", "Did you mean 'report'?")),
        ('name = "whole"', 'name = "whole"\nmeasure = "strain_UV"', 2, ("plan.toml, line 9", "'UV'")),
    ],
)
def test_a_plan_with_an_error_says_where(
    old: str, new: str, status: int, words: tuple[str, ...], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    Path("plan.toml").write_text(PLAN.replace(old, new), encoding="utf-8")
    found, said = run(["report", "row.xdmf", "plan.toml"])
    assert found == status, said
    assert all(word in said for word in words), said
    assert "Traceback" not in said
    assert not Path("row.report.html").exists()


def test_options_that_a_plan_decides_are_refused_beside_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    Path("plan.toml").write_text(PLAN, encoding="utf-8")
    for options, word in (
        (["--solve", "linear"], "solve of [reading]"),
        (["--at", "nodes"], "at of [report]"),
        (["--zero-step", "0"], "zero_step of [reading]"),
        (["--write-plan", "p.toml"], "--write-plan"),
        (["--folder", "none"], "existing folder"),
        (["-o", "plan.toml"], "input file"),
        (["--today", "soon"], "no date"),
        (["--step", "all"], "--step 'all'"),
    ):
        status, said = run(["report", "row.xdmf", "plan.toml", *options])
        assert status == 2, said
        assert word in said, said
    status, said = run(["report", "row.xdmf", "--at", "quadrature"])
    assert status == 2, said


def test_an_image_never_replaces_an_input(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    shutil.move("row.xdmf", "table-files.csv")  # one of the names that the folder gets
    Path("plan.toml").write_text(PLAN, encoding="utf-8")
    before = Path("table-files.csv").read_bytes()
    status, _ = run(["report", "table-files.csv", "plan.toml", "-o", "r.html", "--folder", "."])
    assert status in (2, 3)
    assert Path("table-files.csv").read_bytes() == before


def test_two_files_of_a_folder_never_have_one_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    named = PLAN.replace('"whole"', '"Table-Extremes"\ncsv = true')
    Path("plan.toml").write_text(named, encoding="utf-8")
    status, said = run(["report", "row.xdmf", "plan.toml", "-o", "r.html", "--folder", "."])
    assert status == 2
    assert "table-extremes.csv" in said


def test_no_settings_of_a_user_change_a_plot() -> None:
    import matplotlib as mpl

    curves = (Curve("a $x$ \u4e2d", "largest", "strain_XX", "maximum", "strain", (0.0, 1e-3)),)
    series = Series((0, 1), (0.0, 1.0), curves)
    first = plot_series(series)
    with mpl.rc_context({"lines.linewidth": 9.0, "font.size": 30.0, "axes.facecolor": "red"}):
        second = plot_series(series)
    assert first[0].image == second[0].image


@pytest.mark.parametrize(("module", "kind"), [("jinja2", "html"), ("matplotlib", "json")])
def test_a_missing_library_is_named_with_its_command(
    module: str, kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in ("lever.xdmf", "lever.h5"):
        shutil.copy(ROOT / "sample_meshes" / name, tmp_path)
    monkeypatch.chdir(tmp_path)
    Path("plan.toml").write_text(PLAN, encoding="utf-8")
    monkeypatch.setitem(sys.modules, module, None)
    status, said = run(["report", "lever.xdmf", "plan.toml", "--format", kind])
    assert status == 2, said
    assert "pip install 'unturn[report]'" in said


@pytest.mark.parametrize("at", ["mean", "nodes", "surface"])
def test_values_elsewhere_are_told_beside_those_of_cells(
    at: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_row("row.xdmf", 1.0)
    Path("plan.toml").write_text(PLAN.replace("[report]", f'[report]\nat = "{at}"'), encoding="utf-8")
    status, said = run(["report", "row.xdmf", "plan.toml", "-o", "r.html", "--folder", "."])
    assert status == 0, said
    found = Path("table-elsewhere.csv")
    assert found.exists() is (at != "mean")
    if found.exists():
        assert max(float(r["value"]) for r in table_of(tmp_path, "elsewhere")) >= 2e-3 * EQUIVALENT


def test_the_sample_report_is_small_enough_to_be_sent(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for sample in (ROOT / "sample_meshes").glob("bracket*"):
        shutil.copy(sample, tmp_path)
    monkeypatch.chdir(tmp_path)
    status, said = run(["report", "bracket.vtu", "bracket.report.toml"])
    assert status == 0, said
    assert 300_000 < Path("bracket.report.html").stat().st_size < 5_000_000
    page = Page.of(Path("bracket.report.html").read_text(encoding="utf-8"))
    text = page.all("main")[0][1]
    assert "invented" in page.all("header")[0][1]
    assert all(word in text for word in ("foot_away", "bracket_tets.vtu", "met, or waived"))
