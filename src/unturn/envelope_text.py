"""What an envelope says, as text for people."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import PurePath

from unturn.envelope_arrays import RANGE
from unturn.envelope_extremes import foremost, in_table, unit_of
from unturn.envelope_json import element_of, place_data
from unturn.measures import MEASURES
from unturn.numbering import node_numbers
from unturn.series import SERIES_MEASURES
from unturn.states import Envelope, Extreme
from unturn.summary import CAUTION, cell_counts, equivalent_form
from unturn.summary_text import (
    _FINITE_ONLY,
    _PLUS_MINUS,
    _above,
    _advice,
    _aligned,
    _bounded,
    _micro,
    _of_its_strain,
    _one_digit,
    _point,
)
from unturn.trusted import BASE_WORDS, node_of

_MOST_FAILURES = 5


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
        return [*lines, *_advice(_FINITE_ONLY[envelope.options.strain.solve])]
    for action, names in actions.items():
        lines += _advice(f"{', '.join(names)}: {action}")
    return lines


def _finite_only(envelope: Envelope) -> bool:
    """Whether every strain among the measures is a finite one; those of a linear solve are refused before."""
    rows = [MEASURES[t.measure] for t in envelope.tracked if t.measure in MEASURES]
    strains = [m for m in rows if m.unit == "strain"]
    return bool(strains) and all(m.finite for m in strains)


def _table(envelope: Envelope) -> list[str]:
    shown = foremost(envelope)
    regions = [envelope.judged[k].region.name for k in shown]
    columns = [[e for e in envelope.extremes[k] if in_table(envelope, e)] for k in shown]
    strained = any(unit_of(e.of.measure) == "strain" for column in columns for e in column)
    rows = [["microstrain" if strained else "", *regions]]
    for row in zip(*columns):
        rows.append([_label(row[0]), *(_value(e) for e in row)])
        rows.append(["  where", *(_where(envelope, e.place) for e in row)])
        rows.append(["  at x, y, z", *(_at(envelope, e.place) for e in row)])
        if row[0].of.made_by:
            rows.append(["  " + envelope.options.kind, *(_states(envelope, e) for e in row)])
        if row[0].name.startswith("equivalent_strain"):
            percentiles = [_micro(e.percentile) for e in row]
            rows.append(["  99.9 % of volume below", *percentiles])
    lines = _aligned(rows)
    rest = len(envelope.judged) - len(shown)
    if rest > 0:
        lines.append(f"{rest} more regions with smaller peaks: all are in --json; --region NAME shows one")
    named = zip(regions, columns)
    return lines + [_growth(envelope, name, e) for name, column in named for e in column if e.trust.singular]


def _growth(envelope: Envelope, region: str, e: Extreme) -> str:
    """Return a line for a peak that is suspected singular."""
    t, kind = e.trust, envelope.options.kind
    node = node_of(node_numbers(envelope.model.result), t.point)
    said = f"suspected singular, {region}: {_label(e)} keeps growing towards {_point(t.point, node)}"
    if len(e.states) > 1:
        return said
    if t.next_cell < 0:
        return f"{said}; none is found away from it in that {kind}"
    place = _spot(("cell", t.next_cell), ("element", element_of(envelope, t.next_cell)))
    at_centroids = " at centroids" if envelope.places.on == "point" else ""
    after = _with_bound(e.of.measure, t.next_value, t.next_plus_minus)
    return f"{said}; next away from it in that {kind}{at_centroids} {after} in {place}"


_WORDS = {
    "equivalent_strain": "equivalent",
    "max_shear_strain": "max shear",
    "volumetric_strain": "volumetric",
}
"""Shorter words for some measures, as in the summary of `unturn strain`."""


def _label(e: Extreme) -> str:
    measure = e.of.measure
    ending = max((b for b in BASE_WORDS if measure.endswith(b)), key=len)
    stem, base = measure.removesuffix(ending), BASE_WORDS[ending]
    if stem == RANGE:
        return f"equivalent of the largest change{base}"
    which = "largest" if e.of.which == "maximum" else "smallest"
    if stem == "principal_strain":
        return f"{which} principal{base}"
    unit = {"strain": "", "1": ""}.get(unit_of(measure), f", {unit_of(measure)}")
    component = f" {e.component}" if e.component else ""
    return f"{_WORDS.get(stem, stem.replace('_', ' '))}{component}, {which}{base}{unit}"


def _value(e: Extreme) -> str:
    return _with_bound(e.of.measure, e.value, e.trust.plus_minus)


def _with_bound(measure: str, value: float, plus_minus: float) -> str:
    """Return a value in the unit of the table, with its bound; changes between steps have none."""
    strain = unit_of(measure) == "strain"
    if not math.isfinite(value) or measure in SERIES_MEASURES:
        return _micro(value) if strain else f"{value:.4g}" if math.isfinite(value) else "-"
    return _bounded(value, plus_minus) if strain else f"{value:.4g} +-{_above(plus_minus, 1e-12)}"


def _where(envelope: Envelope, place: int) -> str:
    if place < 0:
        return "-"
    found = place_data(envelope, place)
    ours, theirs = ("point", "node") if envelope.places.on == "point" else ("cell", "element")
    return _spot((ours, found[ours]), (theirs, found[theirs]))


def _spot(ours: tuple[str, int], theirs: tuple[str, int | None]) -> str:
    own = f"{ours[0]} {ours[1]}"
    return own if theirs[1] is None else f"{theirs[0]} {theirs[1]} ({own})"


def _at(envelope: Envelope, place: int) -> str:
    return "-" if place < 0 else ", ".join(f"{x:.5g}" for x in envelope.places.at[place])


def _states(envelope: Envelope, e: Extreme) -> str:
    named = [_state(envelope, k) for k in e.states]
    return " and ".join(named) if named else "-"


def _tail(envelope: Envelope) -> list[str]:
    strain = envelope.options.strain
    kind, n = envelope.options.kind, len(envelope.states) - 1
    places = {"centroid": "element centroids", "mean": "element means over the volume"}
    place = places.get(strain.at, f"nodes, recovered ({strain.recovery}), never across regions")
    lines = [
        _PLUS_MINUS,
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
