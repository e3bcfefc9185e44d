"""What a result says in ten seconds: verdicts, extremes by region, what was left out. As data and as text."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn._version import __version__
from unturn.agreement import Agreement, compare_with_solver
from unturn.elsewhere import Border, Elsewhere, find_elsewhere
from unturn.fields import CellDiagnostics, CellFields
from unturn.measures import MEASURES
from unturn.model import Model
from unturn.numbering import Numbering, element_numbers
from unturn.pipeline import Computed
from unturn.regions import Region, find_regions, judged_together, named_regions, unused_tags
from unturn.rigid import Removal
from unturn.series import SERIES_MEASURES
from unturn.statistics import LOW_PERCENTILES, PERCENTILES, Statistics, statistics
from unturn.trial import Trial, try_remedies
from unturn.trusted import Column, Growth, Trusts, Which, growths, trusted
from unturn.verdict import BROKEN, Solve, Verdict, judge

SCHEMA = "unturn.summary/1"


@dataclass(frozen=True)
class SummaryOptions:
    """How a summary is made: regions by name, what is known of the solve, mode shape or not, all statistics or few.

    `defined` holds the cells, zero-based file positions, of regions that are not of the file, by name.
    """

    regions: tuple[str, ...] = ()
    solve: Solve = "unknown"
    mode: bool = False
    equivalent_poisson: float | None = None
    at: str = "centroid"
    full: bool = False
    defined: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class RegionSummary:
    """One region: its verdict and statistics by column name (`principal_strain_1`, `equivalent_strain` ...).

    `trust` tells how far to trust the extremes of the statistics, see `trusted`; `error_percent` is the estimated global
    error of each `strain_error` that was asked for.
    """

    region: Region
    verdict: Verdict
    trials: tuple[Trial, ...]
    volume: float
    statistics: dict[str, Statistics]
    error_percent: dict[str, float] = field(default_factory=dict)
    trust: Trusts = field(default_factory=dict)

    def plus_minus(self, name: str, which: Which) -> float:
        """Return the bound of an extreme's error; NaN where it is not known."""
        return self.trust[name, which].plus_minus if (name, which) in self.trust else math.nan


@dataclass(frozen=True, eq=False)
class Summary:
    """Everything the summary of one step holds."""

    fields: CellFields
    options: SummaryOptions
    regions: tuple[RegionSummary, ...]
    numbers: Numbering | None
    agreements: tuple[Agreement, ...]
    warnings: tuple[str, ...]
    other_dimensions: dict[int, int]
    removals: tuple[Removal, ...] = ()
    request: dict[str, Any] = field(default_factory=dict)
    elsewhere: Elsewhere | None = None
    growths: tuple[Growth, ...] = ()

    @property
    def finite_only(self) -> bool:
        """Whether every strain among the arrays is a finite measure."""
        strains = [MEASURES[n] for n in self.fields.arrays if n in MEASURES and MEASURES[n].unit == "strain"]
        return bool(strains) and all(m.finite or m.name == "small_strain_error" for m in strains)


