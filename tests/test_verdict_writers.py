"""Findings and what is written of them: no rounding hides a side, no name breaks a form, same input, same bytes."""

from __future__ import annotations

import csv
import hashlib
import io
import itertools
import json
import math
from decimal import Decimal
from pathlib import Path

import junitparser
import pytest
from hypothesis import given
from hypothesis import strategies as st
from lxml import etree
from markdown_it import MarkdownIt

from unturn.errors import InputError, UnturnError, UsageError
from unturn.verdicts.finding import WORST_FIRST, Finding, InputFile, Report, hashed_file
from unturn.verdicts.wording import (
    bound_text,
    clean,
    margin_text,
    measured_text,
    number,
    place_text,
    value_text,
)
from unturn.verdicts.writers import (
    CSV_COLUMNS,
    WRITERS,
    csv_report,
    json_report,
    junit_report,
    markdown_report,
    text_report,
)

# The XML schema of the JUnit results that build servers read, by Gregory Boissinot, MIT licence (in the file).
SCHEMA = etree.XMLSchema(etree.parse(Path(__file__).parent / "schemas" / "junit-10.xsd"))
HOSTILE = "a|b <script>`x` *y* @all [l](http://z) \x00\x1b\r\n\ud800\u202e\ufffe &amp; $1$ ~~s~~ _u_ \\"


def finding(name: str = "peak", **other: object) -> Finding:
    given_: dict[str, object] = {
        "group": "foot.vtu", "title": "equivalent strain, largest in casting", "state": "met", "value": 870.0,
        "bound": 1000.0, "unit": "microstrain", "place": {"cell": 7, "element": 8, "at": (0.0, 1.0, 0.5), "step": 2},
    }  # fmt: skip
    return Finding(name, **{**given_, **other})  # type: ignore[arg-type]


def every_state(allow: bool = False, text: str = "x") -> Report:
    found = (
        finding("met"), finding("warning", state="warning", message="above 800"),
        finding("undecided", state="undecided", plus_minus=200.0, message="the plus/minus reaches across"),
        finding("exceeded", state="exceeded", value=1000.0004),
        finding("waived", state="waived", value=1200.0),
        finding("error", state="error", value=None, place={}, message=f"no region {text!r}"),
        finding(text, title=text, group=text + ".vtu", message=text, unit=text, state="exceeded", value=3e3),
    )  # fmt: skip
    return Report("check", found, (InputFile("result", text, "ab" * 32),), allow, (text,))


# --- findings ---------------------------------------------------------------------------------------------------------


@pytest.mark.derived("beyond its bound nothing is met")
@pytest.mark.parametrize("bound", [1000.0, (None, 1000.0), (0.0, 1000.0), (1200.0, None), (1200.0, 1300.0)])
@pytest.mark.parametrize("state", ["met", "warning"])
def test_a_finding_cannot_say_met_of_a_value_beyond_its_bound(bound: object, state: str) -> None:
    with pytest.raises(UnturnError, match="not within"):
        finding(state=state, value=1100.0, bound=bound)
    with pytest.raises(UnturnError, match="not within"):
        finding(state=state, value=math.nan, bound=bound)
    assert finding(state="exceeded", value=1100.0, bound=bound).margin == -100.0


@pytest.mark.derived("the margin is what is left up to the nearer bound")
def test_the_margin_is_that_to_the_nearer_bound() -> None:
    assert finding(value=990.0, bound=(0.0, 1000.0)).margin == 10.0
    assert finding(value=3.0, bound=(0.0, 1000.0)).margin == 3.0
    assert finding(value=3.0, bound=(1.0, None)).margin == 2.0
    assert finding(value=3.0, bound=None).margin is None
    assert finding(value=990.0, margin=4.0).margin == 4.0


@pytest.mark.derived("an empty list of tests is no passed test; ids are unique")
def test_a_report_of_nothing_or_of_the_same_twice_is_refused() -> None:
    with pytest.raises(UsageError, match="nothing was tested"):
        Report("check", ())
    with pytest.raises(UnturnError, match="'peak'"):
        Report("check", (finding(), finding()))
    with pytest.raises(UnturnError, match="no state"):
        finding(state="fine")
    assert Report("check", (finding(), finding(group="other.vtu"))).exit_status == 0


@pytest.mark.derived("exit status 1: exceeded, undecided or error")
@pytest.mark.parametrize("allow", [False, True])
@pytest.mark.parametrize("state", WORST_FIRST)
def test_the_exit_status_follows_the_states(state: str, allow: bool) -> None:
    report = Report("check", (finding("a"), finding("b", state=state)), allow_undecided=allow)
    fails = state in ("error", "exceeded") or (state == "undecided" and not allow)
    assert report.exit_status == fails
    assert ("NOT PASSED" in text_report(report)) is fails
    assert json_report(report)["passed"] is not fails


