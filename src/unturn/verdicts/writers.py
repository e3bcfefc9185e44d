"""Findings as text for people, JUnit XML, JSON, a Markdown table and CSV."""

from __future__ import annotations

import csv
import io
import re
import textwrap
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any
from xml.sax.saxutils import escape, quoteattr

from unturn._version import __version__
from unturn.summary import CAUTION
from unturn.verdicts.finding import Finding, Report
from unturn.verdicts.wording import (
    bound_text,
    clean,
    counts_text,
    margin_text,
    measured_text,
    place_text,
)

SCHEMA = "unturn.verdict/1"
_LINE = 110
_MOST_ID = 40  # a longer id does not widen the columns of the others


# --- text ---------------------------------------------------------------------------------------------------------


def text_report(report: Report) -> str:
    """Return the findings for people, worst first in each group, without a line end."""
    lines = [f"{i.role} {clean(i.path)}   sha256 {i.sha256}" for i in report.inputs]
    rows = [_row(f) for f in report.findings]
    widths = [max(min(len(r[k]), _MOST_ID) for r in rows) for k in range(len(rows[0]))]
    for group, findings in report.groups.items():
        lines += ["", clean(group)] if lines else [clean(group)]
        for finding in findings:
            lines += _lines(finding, widths)
    lines.append("")
    lines += [line for note in report.notes for line in _wrapped(f"note: {clean(note)}", "", "  ")]
    return "\n".join([*lines, counts_text(report), CAUTION])


def _row(f: Finding) -> list[str]:
    margin = margin_text(f)
    return [
        f.state if f.state in ("met", "waived") else f.state.upper(),
        clean(f.id),
        measured_text(f),
        bound_text(f),
        f"margin {margin}" if margin else "",
        clean(f.unit),
    ]


def _lines(f: Finding, widths: list[int]) -> list[str]:
    state, name, value, *rest = _row(f)
    cells = [state.ljust(widths[0]), name.ljust(widths[1]), value.rjust(widths[2])]
    cells += [cell.ljust(w) for cell, w in zip(rest, widths[3:])]
    indent = " " * (widths[0] + 4)
    where = place_text(f.place)
    lines = ["  " + "  ".join(cells).rstrip()]
    lines += _wrapped(f"{clean(f.title)}{': ' + where if where else ''}", indent, "  ")
    if f.message:
        lines += _wrapped(clean(f.message), indent, "  ")
    return lines


def _wrapped(text: str, indent: str, further: str) -> list[str]:
    return textwrap.wrap(
        text, _LINE, initial_indent=indent, subsequent_indent=indent + further, break_on_hyphens=False
    )


# --- JUnit XML ----------------------------------------------------------------------------------------------------


def junit_report(report: Report) -> str:
    """Return JUnit XML: one suite a group, one case a finding, named by its id.

    ``exceeded`` and ``undecided`` are failures, ``error`` is an error, ``waived`` and allowed ``undecided`` are skipped.
    """
    suites = [_suite(report, group, findings) for group, findings in _in_order(report).items()]
    total = _tally(report, report.findings)
    head = f'<testsuites name={_quoted("unturn " + report.command)} tests="{total[0]}" failures="{total[1]}"'
    lines = [
        '<?xml version="1.0" encoding="UTF-8"?>',
        f'{head} errors="{total[2]}">',
        *(line for suite in suites for line in suite),
        "</testsuites>",
    ]
    return "\n".join(lines) + "\n"


def _in_order(report: Report) -> dict[str, list[Finding]]:
    return {g: [f for f in report.findings if f.group == g] for g in report.groups}


def _outcome(report: Report, f: Finding) -> str:
    if f.state == "error":
        return "error"
    if not f.passes(report.allow_undecided):
        return "failure"
    return "skipped" if f.state in ("waived", "undecided") else ""


def _tally(report: Report, findings: list[Finding] | tuple[Finding, ...]) -> tuple[int, int, int, int]:
    found = [_outcome(report, f) for f in findings]
    return len(found), found.count("failure"), found.count("error"), found.count("skipped")


def _suite(report: Report, group: str, findings: list[Finding]) -> list[str]:
    n, failures, errors, skipped = _tally(report, findings)
    stamp = f" timestamp={_quoted(report.timestamp)}" if report.timestamp else ""
    properties = [
        ("unturn", __version__),
        *((f"sha256 of {i.role} {i.path}", i.sha256) for i in report.inputs),
    ]
    lines = [
        f'  <testsuite name={_quoted(group)} tests="{n}" failures="{failures}" errors="{errors}" skipped="{skipped}"{stamp}>',
        "    <properties>",
        *(f"      <property name={_quoted(k)} value={_quoted(v)}/>" for k, v in properties),
        "    </properties>",
    ]
    for f in findings:
        lines += _case(report, group, f)
    return [*lines, "  </testsuite>"]


def _case(report: Report, group: str, f: Finding) -> list[str]:
    body = escape(_sentence(f))
    outcome = _outcome(report, f)
    lines = [f"    <testcase classname={_quoted(group)} name={_quoted(f.id)}>"]
    if outcome:
        reason = f"{f.state}: {f.message or f.title}"
        lines.append(f"      <{outcome} type={_quoted(f.state)} message={_quoted(reason)}>{body}</{outcome}>")
    else:
        lines.append(f"      <system-out>{body}</system-out>")
    return [*lines, "    </testcase>"]