def summarise(
    computed: Computed, options: SummaryOptions | None = None, threads: int | None = None
) -> Summary:
    """Return the summary of computed fields.

    Parameters
    ----------
    computed
        Computed with ``diagnose=True``.
    options
        See `SummaryOptions`.
    threads
        None: all processors.

    Raises
    ------
    UsageError
        A region that does not exist.
    """
    options = options or SummaryOptions()
    fields = computed.fields
    d = fields.diagnostics
    assert d is not None
    groups, regions = _regions(fields.model, d, options)
    columns = _columns(fields, d, options.full)
    made: list[RegionSummary] = []
    counted_regions: list[Region] = []
    for region in regions:
        cells = region.cells[d.dimension[region.cells] == d.dimension[region.cells].max()]
        found = {
            name: statistics(c.values, d.volume, cells, _percentages(name, c.signed, options.full))
            for name, c in columns.items()
        }
        counted = Region(region.name, cells, region.origin)
        verdict = judge(d, counted, options.solve, options.mode)
        trials: list[Trial] = []
        # what is tried takes the displacement for that of a motion from the undeformed state
        whole_motion = not computed.removals and "zero_step" not in computed.request
        if verdict.level == "does not hold" and options.solve != "linear" and whole_motion:
            trials = try_remedies(fields, counted, options.solve, {"at": options.at, "threads": threads})
        counted_regions.append(counted)
        errors = {} if computed.estimates is None else computed.estimates.errors
        percent = {name: error.percentage(cells) for name, error in errors.items()}
        volume = float(np.nansum(d.volume[cells]))
        made.append(RegionSummary(region, verdict, tuple(trials), volume, found, percent))
    made, grown = _trusted(computed, columns, counted_regions, made, groups, options.full, threads)
    numbers = element_numbers(fields.model.result)
    elsewhere = find_elsewhere(
        computed, counted_regions, None if numbers is None else numbers.numbers, threads, groups
    )
    others = {
        int(k): int((d.dimension == k).sum())
        for k in np.unique(d.dimension)
        if 0 < k < fields.model.dimension
    }
    return Summary(
        fields,
        options,
        tuple(made),
        numbers,
        # the solver's strain is measured from the undeformed state, not from a zero step
        () if "zero_step" in computed.request else tuple(compare_with_solver(fields, threads)),
        (*_warnings(fields, d, made), *_beyond_linear(computed.removals, made)),
        others,
        computed.removals,
        computed.request,
        elsewhere,
        (*grown, *(elsewhere.growths if elsewhere is not None else ())),
    )


def _regions(model: Model, d: CellDiagnostics, options: SummaryOptions) -> tuple[list[Region], list[Region]]:
    """Return the regions of all computed cells, and those of the summary: named, or of the highest dimension."""
    every = find_regions(model, d.dimension > 0)
    if options.regions:
        defined = options.defined
        of_file = named_regions(
            model, [n for n in options.regions if n not in defined], d.dimension > 0, every
        )
        found = {r.name: r for r in of_file} | {n: Region(n, cells, "plan") for n, cells in defined.items()}
        return every, [found[n] for n in options.regions]
    judged = d.dimension == model.dimension
    return every, every if (judged == (d.dimension > 0)).all() else find_regions(model, judged)


def _trusted(
    computed: Computed,
    columns: dict[str, Column],
    counted: list[Region],
    made: list[RegionSummary],
    groups: list[Region],
    full: bool,
    threads: int | None,
) -> tuple[list[RegionSummary], list[Growth]]:
    """Return the summaries of the regions with how far to trust their extremes, and what is suspected of these."""
    shown = range(len(made)) if full else [k for k, r in enumerate(made) if r in foremost(made)]
    found = [(counted[k], made[k].statistics) for k in shown]
    trusts = trusted(computed, columns, found, groups, full, threads)
    made = made.copy()
    for k, trust in zip(shown, trusts):
        made[k] = replace(made[k], trust=trust)
    return made, growths(computed, found, trusts)


MOST_SHOWN = 5
"""Regions that the table shows."""


def foremost(regions: Sequence[RegionSummary], most: int = MOST_SHOWN) -> Sequence[RegionSummary]:
    """Return the regions of the table: of many those with the largest peaks, largest first."""
    if len(regions) <= MOST_SHOWN:
        return regions
    return sorted(regions, key=lambda r: -_peak(r))[:most]


def leading(r: RegionSummary) -> str:
    """Return the name of the number by which a region is ranked: its equivalent strain, of whatever base."""
    names = [n for n in r.statistics if n.startswith("equivalent_strain") and n not in SERIES_MEASURES]
    first = [*names, "principal_strain_1", "angle_of_turn"]
    return next(n for n in first if n in r.statistics)


def _peak(r: RegionSummary) -> float:
    value = r.statistics[leading(r)].maximum
    return value if math.isfinite(value) else -1.0