@pytest.mark.source("SHA-256 of the Python standard library over the whole of the file")
def test_input_files_are_named_with_their_hash(tmp_path: Path) -> None:
    path = tmp_path / "a"
    path.write_bytes(b"x" * 3_000_000)
    assert hashed_file("result", path).sha256 == hashlib.sha256(b"x" * 3_000_000).hexdigest()
    for bad in (tmp_path, tmp_path / "none", "a\0b"):
        with pytest.raises(InputError):
            hashed_file("result", bad)


# --- numbers and names ------------------------------------------------------------------------------------------------

FINITE = st.floats(allow_nan=False, allow_infinity=False)


def _sides(value: Decimal, *bounds: Decimal) -> list[int]:
    return [int(value.compare(b)) for b in bounds]


@pytest.mark.derived("the printed value is on the side of the true one, and never nearer to met than it")
@given(FINITE, FINITE)
def test_rounding_for_print_never_goes_towards_met(value: float, bound: float) -> None:
    exact, at = Decimal(repr(value)), Decimal(bound_text(finding(state="exceeded", bound=bound)).split()[-1])
    assert float(at) == bound
    high, low = Decimal(value_text(value, high=bound)), Decimal(value_text(value, low=bound))
    assert high >= exact >= low
    assert _sides(high, at) == _sides(low, at) == _sides(exact, at)
    margin = finding(state="exceeded", value=value, bound=bound).margin
    shown = margin_text(finding(state="exceeded", value=value, bound=bound))
    assert math.isinf(margin or 0.0) or (
        Decimal(shown) <= Decimal(repr(margin)) and (shown == "0") == (margin == 0)
    )


@pytest.mark.derived("the same with two bounds: away from met is towards the nearer one, and beyond it")
@given(FINITE, FINITE, FINITE)
def test_rounding_for_print_keeps_the_side_of_both_bounds(value: float, a: float, b: float) -> None:
    low, high = min(a, b), max(a, b)
    exact, ends = Decimal(repr(value)), (Decimal(repr(low)), Decimal(repr(high)))
    shown = Decimal(value_text(value, low, high))
    assert _sides(shown, *ends) == _sides(exact, *ends)
    assert min(shown - ends[0], ends[1] - shown) <= min(exact - ends[0], ends[1] - exact)


@pytest.mark.derived("the example of the rule: 1000.4 against 1000")
def test_more_digits_are_printed_until_the_side_shows() -> None:
    shown = finding(state="exceeded", value=1000.0004)
    assert (measured_text(shown), bound_text(shown), margin_text(shown)) == (
        "1000.1",
        "at most 1000",
        "-0.000401",
    )
    assert value_text(999.9999999, high=1000.0) == "999.9999999"
    assert value_text(1000.4, high=1000.0) == "1000.4"
    assert value_text(1000.0, high=1000.0) == "1000"
    assert value_text(0.1 + 0.2, high=0.3) == "0.30001"
    assert value_text(2.00004, low=2.0) == "2.00004"
    assert value_text(1.99996, low=2.0) == "1.9999"
    assert measured_text(finding(plus_minus=12.31)) == "870 +-12.4"


@pytest.mark.derived("what is no number is said so")
def test_what_is_no_number_is_printed_as_that() -> None:
    assert [number(x) for x in (math.nan, math.inf, -math.inf, None, -0.0)] == ["nan", "inf", "-inf", "", "0"]
    assert bound_text(finding(bound=None)) == ""
    assert place_text({}) == ""
    assert place_text({"point": 3, "node": None, "time": 0.25}) == "point 3; (t = 0.25)"


@pytest.mark.source("XML 1.0, production 2: the characters of a document")
@given(st.text(st.characters(exclude_categories=())))
def test_every_cleaned_text_is_one_line_of_xml(text: str) -> None:
    shown = clean(text)
    root = etree.Element("a")
    root.text = shown
    assert etree.fromstring(etree.tostring(root)).text == (shown or None)
    assert len(shown.splitlines()) <= 1


# --- JUnit XML --------------------------------------------------------------------------------------------------------


@pytest.mark.source("XML schema of JUnit results in common use; junitparser as an independent reader")
@pytest.mark.parametrize("allow", [False, True])
def test_junit_is_valid_and_another_reader_finds_every_case(allow: bool) -> None:
    report = every_state(allow, HOSTILE)
    text = junit_report(report)
    SCHEMA.assertValid(etree.fromstring(text.encode()))
    suites = junitparser.JUnitXml.fromstring(text.encode())
    found = {
        (case.classname, case.name): [type(r).__name__ for r in case.result]
        for suite in suites
        for case in suite
    }
    outcome = {
        "met": [], "warning": [], "waived": ["Skipped"], "exceeded": ["Failure"], "error": ["Error"],
        "undecided": ["Skipped"] if allow else ["Failure"],
    }  # fmt: skip
    assert found == {(clean(f.group), clean(f.id)): outcome[f.state] for f in report.findings}
    for suite in suites:
        told = suite.tests, suite.failures, suite.errors, suite.skipped
        suite.update_statistics()
        assert told == (suite.tests, suite.failures, suite.errors, suite.skipped)
    total = (suites.tests, suites.failures, suites.errors)
    assert total == (7, 2 + (not allow), 1)


