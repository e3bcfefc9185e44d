"""The record of an installation: what ran where, every check with its source, and lines to sign."""

from __future__ import annotations

import hashlib
import json
import math
import os
import platform
import sys
import textwrap
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from unturn._version import __version__
from unturn.verdicts.finding import Finding, Report, State
from unturn.verdicts.installation_checks import FORMULAS, Case, Check
from unturn.verdicts.installation_meshes import mesh_checks
from unturn.verdicts.wording import number, value_text

SCHEMA = "unturn.installation/1"
PACKAGES = ("numpy", "scipy", "h5py", "meshio", "pyvista", "vtk", "typer", "rich")
SIGNATURES = ("ran by", "checked by", "approved by")
SCOPE = (
    "The record shows that this program, with these packages on this machine, gives what the named sources say on built-in "
    "problems. It says nothing of a solver, of a user's mesh (for which there is 'unturn patchtest FILE') or of the use that "
    "is made of a result. Sources marked 'memory' were written down without the publication at hand and computed again; "
    "'derived' follows from stated definitions; 'practice' is common practice."
)
_GROUP = "installation"
_WIDTH = 110


@dataclass(frozen=True, eq=False)
class Installation:
    """What was found.

    Attributes
    ----------
    date
        ISO 8601.
    system
        Versions and platform, plain data.
    results
        Each check with its cases.
    """

    date: str
    system: dict[str, Any]
    results: tuple[tuple[Check, tuple[Case, ...], str], ...]

    @property
    def report(self) -> Report:
        """The results as findings."""
        findings = tuple(_finding(*r) for r in self.results)
        return Report(
            "patchtest --installation", findings, settings=self.system, timestamp=f"{self.date}T00:00:00"
        )


def all_checks() -> tuple[Check, ...]:
    """Return every check of an installation."""
    return (*FORMULAS, *mesh_checks())


def check_installation(date: str, checks: Iterable[Check] | None = None) -> Installation:
    """Run the checks.

    Parameters
    ----------
    date
        ISO 8601, as the record states it.
    checks
        None: all.
    """
    results = []
    for check in all_checks() if checks is None else checks:
        try:
            results.append((check, tuple(check.cases()), ""))
        except Exception as error:  # noqa: BLE001 - a check that cannot run is a result, and must be in the record
            results.append((check, (), f"could not be run: {type(error).__name__}: {error}"))
    return Installation(date, _system(), tuple(results))


def _finding(check: Check, cases: Sequence[Case], fault: str) -> Finding:
    details: dict[str, Any] = {
        "source": check.source.text,
        "source_kind": check.source.kind,
        "cases": [{"name": c.name, "error": c.error, "bound": c.bound, "unit": c.unit} for c in cases],
    }
    if fault or not cases:
        message = fault or "it compared nothing"
        return Finding(check.name, _GROUP, check.title, "error", message, details=details)
    worst = max(cases, key=_closeness)
    beyond = [c for c in cases if not c.error <= c.bound]
    state: State = "exceeded" if beyond else "met"
    message = f"{len(cases)} comparisons; nearest to its bound: {worst.name}"
    if beyond:
        message = (
            f"{len(beyond)} of {len(cases)} comparisons are beyond their bounds, the farthest: {worst.name}"
        )
    return Finding(
        check.name, _GROUP, check.title, state, message, value=worst.error, bound=worst.bound, unit=_unit(worst.unit),
        details=details,
    )  # fmt: skip


def _unit(unit: str) -> str:
    return "" if unit == "1" else unit


def _closeness(case: Case) -> float:
    if math.isnan(case.error):
        return math.inf
    return case.error / case.bound if case.bound else math.inf if case.error else 0.0


# --- where it ran -------------------------------------------------------------------------------------------------


def _system() -> dict[str, Any]:
    return {
        "unturn": __version__,
        "program_sha256": program_digest(),
        "python": platform.python_version(),
        "implementation": platform.python_implementation(),
        "system": platform.system(),
        "release": platform.release(),
        "machine": platform.machine(),
        "byte_order": sys.byteorder,
        "processors": os.cpu_count(),
        "packages": {name: _package(name) for name in PACKAGES},
    }


def _package(name: str) -> str | None:
    try:
        return version(name)
    except PackageNotFoundError:
        return None


def program_digest() -> str:
    """Return the SHA-256 over the source files of the program: the name of each in the package, then its bytes."""
    import unturn

    home = Path(unturn.__file__).parent
    digest = hashlib.sha256()
    for path in sorted(home.rglob("*.py"), key=lambda p: p.relative_to(home).as_posix()):
        digest.update(path.relative_to(home).as_posix().encode() + b"\0")
        digest.update(path.read_bytes().replace(b"\r\n", b"\n") + b"\0")
    return digest.hexdigest()