def _percentages(name: str, signed: bool, full: bool) -> Sequence[float]:
    if full:
        return (*LOW_PERCENTILES, *PERCENTILES) if signed else PERCENTILES
    if name in SERIES_MEASURES:
        return ()
    return (99.9,) if name.startswith("equivalent_strain") or name == "principal_strain_1" else ()


def _columns(fields: CellFields, d: CellDiagnostics, full: bool) -> dict[str, Column]:
    """Return every number that gets statistics."""
    columns: dict[str, Column] = {}
    for name, values in fields.arrays.items():
        measure = MEASURES.get(name) or SERIES_MEASURES.get(name)
        signed = measure is not None and measure.signed
        if name.startswith("principal_direction") or name == "displacement_gradient":
            continue
        if values.ndim == 1:
            columns[name] = Column(values, signed, name)
            continue
        labels = fields.components.get(name, ())
        principal = name.startswith("principal_strain")
        for k, component in enumerate(labels):
            if full or (principal and k != 1) or (name == "strain" and _third_unknown(fields.model)):
                columns[f"{name}_{component}"] = Column(values[:, k], signed, name)
    small = any(
        not MEASURES[n].finite and MEASURES[n].unit == "strain" for n in fields.arrays if n in MEASURES
    )
    if small and not _third_unknown(fields.model):
        for k, end in enumerate(("1", "3")):
            columns[f"principal_strain_{end}"] = Column(d.principal[:, k], True, "principal_strain")
    if any(MEASURES[n].finite for n in fields.arrays if n in MEASURES):
        columns["det_f"] = Column(d.det_f, True, "det_f")
        for k, end in enumerate(("1", "3")):
            columns[f"stretch_{end}"] = Column(d.stretches[:, k], True, "stretch")
    columns["angle_of_turn"] = Column(d.angle, False, "angle_of_turn")
    return columns


def _third_unknown(model: Model) -> bool:
    return model.plane is not None and model.plane.model is None


def _warnings(fields: CellFields, d: CellDiagnostics, regions: list[RegionSummary]) -> list[str]:
    found = []
    strained = [r for r in regions if r.verdict.level != "no strain"]
    sizes = [r.verdict.size for r in strained if math.isfinite(r.verdict.size)]
    largest = max(sizes, default=math.nan)
    if largest > 0.5:
        found.append(
            f"strain of {largest:.3g} (99 % of the volume below) is rubber or a wrong unit: check --displacement-scale"
        )
    elif 0 < largest < 1e-8:
        found.append(
            f"strain of {largest:.3g} is very small: check the unit of the displacement, --displacement-scale"
        )
    inside_out = int((d.det_f <= 0).sum())
    if inside_out:
        found.append(
            f"{inside_out} cells are turned inside out (det F <= 0): a wrong unit or sign of the displacement, "
            "coordinates that are already deformed (--coordinates deformed), or a failed solve"
        )
    for r in strained:
        if 0 < r.verdict.size < 20 * r.verdict.noise:
            found.append(
                f"{r.region.name}: the stored precision blurs the strain by +-{_micro(r.verdict.noise)} microstrain, "
                f"and 99 % of the volume is below {_micro(r.verdict.size)}: write the result with more digits"
            )
    together = unused_tags(fields.model.result) or judged_together([r.region for r in regions])
    return [*found, together] if together else found


def _beyond_linear(removals: Sequence[Removal], regions: list[RegionSummary]) -> list[str]:
    """Return warnings where a linearised turn stretches lengths by what the strain cannot bear."""
    found = []
    for r in removals:
        turn = float(np.linalg.norm(r.motion.rotation))
        stretched = math.hypot(1.0, turn) - 1.0
        sizes = [s.verdict.size for s in regions if r.applied in (s.region.name, "whole")]
        if r.motion.fit == "linearised" and any(stretched > BROKEN * size > 0 for size in sizes):
            found.append(
                f"{r.applied} turns by {math.degrees(turn):.3g} degrees; in a linear solve that stretches lengths by "
                f"{stretched * 1e6:.3g} microstrain, and taking it out does not bring the solve into range"
            )
    return found