def _sentence(f: Finding) -> str:
    """Return all that is known of a finding, in lines."""
    margin = margin_text(f)
    parts = [
        f.state,
        f"{measured_text(f)} {clean(f.unit)}".strip() if f.value is not None else "",
        bound_text(f),
        f"margin {margin}" if margin else "",
    ]
    lines = [clean(f.title), ", ".join(p for p in parts if p), place_text(f.place), clean(f.message)]
    return "\n".join(line for line in lines if line)


def _quoted(text: str) -> str:
    return quoteattr(clean(text))


# --- JSON ---------------------------------------------------------------------------------------------------------


def json_report(report: Report) -> dict[str, Any]:
    """Return the findings as plain data, schema ``unturn.verdict/1``, in the order in which they were asked for."""
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "command": report.command,
        "timestamp": report.timestamp,
        "inputs": [{"role": i.role, "file": i.path, "sha256": i.sha256} for i in report.inputs],
        "settings": dict(report.settings),
        "passed": report.passed,
        "allow_undecided": report.allow_undecided,
        "counts": dict(report.counts),
        "findings": [_finding_data(f) for f in report.findings],
        "notes": list(report.notes),
        "caution": CAUTION,
    }


def _finding_data(f: Finding) -> dict[str, Any]:
    place = f.place
    at = place.get("at")
    return {
        "id": f.id,
        "group": f.group,
        "title": f.title,
        "state": f.state,
        "message": f.message,
        "value": f.value,
        "low": f.low,
        "high": f.high,
        "margin": f.margin,
        "plus_minus": f.plus_minus,
        "unit": f.unit,
        "place": {
            "cell": place.get("cell"), "element": place.get("element"),
            "point": place.get("point"), "node": place.get("node"),
            "at": None if at is None else [float(x) for x in at],
            "step": place.get("step"), "time": place.get("time"),
        },
        "details": dict(f.details),
    }  # fmt: skip


# --- Markdown -----------------------------------------------------------------------------------------------------

_MARKUP = re.compile(r"([\\`*_\[\]#|~$])")
_COLUMNS = ("verdict", "id", "value", "bound", "margin", "unit", "what and where", "why")


def markdown_report(report: Report) -> str:
    """Return a Markdown table for the comment of a merge request, worst first in each group."""
    lines = [f"**unturn {report.command}: {_marked(counts_text(report))}**"]
    for group, findings in report.groups.items():
        lines += ["", f"### {_marked(group)}", "", _line(_COLUMNS), _line(["---"] * len(_COLUMNS))]
        lines += [_line([_marked(cell) for cell in _cells(f)]) for f in findings]
    lines.append("")
    lines += [f"- {_marked(note)}" for note in report.notes]
    lines += [f"- {_marked(f'{i.role} {i.path}: sha256 {i.sha256}')}" for i in report.inputs]
    return "\n".join([*lines, "", _marked(CAUTION)]) + "\n"


def _cells(f: Finding) -> list[str]:
    where = place_text(f.place)
    what = f"{f.title}: {where}" if where else f.title
    return [f.state, f.id, measured_text(f), bound_text(f), margin_text(f), f.unit, what, f.message]


def _line(cells: Sequence[str]) -> str:
    return "| " + " | ".join(cells) + " |"


def _marked(text: str) -> str:
    """Return a text that shows as it is: no markup, no HTML, and nobody is called by name."""
    plain = _MARKUP.sub(r"\\\1", clean(text))
    plain = plain.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    return plain.replace("@", "@\u2060")


# --- CSV ----------------------------------------------------------------------------------------------------------

CSV_COLUMNS = (
    "group", "id", "title", "state", "value", "low", "high", "margin", "plus_minus", "unit", "cell", "element", "point",
    "node", "x", "y", "z", "step", "time", "message", "sha256",
)  # fmt: skip


def csv_report(report: Report) -> str:
    """Return the findings as CSV (RFC 4180), numbers with every digit, in the order in which they were asked for."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow(CSV_COLUMNS)
    for f in report.findings:
        data = _finding_data(f)
        place = data["place"]
        x, y, z = place["at"] or (None, None, None)
        values = {**data, **place, "x": x, "y": y, "z": z, "sha256": _hashes(report, f)}
        writer.writerow([csv_field(values[c]) for c in CSV_COLUMNS])
    return out.getvalue()


def _hashes(report: Report, f: Finding) -> str:
    """Return the inputs behind a finding with their hashes: those of its own group, and those that are of no other."""
    others = set(report.groups) - {f.group}
    return "; ".join(f"{i.role} {i.path} {i.sha256}" for i in report.inputs if i.path not in others)


def csv_field(value: Any) -> str:
    """Return a value as CSV holds it: a number with every digit, a text that no table program takes for a formula."""
    if value is None:
        return ""
    if not isinstance(value, str):
        return repr(value)
    text = clean(value)
    return (
        f"'{text}" if text[:1] in ("=", "+", "-", "@") else text
    )  # no table program may take it for a formula


@dataclass(frozen=True)
class TextWriter:
    """A form of a report that is a text file."""

    name: str
    write: Callable[[Report], str]


WRITERS = {w.name: w for w in (
    TextWriter("junit", junit_report), TextWriter("markdown", markdown_report), TextWriter("csv", csv_report),
)}  # fmt: skip
"""The text files a report can be written to, by the name of their option; JSON beside them is data."""
