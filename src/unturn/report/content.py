"""What a report holds, before any of it is laid out."""

from __future__ import annotations

import datetime
import math
from dataclasses import dataclass, field
from typing import Any, Literal

from unturn.measures import MEASURES
from unturn.report_keys import ReportWish
from unturn.summary import RegionSummary, Summary
from unturn.trusted import Growth, Which, table_rows
from unturn.verdicts.finding import Report


@dataclass(frozen=True)
class FileRecord:
    """A file behind the report: what it was for, its path as given, SHA-256, size in bytes and time of its last change.

    `size` and `modified` are None for several files that are one record.
    """

    role: str
    path: str
    sha256: str
    size: int | None
    modified: str | None


@dataclass(frozen=True)
class Extreme:
    """An extreme of one number in one region; in the unit of the array, place as positions and the solver's numbers."""

    region: str
    label: str
    array: str
    which: Which
    value: float
    plus_minus: float
    unit: str
    cell: int
    element: int | None
    at: tuple[float, float, float] | None
    error_over_size: float
    singular: bool


@dataclass(frozen=True)
class Beyond:
    """Cells that are computed and in no region of the report: how many, and their own peak."""

    dimension: int
    cells: int
    array: str
    value: float
    cell: int
    element: int | None
    unit: str


@dataclass(frozen=True, eq=False)
class Shown:
    """An image: its name without suffix, words above and below it, what it shows to those who cannot see it, its bytes."""

    name: str
    title: str
    caption: str
    alt: str
    image: bytes
    kind: Literal["png", "svg"] = "png"
    data: dict[str, Any] = field(default_factory=dict)
    table: bytes | None = None

    @property
    def file(self) -> str:
        """Name of its file."""
        return f"{self.name}.{self.kind}"


@dataclass(frozen=True)
class Curve:
    """One number of one region over the steps."""

    region: str
    label: str
    array: str
    which: Which
    unit: str
    values: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class Series:
    """What changes over the steps of a series."""

    steps: tuple[int, ...]
    times: tuple[float, ...]
    curves: tuple[Curve, ...]
    plots: tuple[Shown, ...] = ()


@dataclass(frozen=True, eq=False)
class Versus:
    """The comparison with a reference: what each reads, the findings, whether these are judged, and pictures."""

    reference: str
    pairs: tuple[tuple[Extreme, Extreme | None], ...]
    findings: Report
    judged: bool
    pictures: tuple[Shown, ...]


@dataclass(frozen=True, eq=False)
class Content:
    """Everything a report says."""

    wish: ReportWish
    title: str
    date: datetime.date
    command: str
    files: tuple[FileRecord, ...]
    summary: Summary
    extremes: tuple[Extreme, ...]
    beyond: tuple[Beyond, ...]
    pictures: tuple[Shown, ...]
    limits: Report | None = None
    versus: Versus | None = None
    series: Series | None = None

    @property
    def passed(self) -> bool:
        """Whether no limit and no tolerance is exceeded or undecided."""
        judged = [self.limits, self.versus.findings if self.versus and self.versus.judged else None]
        return all(report is None or report.passed for report in judged)

    @property
    def suspects(self) -> list[Growth]:
        """What is suspected singular among the extremes that are told."""
        told = {(e.array, e.which) for e in self.extremes}
        return [g for g in self.summary.growths if g.location != "cells" or (g.array, g.which) in told]

    @property
    def images(self) -> tuple[Shown, ...]:
        """Every image, in the order of the page."""
        versus = self.versus.pictures if self.versus else ()
        return (*self.pictures, *versus, *(self.series.plots if self.series else ()))


def extremes_of(summary: Summary) -> list[Extreme]:
    """Return the extremes of every region: those of the strain, then the largest rotation."""
    found = []
    for region in summary.regions:
        rows = table_rows(region.statistics, summary.fields.components.get("strain", ()))
        kept = [
            row
            for row in rows
            if math.isfinite(getattr(region.statistics[row[1]], row[2])) and not _always_zero(summary, row[1])
        ]
        for label, name, which in [*kept, ("largest rotation", "angle_of_turn", "maximum")]:
            found.append(_extreme(summary, region, label, name, which))
    return found


def _extreme(summary: Summary, region: RegionSummary, label: str, name: str, which: Which) -> Extreme:
    held = region.statistics[name]
    cell = held.at_maximum if which == "maximum" else held.at_minimum
    value = float(held.maximum if which == "maximum" else held.minimum)
    d = summary.fields.diagnostics
    assert d is not None
    size = region.verdict.size
    known = region.trust.get((name, which))
    turns = not _is_finite(name)  # what turning adds to the small strain says nothing of a finite measure
    return Extreme(
        region.region.name, label, name, which, value, region.plus_minus(name, which),
        "radian" if name == "angle_of_turn" else "strain", cell,
        element_of(summary, cell),
        None if cell < 0 else (float(d.centroid[cell][0]), float(d.centroid[cell][1]), float(d.centroid[cell][2])),
        float(d.error[cell] / size) if cell >= 0 and size > 0 and turns and not summary.options.mode else math.nan,
        known is not None and known.singular,
    )  # fmt: skip


def _is_finite(name: str) -> bool:
    measure = MEASURES.get(name) or MEASURES.get(name.rpartition("_")[0])
    return measure is not None and measure.finite


def _always_zero(summary: Summary, name: str) -> bool:
    """Return whether a component is zero by what the mesh is: the shear across a plane."""
    held = [r.statistics[name] for r in summary.regions if name in r.statistics]
    return name.startswith("strain_") and all(s.minimum == 0 == s.maximum for s in held)


def element_of(summary: Summary, cell: int) -> int | None:
    """Return the solver's number of a cell."""
    return None if summary.numbers is None or cell < 0 else int(summary.numbers.numbers[cell])