def _micro(value: float) -> str:
    return f"{float(f'{value * 1e6:.2g}'):g}"


def summary_data(summary: Summary) -> dict[str, Any]:
    """Return the summary as plain data for JSON, schema ``unturn.summary/1`` (docs/summary-json.md)."""
    fields, options = summary.fields, summary.options
    model = fields.model
    result = model.result
    plane = model.plane
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "file": result.path,
        "format": result.format_name,
        "step": None
        if result.steps is None
        else {
            "index": result.steps.current,
            "count": len(result.steps.values),
            "value": result.steps.values[result.steps.current],
        },
        "mesh": {
            "points": result.n_points,
            "cells": result.n_cells,
            "types": cell_counts(model),
            "kind": mesh_kind(model),
            "plane": None
            if plane is None
            else {"normal": "xyz"[plane.normal], "assumption": plane.model, "poisson": plane.poisson,
                  "axis": "xyz"[plane.axis] if plane.model == "axisymmetric" else None},
        },
        "displacement": {"array": model.displacement.name, "why": model.displacement.why},
        "solve": options.solve,
        "mode_shape": options.mode,
        "location": options.at,
        "equivalent_strain": equivalent_form(options.equivalent_poisson),
        "measures": list(fields.arrays),
        "components": {name: list(labels) for name, labels in fields.components.items()},
        "request": summary.request,
        "regions": [_region_data(r, summary) for r in summary.regions],
        "solver_strain": [
            {"array": a.array, "association": a.association, "difference": a.difference, "read_as": a.guess,
             "agrees": a.agrees}
            for a in summary.agreements
        ],
        "suspected_singular": [_growth_data(g, summary) for g in summary.growths],
        "elsewhere": _elsewhere_data(summary.elsewhere),
        "rigid_motion_taken_out": [_removal_data(r) for r in summary.removals],
        "left_out": {reason: len(cells) for reason, cells in fields.left_out.items()},
        "other_dimensions": {f"{k}D": n for k, n in summary.other_dimensions.items()},
        "notes": list(fields.notes),
        "warnings": list(summary.warnings),
        "units": {"strain": "1", "rotation": "radian", "rate": "1/time of the file", "angle_of_turn": "radian",
                  "volume": "length unit of the file"},
        "caution": CAUTION,
    }  # fmt: skip


def _region_data(r: RegionSummary, summary: Summary) -> dict[str, Any]:
    v = r.verdict
    return {
        "name": r.region.name,
        "origin": r.region.origin,
        "cells": len(r.region.cells),
        "volume": r.volume,
        "verdict": {
            "small_strain": v.level,
            "size": v.size,
            "noise_floor": v.noise,
            "largest_error_over_size": v.worst,
            "largest_error_at": _place(v.worst_cell, summary, v.size),
            "share_above_1_percent": v.share_marginal,
            "share_above_10_percent": v.share_broken,
            "largest_rotation_degrees": v.largest_rotation,
            "action": v.action,
            "tried": [
                {
                    "option": t.option,
                    "error_left_over_size": t.left,
                    "largest_equivalent": t.peak,
                    "small_strain": t.level,
                }
                for t in r.trials
            ],
        },
        "estimated_error_percent": r.error_percent,
        "statistics": {name: _statistics_data(name, r, summary) for name in r.statistics},
    }


def _elsewhere_data(found: Elsewhere | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "location": found.title,
        "extremes": [
            {
                "region": e.region, "statistic": e.label, "array": e.array, "value": e.value, "plus_minus": e.plus_minus,
                "place": e.place, "at": list(e.at),
            }
            for e in found.extremes
        ],
        "estimated_error_percent": found.error_percent or {},
        "largest_jump_at_border": None if found.border is None else _border_data(found.border),
        "notes": list(found.notes),
    }  # fmt: skip


