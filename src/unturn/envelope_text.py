"""What an envelope says: as data for JSON, and as text for people."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import PurePath
from typing import Any

import numpy as np

from unturn._version import __version__
from unturn.envelope_arrays import RANGE
from unturn.measures import MEASURES
from unturn.series import SERIES_MEASURES
from unturn.states import Envelope, Judged, Tracked
from unturn.statistics import statistics
from unturn.summary import CAUTION, cell_counts, equivalent_form, mesh_kind
from unturn.summary_text import FINITE_ONLY, _advice, _aligned, _micro, _of_its_strain, _one_digit
from unturn.trusted import BASE_WORDS

SCHEMA = "unturn.envelope/1"
_MOST_COLUMNS = 5
_MOST_FAILURES = 5


@dataclass(frozen=True)
class _Peak:
    """The extreme of one number over a region, and the states that made it there."""

    of: Tracked
    component: str
    value: float
    place: int  # -1: none
    states: tuple[int, ...]
    percentile: float  # 99.9 % of the volume below; NaN for smallest values

    @property
    def name(self) -> str:
        """The number: its measure and component."""
        return self.of.measure + (f"_{self.component}" if self.component else "")


def _peaks(envelope: Envelope, region: Judged) -> Iterator[_Peak]:
    """Yield the extremes of a region over its places and the states."""
    places = envelope.places
    own = places.of(region.region.cells)
    for of in envelope.tracked:
        values = np.asarray(of.values, dtype=np.float64).reshape(places.n, -1)
        upper = of.which == "maximum"
        for c, label in enumerate(envelope.components.get(of.array, ("",))):
            s = statistics(values[:, c], places.weight, own, (99.9,) if upper else ())
            value, place = (s.maximum, s.at_maximum) if upper else (s.minimum, s.at_minimum)
            made_by = [states.reshape(places.n, -1) for states in of.made_by]
            states = tuple(int(at[place, c]) for at in made_by) if place >= 0 else ()
            yield _Peak(of, label, value, place, states, s.percentiles.get(99.9, math.nan))


def _unit(name: str) -> str:
    if name.startswith(RANGE):
        return "strain"
    return SERIES_MEASURES[name].unit if name in SERIES_MEASURES else MEASURES[name].unit


def envelope_data(envelope: Envelope, files: Sequence[str]) -> dict[str, Any]:
    """Return the envelope as plain data, schema ``unturn.envelope/1``: extremes by region, not the arrays."""
    model, strain = envelope.model, envelope.options.strain
    result = model.result
    return {
        "schema": SCHEMA,
        "tool": {"name": "unturn", "version": __version__},
        "files": list(files),
        "kind": envelope.options.kind,
        "states": [
            {
                "number": k,
                "name": s.name,
                "time": s.time,
                "factors": None if s.factors is None else dict(s.factors),
                "failed": str(envelope.failures[k]) if k in envelope.failures else None,
            }
            for k, s in enumerate(envelope.states)
        ],
        "mesh": {
            "points": result.n_points,
            "cells": result.n_cells,
            "types": cell_counts(model),
            "kind": mesh_kind(model),
        },
        "displacement": model.displacement.name,
        "solve": strain.solve,
        "location": strain.at,
        "equivalent_strain": equivalent_form(strain.equivalent_poisson),
        "arrays": list(envelope.arrays),
        "regions": [_region_data(envelope, r) for r in envelope.judged],
        "left_out": {reason: len(cells) for reason, cells in envelope.left_out.items()},
        "notes": list(envelope.notes),
        "units": {"strain": "1", "rotation": "radian", "rate": "1 / time of the file", "volume": "length of the file"},
        "caution": CAUTION,
    }  # fmt: skip


def _region_data(envelope: Envelope, r: Judged) -> dict[str, Any]:
    cells, v = r.region.cells, r.verdict
    found: dict[str, Any] = {}
    for p in _peaks(envelope, r):
        place = _place(envelope, p.place)
        times = [envelope.states[k].time for k in p.states]
        entry = {"value": p.value, **place, "states": list(p.states), "times": times}
        if p.of.which == "maximum":
            entry["99.9_percent_of_volume_below"] = p.percentile
        found.setdefault(p.name, {})[p.of.which] = entry
    return {
        "name": r.region.name,
        "origin": r.region.origin,
        "cells": len(cells),
        "volume": float(np.nansum(envelope.volume[cells])),
        "verdict": {
            "small_strain": v.level,
            "state": r.state,
            "largest_error_over_size": v.worst,
            "largest_rotation_degrees": v.largest_rotation,
            "action": v.action,
        },
        "noise_floor": v.noise,
        "extremes": found,
    }


def _place(envelope: Envelope, place: int) -> dict[str, Any]:
    found: dict[str, Any] = dict.fromkeys(("cell", "element", "point", "node", "at"))
    if place >= 0:
        position = int(envelope.places.position[place])
        ours, theirs = ("point", "node") if envelope.places.on == "point" else ("cell", "element")
        found[ours] = position
        if envelope.numbers is not None:
            found[theirs] = int(envelope.numbers.numbers[position])
        found["at"] = [float(x) for x in envelope.places.at[place]]
    return found


def envelope_text(envelope: Envelope, files: Sequence[str]) -> str:
    """Return the envelope as text, without a line end."""
    lines = [*_head(envelope, files), *_verdicts(envelope), "", *_table(envelope), *_tail(envelope)]
    return "\n".join(lines)


def _head(envelope: Envelope, files: Sequence[str]) -> list[str]:
    model, kind = envelope.model, envelope.options.kind
    times = [s.time for s in envelope.states if s.time is not None]
    names = [PurePath(f).name for f in files]
    n = len(envelope.states)
    what = "combination" if envelope.states[0].factors is not None else kind
    shown = names[0] + (f" and {len(names) - 1} more" if len(names) > 1 else "")
    parts = [shown, f"{n} {what}{'s' * (n != 1)}" + (f", t = {times[0]:g} to {times[-1]:g}" if times else "")]
    types = ", ".join(f"{m} {name}" for name, m in cell_counts(model).items())
    parts += [f"{model.result.n_cells} cells ({types})", f"displacement '{model.displacement.name}'"]
    lines = ["   ".join(parts)]
    for number, error in list(envelope.failures.items())[:_MOST_FAILURES]:
        lines.append(f"FAILED, left out: {_state(envelope, number)}: {error}")
    if len(envelope.failures) > _MOST_FAILURES:
        lines.append(f"FAILED, left out: {len(envelope.failures) - _MOST_FAILURES} more, all in --json")
    return lines


def _state(envelope: Envelope, number: int) -> str:
    if number < 0:
        return "-"
    state = envelope.states[number]
    return state.name + (f" (t = {state.time:g})" if state.time is not None else "")


def _verdicts(envelope: Envelope) -> list[str]:
    lines = [f"small strain, worst {'step' if envelope.options.kind == 'step' else 'case'} of each region"]
    rows = []
    actions: dict[str, list[str]] = {}
    for r in envelope.judged:
        v = r.verdict
        level = v.level if v.level in ("holds", "no strain", "not judged") else v.level.upper()
        error = f"error up to {_of_its_strain(v.worst)}" if math.isfinite(v.worst) else ""
        turns = f"turns up to {v.largest_rotation:.3g} degrees" if math.isfinite(v.largest_rotation) else ""
        rows.append([f"  {r.region.name}", level, _state(envelope, r.state), error, turns])
        if v.action:
            actions.setdefault(v.action, []).append(r.region.name)
    lines += _aligned(rows, left=True)
    if _finite_only(envelope):
        return [*lines, *_advice(FINITE_ONLY[envelope.options.strain.solve])]
    for action, names in actions.items():
        lines += _advice(f"{', '.join(names)}: {action}")
    return lines


def _finite_only(envelope: Envelope) -> bool:
    """Whether every strain among the measures is a finite one; those of a linear solve are refused before."""
    rows = [MEASURES[t.measure] for t in envelope.tracked if t.measure in MEASURES]
    strains = [m for m in rows if m.unit == "strain"]
    return bool(strains) and all(m.finite for m in strains)


def _table(envelope: Envelope) -> list[str]:
    by_region = [(r, [p for p in _peaks(envelope, r) if _in_table(envelope, p)]) for r in envelope.judged]
    rest = len(by_region) - _MOST_COLUMNS
    if rest > 0:
        by_region = sorted(by_region, key=lambda pair: -_leading(pair[1]))[:_MOST_COLUMNS]
    strained = any(_unit(p.of.measure) == "strain" for _, peaks in by_region for p in peaks)
    rows = [["microstrain" if strained else "", *(r.region.name for r, _ in by_region)]]
    for row in zip(*(peaks for _, peaks in by_region)):
        rows.append([_label(row[0]), *(_value(p) for p in row)])
        rows.append(["  where", *(_where(envelope, p.place) for p in row)])
        rows.append(["  at x, y, z", *(_at(envelope, p.place) for p in row)])
        if row[0].of.made_by:
            rows.append(["  " + envelope.options.kind, *(_states(envelope, p) for p in row)])
        if row[0].name.startswith("equivalent_strain"):
            percentiles = [_micro(p.percentile) for p in row]
            rows.append(["  99.9 % of volume below", *percentiles])
    lines = _aligned(rows)
    if rest > 0:
        lines.append(f"{rest} more regions with smaller peaks: all are in --json; --region NAME shows one")
    return lines


def _in_table(envelope: Envelope, p: _Peak) -> bool:
    """Whether a number is for people: scalars, outer principal values, components where there is nothing else."""
    measure, which = p.of.measure, p.of.which
    if measure.startswith("principal_strain"):
        return (p.component, which) in (("1", "maximum"), ("3", "minimum"))
    if not p.component:
        row = MEASURES.get(measure)
        return which == "maximum" or (row is not None and row.signed)
    only = not any(n.startswith(("equivalent", "principal")) for n in envelope.arrays)
    return only and math.isfinite(p.value)


def _leading(peaks: Sequence[_Peak]) -> float:
    found = [p.value for p in peaks if p.of.which == "maximum" and math.isfinite(p.value)]
    return max(found, default=-1.0)


_WORDS = {
    "equivalent_strain": "equivalent",
    "max_shear_strain": "max shear",
    "volumetric_strain": "volumetric",
}
"""Shorter words for some measures, as in the summary of `unturn strain`."""


def _label(p: _Peak) -> str:
    measure = p.of.measure
    ending = max((e for e in BASE_WORDS if measure.endswith(e)), key=len)
    stem, base = measure.removesuffix(ending), BASE_WORDS[ending]
    if stem == RANGE:
        return f"equivalent of the largest change{base}"
    which = "largest" if p.of.which == "maximum" else "smallest"
    if stem == "principal_strain":
        return f"{which} principal{base}"
    unit = {"strain": "", "1": ""}.get(_unit(measure), f", {_unit(measure)}")
    component = f" {p.component}" if p.component else ""
    return f"{_WORDS.get(stem, stem.replace('_', ' '))}{component}, {which}{base}{unit}"


def _value(p: _Peak) -> str:
    if _unit(p.of.measure) == "strain":
        return _micro(p.value)
    return f"{p.value:.4g}" if math.isfinite(p.value) else "-"


def _where(envelope: Envelope, place: int) -> str:
    if place < 0:
        return "-"
    found = _place(envelope, place)
    ours, theirs = ("point", "node") if envelope.places.on == "point" else ("cell", "element")
    own = f"{ours} {found[ours]}"
    return own if found[theirs] is None else f"{theirs} {found[theirs]} ({own})"


def _at(envelope: Envelope, place: int) -> str:
    return "-" if place < 0 else ", ".join(f"{x:.5g}" for x in envelope.places.at[place])


def _states(envelope: Envelope, p: _Peak) -> str:
    named = [_state(envelope, k) for k in p.states]
    return " and ".join(named) if named else "-"


def _tail(envelope: Envelope) -> list[str]:
    strain = envelope.options.strain
    kind, n = envelope.options.kind, len(envelope.states) - 1
    places = {"centroid": "element centroids", "mean": "element means over the volume"}
    place = places.get(strain.at, f"nodes, recovered ({strain.recovery}), never across regions")
    lines = [
        f"equivalent = {equivalent_form(strain.equivalent_poisson)}; values at {place}; shear is tensor shear",
        f"{kind}s in the arrays: zero-based position, 0 to {n}; -1 where nothing was computed",
    ]
    if any(name.startswith(RANGE) for name in envelope.arrays):
        lines.append(
            f"largest change: of the strain tensors of any two {kind}s, every pair considered; an invariant's own range "
            "is not a strain range"
        )
    left = ", ".join(f"{len(cells)} {reason}" for reason, cells in envelope.left_out.items())
    noise = max((r.verdict.noise for r in envelope.judged), default=math.nan)
    floor = "below 1e-6" if noise < 1e-12 else f"+-{_one_digit(noise * 1e6)}"
    precision = f"; stored precision {floor} microstrain" if math.isfinite(noise) else ""
    lines.append(f"never computed: {left or 'no cell'}{precision}")
    numbers = envelope.numbers
    what = "node" if envelope.places.on == "point" else "element"
    of = f"{what} numbers are those of '{numbers.name}'; " if numbers is not None else ""
    lines.append(f"{of}{envelope.places.on} = zero-based position in the file")
    lines += [f"note: {note}" for note in envelope.notes]
    lines.append(CAUTION)
    return lines
