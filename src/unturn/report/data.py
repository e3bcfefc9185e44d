"""A report as plain data, schema ``unturn.report/1`` (docs/report-json.md)."""

from __future__ import annotations

import hashlib
from dataclasses import asdict
from typing import Any

from unturn._version import __version__
from unturn.report.content import Content, Extreme, Series, Shown, Versus
from unturn.summary import CAUTION, summary_data
from unturn.verdicts.writers import json_report

SCHEMA = "unturn.report/1"


def report_data(content: Content) -> dict[str, Any]:
    """Return the content of a report as plain data; numbers in the units of the arrays."""
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "title": content.title,
        "title_block": {
            name: getattr(content.wish, name)
            for name in ("number", "revision", "project", "prepared", "checked", "approved")
        },
        "remarks": list(content.wish.remarks),
        "date": content.date.isoformat(),
        "command": content.command,
        "files": [asdict(f) for f in content.files],
        "passed": content.passed,
        "summary": summary_data(content.summary),
        "extremes": [_extreme(e) for e in content.extremes],
        "beyond": [asdict(b) for b in content.beyond],
        "pictures": [_image(i) for i in content.pictures],
        "limits": None if content.limits is None else json_report(content.limits),
        "comparison": None if content.versus is None else _versus(content.versus),
        "series": None if content.series is None else _series(content.series),
        "caution": CAUTION,
    }


def _extreme(e: Extreme) -> dict[str, Any]:
    return {
        "region": e.region, "label": e.label, "array": e.array, "extreme": e.which, "value": e.value,
        "plus_minus": e.plus_minus, "unit": e.unit, "cell": e.cell if e.cell >= 0 else None, "element": e.element,
        "at": None if e.at is None else list(e.at), "error_over_size": e.error_over_size, "suspected_singular": e.singular,
    }  # fmt: skip


def _image(image: Shown) -> dict[str, Any]:
    return {
        "name": image.name, "title": image.title, "caption": image.caption, "alt": image.alt, "kind": image.kind,
        "bytes": len(image.image), "sha256": hashlib.sha256(image.image).hexdigest(), "drawn": image.data or None,
    }  # fmt: skip


def _versus(versus: Versus) -> dict[str, Any]:
    return {
        "reference": versus.reference,
        "judged": versus.judged,
        "extremes": [
            {"this": _extreme(new), "reference": None if old is None else _extreme(old)}
            for new, old in versus.pairs
        ],
        "findings": json_report(versus.findings),
        "pictures": [_image(i) for i in versus.pictures],
    }


def _series(series: Series) -> dict[str, Any]:
    return {
        "steps": list(series.steps),
        "times": list(series.times),
        "curves": [
            {"region": c.region, "label": c.label, "array": c.array, "extreme": c.which, "unit": c.unit,
             "values": list(c.values)}
            for c in series.curves
        ],
        "plots": [_image(i) for i in series.plots],
    }  # fmt: skip