@pytest.mark.source("XML schema of JUnit results in common use")
@given(st.text(st.characters(exclude_categories=()), min_size=1))
def test_junit_is_valid_whatever_the_names(text: str) -> None:
    xml = junit_report(every_state(text="@" + text)).encode()
    root = etree.fromstring(xml)
    SCHEMA.assertValid(root)
    assert root.xpath("//testcase/@name")[-1] == clean("@" + text)


@pytest.mark.derived("no time unless it is given")
def test_junit_holds_a_time_only_when_it_is_given() -> None:
    stamped = Report("check", (finding(),), timestamp="2026-01-02T03:04:05Z")
    SCHEMA.assertValid(etree.fromstring(junit_report(stamped).encode()))
    assert 'timestamp="2026-01-02T03:04:05Z"' in junit_report(stamped)
    assert "timestamp" not in junit_report(Report("check", (finding(),)))


# --- Markdown, CSV, JSON, text ----------------------------------------------------------------------------------------


def _table(text: str) -> list[list[str]]:
    """Return the visible text of the cells of every row, as a Markdown renderer sees them."""
    rows: list[list[str]] = []
    tokens = MarkdownIt("gfm-like", {"linkify": False, "html": True}).parse(text)
    for before, token in itertools.pairwise(tokens):
        if before.type == "tr_open":
            rows.append([])
        if before.type in ("td_open", "th_open"):
            children = token.children or []
            assert {c.type for c in children} <= {"text", "text_special"}, [c.type for c in children]
            rows[-1].append("".join(c.content for c in children))
    return rows


@pytest.mark.source("CommonMark with tables, by the markdown-it-py library")
def test_markdown_shows_every_name_as_it_is() -> None:
    rows = [r for r in _table(markdown_report(every_state(text=HOSTILE))) if r[0] != "verdict"]
    assert [len(r) for r in rows] == [8] * 7
    assert [r[0] for r in rows] == ["error", "exceeded", "undecided", "warning", "waived", "met", "exceeded"]
    assert rows[-1][1].replace("\u2060", "") == clean(HOSTILE).strip()
    assert "@all" not in markdown_report(every_state(text=HOSTILE))  # nobody is called
    html = MarkdownIt("gfm-like", {"linkify": False, "html": True}).render(
        markdown_report(every_state(text=HOSTILE))
    )
    assert "<script" not in html
    assert "<a " not in html


@pytest.mark.source("CommonMark with tables, by the markdown-it-py library")
@given(st.text(st.characters(exclude_categories=()), min_size=1))
def test_no_name_breaks_the_markdown_table(text: str) -> None:
    rows = _table(markdown_report(every_state(text="n" + text)))
    assert len(rows) == 9
    assert rows[-1][1].replace("\u2060", "") == clean("n" + text).strip().replace("\u2060", "")


@pytest.mark.source("RFC 4180, by the csv module of the Python standard library")
def test_csv_reads_back_with_every_digit() -> None:
    report = every_state(text="=cmd|'x'!A1,\"q\"")
    head, *rows = csv.reader(io.StringIO(csv_report(report), newline=""))
    assert tuple(head) == CSV_COLUMNS
    assert [r[1] for r in rows] == [f.id if f.id[0] != "=" else "'" + f.id for f in report.findings]
    by_name = dict(zip(head, rows[3]))
    assert float(by_name["value"]) == 1000.0004
    assert (by_name["cell"], by_name["z"], by_name["low"]) == ("7", "0.5", "")


@pytest.mark.derived("worst first; everything named")
def test_the_text_tells_the_worst_first_and_fits_the_line() -> None:
    text = text_report(every_state(text="long " * 60))
    states = [line.split()[0] for line in text.splitlines() if line.startswith("  ") and line[2] != " "]
    assert states[:6] == ["ERROR", "EXCEEDED", "UNDECIDED", "WARNING", "waived", "met"]
    assert "element 8 (cell 7) at 0, 1, 0.5; step 2" in text
    assert "sha256 " + "ab" * 32 in text
    assert "1 with an error, 2 exceeded, 1 undecided, 1 warning, 1 waived, 1 met of 7: NOT PASSED" in text


@pytest.mark.derived("same input, same bytes")
def test_the_same_findings_give_the_same_bytes() -> None:
    for writer in WRITERS.values():
        assert writer.write(every_state(text=HOSTILE)) == writer.write(every_state(text=HOSTILE))
    assert json.dumps(json_report(every_state())) == json.dumps(json_report(every_state()))
