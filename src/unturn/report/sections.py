"""The sections of a report on what the result is and how it was computed: outcome, provenance, definitions, cautions."""

from __future__ import annotations

import math

import numpy as np

from unturn._version import __version__
from unturn.measures import MEASURES
from unturn.report.content import Content, Extreme
from unturn.report.parts import Cell, Outcome, Part, Said, Section, Table, Terms, Tone
from unturn.report.words import (
    NONE,
    bound,
    coordinates,
    outward,
    place_of,
    size_text,
    unit_name,
)
from unturn.summary import CAUTION, Summary, cell_counts, equivalent_form
from unturn.summary_text import _FINITE_ONLY, agreement_text, extent_of, kind_text, removed_text
from unturn.verdicts.finding import Report
from unturn.verdicts.wording import counts_text, number

LEVELS: dict[str, tuple[str, Tone]] = {
    "holds": ("holds", "good"),
    "marginal": ("marginal", "open"),
    "does not hold": ("does not hold", "bad"),
    "no strain": ("no strain", "good"),
    "not judged": ("not judged", "open"),
}
_LEVELS_WORST_FIRST = ("does not hold", "not judged", "marginal", "no strain", "holds")


def outcome(content: Content) -> Section:
    """Return what a reader must know first."""
    rows: list[tuple[str, str, Tone, str]] = []
    if content.limits is not None:
        rows.append(_limits(content.limits))
    if content.versus is not None and content.versus.judged:
        passed = content.versus.findings.passed
        word = "within tolerance" if passed else "not within tolerance"
        rows.append(("Comparison", word, "good" if passed else "bad", counts_text(content.versus.findings)))
    levels = [r.verdict.level for r in content.summary.regions]
    worst = next(level for level in _LEVELS_WORST_FIRST if level in levels)
    names = ", ".join(r.region.name for r in content.summary.regions if r.verdict.level == worst)
    word, tone = LEVELS[worst]
    if content.summary.options.mode:
        rows.append(
            (
                "Small strain",
                word,
                "",
                "a mode shape has an arbitrary amplitude; values are per unit amplitude",
            )
        )
    elif content.summary.finite_only:
        rows.append(
            ("Small strain", word, "", f"worst in {names}; {_FINITE_ONLY[content.summary.options.solve]}")
        )
    else:
        rows.append(("Small strain", word, tone, f"worst in {names}; see the verdict of each region"))
    if content.suspects:
        said = "some extremes keep growing towards a node that the mesh does not resolve"
        rows.append(("Peaks", "suspected singular", "open", said))
    if content.summary.warnings:
        n = len(content.summary.warnings)
        rows.append(("Warnings", str(n), "open", "see the cautions"))
    peaks = _leading_extremes(content)
    listed = [f"{e.label}, {e.region}: {_with_bound(e)} {unit_name(e.unit)}, {place_of(e)}" for e in peaks]
    return Section("outcome", "Outcome", [Outcome(rows), Said(listed, "list")])


def _limits(report: Report) -> tuple[str, str, Tone, str]:
    """Return how the limits stand; what is waived, or undecided and let pass, is no plain met."""
    word: str = "not all met"
    tone: Tone = "bad"
    if report.passed:
        others = [state for state in ("waived", "undecided") if state in report.counts]
        word, tone = (f"met, or {' or '.join(others)}", "open") if others else ("met", "good")
    return "Limits", word, tone, counts_text(report)


def _leading_extremes(content: Content) -> list[Extreme]:
    """Return the largest of each number over the regions."""
    best: dict[str, Extreme] = {}
    for e in content.extremes:
        held = best.get(e.label)
        sign = 1.0 if e.which == "maximum" else -1.0
        if math.isfinite(e.value) and (held is None or sign * e.value > sign * held.value):
            best[e.label] = e
    return list(best.values())


def _with_bound(e: Extreme) -> str:
    value = outward(e.value, e.which, e.unit)
    return f"{value} ± {bound(e.plus_minus, e.unit)}" if math.isfinite(e.plus_minus) else value