def _border_data(border: Border) -> dict[str, Any]:
    jump = border.jump
    return {
        "value": jump.value, "regions": list(jump.regions), "point": jump.point, "node": border.node, "at": list(border.at),
    }  # fmt: skip


def _growth_data(g: Growth, summary: Summary) -> dict[str, Any]:
    def element(cell: int) -> int | None:
        return None if summary.numbers is None or cell < 0 else int(summary.numbers.numbers[cell])

    t = g.trust
    return {
        "location": g.location,
        "region": g.region,
        "statistic": g.label,
        "array": g.array,
        "extreme": g.which,
        "cell": g.cell,
        "element": element(g.cell),
        "value": g.value,
        "plus_minus": t.plus_minus,
        "point": t.point,
        "node": g.node,
        "growth": t.growth,
        "next": None
        if t.next_cell < 0
        else {
            "cell": t.next_cell,
            "element": element(t.next_cell),
            "value": t.next_value,
            "plus_minus": t.next_plus_minus,
        },
    }


def _removal_data(r: Removal) -> dict[str, Any]:
    return {
        "fitted_over": r.fitted,
        "taken_out_of": r.applied,
        "fit": r.motion.fit,
        "translation": r.motion.translation.tolist(),
        "rotation_vector_degrees": np.degrees(r.motion.rotation).tolist(),
        "center": r.motion.center.tolist(),
        "residual_rms": r.motion.residual,
        "residual_rms_of_other_fit": None if r.other is None else r.other.residual,
    }


def _trust_data(name: str, which: Which, r: RegionSummary) -> dict[str, Any]:
    known = r.trust.get((name, which))
    if known is None:
        return {"plus_minus": None, "suspected_singular": False}
    return {"plus_minus": known.plus_minus, "suspected_singular": known.singular}


def _statistics_data(name: str, r: RegionSummary, summary: Summary) -> dict[str, Any]:
    s, size = r.statistics[name], r.verdict.size
    return {
        "count": s.count,
        "left_out": s.left_out,
        "mean": s.mean,
        "maximum": {
            "value": s.maximum,
            **_trust_data(name, "maximum", r),
            **_place(s.at_maximum, summary, size),
        },
        "minimum": {
            "value": s.minimum,
            **_trust_data(name, "minimum", r),
            **_place(s.at_minimum, summary, size),
        },
        "percentiles": {f"{q:g}": value for q, value in s.percentiles.items()},
    }


def _place(cell: int, summary: Summary, size: float) -> dict[str, Any]:
    if cell < 0:
        return {"cell": None, "element": None, "at": None, "error_over_size": None}
    d = summary.fields.diagnostics
    assert d is not None
    number = None if summary.numbers is None else int(summary.numbers.numbers[cell])
    return {
        "cell": cell,
        "element": number,
        "at": [float(x) for x in d.centroid[cell]],
        "error_over_size": float(d.error[cell] / size) if size > 0 else None,
    }


def cell_counts(model: Model) -> dict[str, int]:
    """Return the number of cells of each type."""
    counts: dict[str, int] = {}
    for block in model.result.blocks:
        counts[block.cell_type] = counts.get(block.cell_type, 0) + len(block)
    return counts


def mesh_kind(model: Model) -> str:
    """Return ``solid``, ``plane``, ``surface`` or ``line`` of the highest dimension."""
    return next(b.kind for b in model.blocks if b.row is not None and b.row.dim == model.dimension) or ""


def equivalent_form(poisson: float | None) -> str:
    """Return the form of the equivalent strain in words."""
    if poisson is None:
        return "sqrt(2/3 e':e') of the total strain"
    return f"1/(1+{poisson:g}) times the norm of the principal differences of the total strain"


CAUTION = (
    "As good as the solve, the mesh and the loads behind it; no release. "
    "Limits come from the governing code and a licensed engineer."
)