# --- the record ---------------------------------------------------------------------------------------------------


def record_data(found: Installation) -> dict[str, Any]:
    """Return the record as plain data, schema ``unturn.installation/1``, with the SHA-256 of its data."""
    report = found.report
    data: dict[str, Any] = {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "date": found.date,
        "system": found.system,
        "passed": report.passed,
        "counts": dict(report.counts),
        "checks": [_check_data(f) for f in report.findings],
        "scope": SCOPE,
    }
    data["sha256"] = data_digest(data)
    data["signatures"] = [{"role": role, "name": "", "date": "", "signature": ""} for role in SIGNATURES]
    return data


def _check_data(f: Finding) -> dict[str, Any]:
    return {
        "id": f.id,
        "title": f.title,
        "state": f.state,
        "message": f.message,
        "error": _plain(f.value),
        "bound": f.high,
        "unit": f.unit or "1",
        "source": f.details["source"],
        "source_kind": f.details["source_kind"],
        "cases": [{**c, "error": _plain(c["error"])} for c in f.details["cases"]],
    }


def _plain(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


def data_digest(data: dict[str, Any]) -> str:
    """Return the SHA-256 of a record's data without its keys ``sha256`` and ``signatures``.

    The data are written as JSON with sorted keys, no blanks and characters beyond ASCII as escapes.
    """
    kept = {k: v for k, v in data.items() if k not in ("sha256", "signatures")}
    text = json.dumps(kept, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def record_text(found: Installation) -> str:
    """Return the record as text for people to sign, without a line end."""
    data = record_data(found)
    return "\n".join([*_head(data), "", *_table(data), "", *_sources(data), "", *_foot(data)])


def _head(data: dict[str, Any]) -> Iterator[str]:
    s = data["system"]
    yield "RECORD OF AN INSTALLATION OF UNTURN"
    yield ""
    yield f"date           {data['date']}"
    yield f"program        unturn {s['unturn']}"
    yield f"               source files: SHA-256 {s['program_sha256']}"
    yield f"python         {s['python']} ({s['implementation']})"
    machine = f"{s['system']} {s['release']}, {s['machine']}, {s['byte_order']}-endian, {s['processors']} processors"
    yield f"machine        {machine}"
    packages = ", ".join(f"{k} {v or '(not installed)'}" for k, v in s["packages"].items())
    yield from textwrap.wrap(packages, _WIDTH, initial_indent="packages       ", subsequent_indent=" " * 15)
    counts = ", ".join(f"{n} {state}" for state, n in data["counts"].items())
    yield f"result         {'PASSED' if data['passed'] else 'NOT PASSED'}: {counts} of {len(data['checks'])} checks"


def _table(data: dict[str, Any]) -> Iterator[str]:
    rows = [["check", "comparisons", "error", "bound", "unit", "result"]]
    for c in data["checks"]:
        error = "" if c["error"] is None else value_text(c["error"], high=c["bound"])
        bound = "" if c["bound"] is None else number(c["bound"], digits=4)
        rows.append(
            [
                c["id"],
                str(len(c["cases"])),
                error,
                bound,
                c["unit"],
                c["state"].upper() if c["state"] != "met" else "met",
            ]
        )
    widths = [max(len(r[k]) for r in rows) for k in range(len(rows[0]))]
    for k, row in enumerate(rows):
        cells = [row[0].ljust(widths[0]), *(x.rjust(w) for x, w in zip(row[1:4], widths[1:4])), *row[4:]]
        cells[4] = cells[4].ljust(widths[4])
        yield "  ".join(cells).rstrip()
        message = data["checks"][k - 1]["message"] if k and row[-1] != "met" else ""
        yield from textwrap.wrap(message, _WIDTH, initial_indent="    ", subsequent_indent="      ")
    yield "error and bound are those of the comparison that comes nearest to its bound"


def _sources(data: dict[str, Any]) -> Iterator[str]:
    yield "sources"
    seen: dict[tuple[str, str, str], list[str]] = {}
    for c in data["checks"]:
        many = c["id"].startswith("patch.")
        title = "patch.*: imposed fields on a patch of each element" if many else f"{c['id']}: {c['title']}"
        seen.setdefault((title, c["source"], c["source_kind"]), []).append(c["id"])
    for title, text, kind in seen:
        yield from textwrap.wrap(
            f"{title} [{text} ({kind})]", _WIDTH, initial_indent="  ", subsequent_indent="    "
        )


def _foot(data: dict[str, Any]) -> Iterator[str]:
    yield from textwrap.wrap(SCOPE, _WIDTH)
    yield ""
    yield f"SHA-256 of the data {data['sha256']}"
    yield ""
    for role in SIGNATURES:
        yield f"{role:<12} {'_' * 34}  date {'_' * 12}  signature {'_' * 30}"
        yield ""