def examined(content: Content) -> Section:
    """Return what the report is of, and what it rests on."""
    rows = [
        [Cell(f.role), Cell(f.path), Cell(NONE if f.size is None else size_text(f.size), f.size),
         Cell(f.modified or NONE), Cell(f.sha256)]
        for f in content.files
    ]  # fmt: skip
    files = Table(
        "files",
        "Files behind this report",
        ("for", "file", "size", "last changed", "SHA-256"),
        rows,
        frozenset({2}),
    )
    made = Terms((
        ("Made with", f"unturn {__version__}"), ("Command", content.command),
        ("Date of the report", content.date.isoformat()),
    ))  # fmt: skip
    return Section("examined", "What was examined", [files, made, Terms(_model(content.summary))])


def _model(summary: Summary) -> list[tuple[str, str]]:
    model, result = summary.fields.model, summary.fields.model.result
    types = ", ".join(f"{n} {name}" for name, n in cell_counts(model).items())
    low, high = np.nanmin(model.points, axis=0), np.nanmax(model.points, axis=0)
    solve = summary.options.solve
    rows = [
        ("Format", result.format_name or NONE),
        ("Mesh", f"{result.n_points} points, {result.n_cells} cells ({types})"),
        ("Kind", kind_text(summary)),
        ("Extent", f"from {coordinates(low)} to {coordinates(high)}, length unit of the file"),
        ("Regions", ", ".join(f"{r.region.name} ({len(r.region.cells)} cells)" for r in summary.regions)),
        ("Displacement", f"{model.displacement.name} ({model.displacement.why})"),
        ("Solve", "not stated" if solve == "unknown" else f"stated to be geometrically {solve}"),
    ]
    if result.steps is not None:
        steps = result.steps
        value = number(steps.values[steps.current], digits=17)
        rows.insert(2, ("Step", f"{steps.current} (of 0 to {len(steps.values) - 1}), t = {value}"))
    if summary.numbers is not None:
        rows.append(
            ("Element numbers", f"those of {summary.numbers.name!r}; cell = zero-based position in the file")
        )
    else:
        rows.append(("Cell numbers", "zero-based positions in the file, which has no element numbers"))
    return [*rows, *[("Solver's strain", agreement_text(a)) for a in summary.agreements]]


def computed(content: Content) -> Section:
    """Return what was computed, by which definitions."""
    summary = content.summary
    rows = []
    for name in summary.fields.arrays:
        measure = MEASURES.get(name)
        if measure is not None:
            components = ", ".join(summary.fields.components.get(name, ()))
            unit = "dimensionless" if measure.unit in ("strain", "1") else measure.unit
            rows.append(
                [
                    Cell(name),
                    Cell(measure.meaning),
                    Cell(components or NONE),
                    Cell(unit),
                    Cell(measure.source.text),
                ]
            )
    head = ("array", "meaning", "components", "unit", "source of the formula")
    at = "their mean over the volume" if summary.options.at == "mean" else "the centroid of each element"
    said = [
        f"Strains are those of the elements at {at}; shear is tensor shear. Microstrain is strain times a million.",
        "A plus and minus is estimated from the elements around; at cells it covers the whole element, not its centroid "
        "alone. It says nothing of errors in loads, supports, material or geometry.",
        "An extreme is rounded away from zero where it is the largest above or the smallest below, and a plus and minus "
        "upwards: no rounding makes a value smaller than it is.",
    ]
    if any("equivalent" in name for name in summary.fields.arrays):
        said.insert(1, f"Equivalent strain is {equivalent_form(summary.options.equivalent_poisson)}.")
    told = {k: v for k, v in summary.request.items() if k not in ("measures", "threads")}
    parts: list[Part] = [Table("measures", "Measures", head, rows), Said(said)]
    if told:
        parts.append(Terms([(k.replace("_", " "), str(v)) for k, v in told.items()]))
    removed = [
        " ".join(line.strip() for line in removed_text(r, extent_of(summary))) for r in summary.removals
    ]
    return Section("computed", "What was computed", [*parts, *([Said(removed, "list")] if removed else [])])


def cautions(content: Content) -> Section:
    """Return what a reader must bear in mind."""
    summary = content.summary
    parts: list[Part] = []
    if summary.warnings:
        parts.append(Said(list(summary.warnings), "warning"))
    if summary.fields.notes:
        parts.append(Said(list(summary.fields.notes), "list"))
    parts.append(Said([CAUTION]))
    return Section("cautions", "Cautions", parts)
