"""The sections on what the result is held against: limits, a reference, its own steps."""

from __future__ import annotations

import math

from unturn.report.content import Content, Curve, Extreme
from unturn.report.parts import Cell, Figures, Part, Said, Section, Table, Tone
from unturn.report.words import NONE, bound, outward, shown_value, unit_name
from unturn.verdicts.finding import Finding, Report, State
from unturn.verdicts.wording import bound_text, counts_text, margin_text, measured_text, number, place_text

_TONES: dict[State, Tone] = {
    "met": "good", "warning": "open", "undecided": "open", "waived": "open", "exceeded": "bad", "error": "bad",
}  # fmt: skip
_HEAD = ("verdict", "limit", "value", "bound", "margin", "unit", "what, where and why")


def limits(content: Content) -> Section | None:
    """Return every limit, worst first."""
    report = content.limits
    if report is None:
        return None
    rows = [_finding(f) for findings in report.groups.values() for f in findings]
    title = report.settings.get("title") or "limits"
    return Section(
        "limits", "Limits",
        [
            Said([f"Limits: {title}. {counts_text(report)}. Waivers are judged on {report.settings['today']}."]),
            Table("limits", "Limits, worst first", _HEAD, rows, frozenset({2, 4})),
        ],
    )  # fmt: skip


def _finding(f: Finding) -> list[Cell]:
    where = place_text(f.place)
    said = f"{f.title}{': ' if where else ''}{where}{'; ' if f.message else ''}{f.message}"
    return [
        Cell(f.state, tone=_TONES[f.state]), Cell(f.id), Cell(measured_text(f).replace(" +-", " ± "), f.value),
        Cell(bound_text(f)), Cell(margin_text(f), f.margin), Cell(f.unit), Cell(said),
    ]  # fmt: skip


def versus(content: Content) -> Section | None:
    """Return the comparison with the reference."""
    found = content.versus
    if found is None:
        return None
    head = ("region", "what", "this result", "±", "reference", "± of reference", "change", "unit")
    rows = [_pair(new, old) for new, old in found.pairs]
    judged = f"Against the tolerances: {counts_text(found.findings)}."
    told = "No tolerances are stated: differences are told, not judged."
    parts: list[Part] = [
        Said([f"Compared with {found.reference}. {judged if found.judged else told}", *found.findings.notes]),
        Table("change", "Extremes of this result and of the reference", head, rows, frozenset(range(2, 7))),
        *_differences(found.findings, found.judged),
        Figures(found.pictures, "wide"),
    ]
    return Section("comparison", "Comparison with the reference", parts)


def _pair(new: Extreme, old: Extreme | None) -> list[Cell]:
    unit = unit_name(new.unit)
    first = [Cell(new.region), Cell(new.label), Cell(outward(new.value, new.which, new.unit), new.value),
             Cell(bound(new.plus_minus, new.unit), new.plus_minus)]  # fmt: skip
    if old is None:
        return [*first, Cell(NONE), Cell(NONE), Cell("not in the reference"), Cell(unit)]
    return [
        *first, Cell(outward(old.value, old.which, old.unit), old.value),
        Cell(bound(old.plus_minus, old.unit), old.plus_minus),
        Cell(_change(new.value, old.value), new.value - old.value), Cell(unit),
    ]  # fmt: skip


def _change(new: float, old: float) -> str:
    if not (math.isfinite(new) and math.isfinite(old)):
        return NONE
    if old == 0.0:
        return "none" if new == 0.0 else "from zero"
    change = 100.0 * (new - old) / abs(old)
    return f"{'+' if change > 0 else ''}{number(change, digits=3)} %"


def _differences(report: Report, judged: bool) -> list[Part]:
    """Return what differs: with verdicts where it is judged, else sizes alone."""
    findings = [f for group in report.groups.values() for f in group]
    if judged:
        caption = "Differences against tolerances, worst first"
        rows = [_finding(f) for f in findings]
        return [Table("differences", caption, ("verdict", "compared", *_HEAD[2:]), rows, frozenset({2, 4}))]
    head = ("compared", "largest difference", "of the reference's largest", "of its mean size (L2)")
    rows = [_difference(f) for f in findings if "l2" in f.details]
    said = [f"{f.title}: {f.message}" for f in findings if "l2" not in f.details and f.message]
    table = Table("differences", "Differences by array and region", head, rows, frozenset({1, 2, 3}))
    return [Said(said, "list"), table] if said else [table]


def _difference(f: Finding) -> list[Cell]:
    worst, size = f.details["largest"]["value"], f.details["largest_of_reference"]
    return [
        Cell(f.id), Cell(_size(worst, f.unit), worst),
        Cell(f"{number(100.0 * worst / size, digits=3)} %" if size else NONE, worst / size if size else None),
        Cell(f"{number(100.0 * f.details['l2_relative'], digits=3)} %", f.details["l2_relative"]),
    ]  # fmt: skip


def _size(value: float, unit: str) -> str:
    if unit == "microstrain":
        return f"{outward(value, 'maximum', 'strain')} microstrain"
    return f"{number(value)} {unit}".rstrip()


def steps(content: Content) -> Section | None:
    """Return the extremes of every step."""
    series = content.series
    if series is None:
        return None
    tables: list[Part] = []
    for k, region in enumerate(dict.fromkeys(c.region for c in series.curves), 1):
        curves = [c for c in series.curves if c.region == region]
        head = ("step", "t", *(f"{c.label}, {unit_name(c.unit)}" for c in curves))
        rows = [
            [Cell(str(step), step), Cell(number(time), time), *(_step_cell(c, n) for c in curves)]
            for n, (step, time) in enumerate(zip(series.steps, series.times))
        ]
        caption = f"Extremes of each step, {region}"
        tables.append(Table(f"steps-{k}", caption, head, rows, frozenset(range(len(head)))))
    return Section("steps", "Over the steps", [Figures(series.plots, "small"), *tables])


def _step_cell(curve: Curve, n: int) -> Cell:
    return Cell(outward(curve.values[n], curve.which, curve.unit), shown_value(curve.values[n], curve.unit))
